"""The demo links for rooms with echoes, through every command: what is sent is received."""

import json
from pathlib import Path

import pytest
from typer.testing import CliRunner

from spatiq.cli.main import app

DEMO = Path(__file__).resolve().parents[2] / "captures_demo"
# Demo link, how to decide, subcarriers.
CASES = [
    ("silo_echoes", "auto", None),
    ("silo_echoes", "mmse", None),
    ("silo_prefix", "auto", None),
    ("silo_padding", "sequence", None),
    ("silo_padding", "mmse", None),
    ("silo_carriers", "auto", 48),
]


def program(*arguments):
    done = CliRunner().invoke(app, [str(a) for a in arguments])
    assert done.exit_code == 0, done.output
    return done.stdout


def measured(folder, name, snr_db, frames, *options):
    """A simulated recording with echoes, measured: the summary."""
    link, base = DEMO / f"{name}.link.toml", folder / f"{name}{snr_db}"
    program(
        "simulate", link, "--samples-per-symbol", 3.2, "--frames", frames, "--snr", snr_db,
        "--channel", "tdl-a", "--delay-spread", 0.8, "--receive-channels", 4, "--seed", 11,
        "--reference-ppm", 2.5, "--overwrite", "--out", base,
    )  # fmt: skip
    files = (base.with_suffix(".sigmf-meta"), link, "--out", base.with_suffix(".h5"), "--overwrite")
    return json.loads(program("measure", *files, "--json", "--channel", "dispersive", *options))


@pytest.mark.parametrize(("name", "equaliser", "subcarriers"), CASES)
def test_without_errors_at_high_snr(tmp_path, name, equaliser, subcarriers):
    summary = measured(tmp_path, name, 28, 6, "--equaliser", equaliser)
    assert summary["frames"]["found"] == 6
    assert summary["ber"]["errors"] == 0
    assert summary["ber"]["compared"] > 6 * 2000
    assert summary["crc"] == {"passed": 6, "failed": 0}
    assert len(summary["subcarriers"] or ()) == (subcarriers or 0)
    assert summary["evm"]["data_aided"]


def test_sequences_beat_linear_equalisation(tmp_path):
    """On the same noise, as the literature has it of channels with deep notches (Forney 1972)."""
    linear = measured(tmp_path, "silo_echoes", 7, 8, "--equaliser", "mmse")
    sequence = measured(tmp_path, "silo_echoes", 7, 8)
    assert sequence["ber"]["errors"] < 0.5 * linear["ber"]["errors"]


@pytest.mark.parametrize("name", sorted({case[0] for case in CASES}))
def test_explain_and_waveform(tmp_path, name):
    link = DEMO / f"{name}.link.toml"
    assert name.replace("_", " ") in program("link", "explain", link)
    rate = ("--samples-per-symbol", 4, "--frames", 2)
    program("waveform", link, *rate, "--out", tmp_path / "sent")
    assert len(list(tmp_path.glob("sent-tx*.sigmf-data"))) == 4
