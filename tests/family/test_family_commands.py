"""Every scheme through every command, from its demo link description: what is sent is received.

One recording a scheme, made by `spatiq simulate` at an SNR without errors, and one at an SNR with
some; errors are counted from the truth that the simulation states.
"""

from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from spatiq.cli.main import app
from spatiq.link.loading import load_link
from spatiq.results.reader import open_results
from spatiq.signal.codebooks import registered

DEMO = Path(__file__).resolve().parents[2] / "captures_demo"
LINKS = {
    "spatial-modulation": "hook_yard",
    "space-shift-keying": "gantry_keys",
    "generalised-spatial-modulation": "boom_pairs",
    "generalised-spatial-modulation, own symbols": "boom_streams",
    "generalised-space-shift-keying": "rope_keys",
    "quadrature-spatial-modulation": "winch_quadrature",
    "differential-spatial-modulation": "trolley_turns",
    "vector-table": "trolley_table",
}
FRAMES = 12
RATE = ("--samples-per-symbol", 3.7)


def program(*arguments):
    done = CliRunner().invoke(app, [str(a) for a in arguments])
    assert done.exit_code == 0, done.output
    return done.stdout


def recorded(folder, name, snr_db):
    """A simulated recording, measured: its results and the words sent, by frame."""
    link = DEMO / f"{LINKS[name]}.link.toml"
    base = folder / f"snr{snr_db}"
    program(
        "simulate", link, "--out", base, "--frames", FRAMES, "--snr", snr_db, "--seed", 7,
        *RATE, "--receive-channels", 4, "--cfo", 900,
        "--snr-reference", "frame", "--truth",
    )  # fmt: skip
    out = base.with_suffix(".h5")
    program("measure", base.with_suffix(".sigmf-meta"), link, "--out", out, "--symbols")
    truth = np.load(next(folder.glob(f"{base.name}*.npz")))
    return out, truth


def test_every_scheme_has_a_demo_link():
    schemes = {name.split(",")[0] for name in LINKS}
    assert schemes == set(registered())
    for name, file in LINKS.items():
        assert load_link(DEMO / f"{file}.link.toml").codebook.scheme == name.split(",")[0]


@pytest.mark.parametrize("name", LINKS)
def test_every_scheme_through_every_command(tmp_path, name):
    link = DEMO / f"{LINKS[name]}.link.toml"
    book = load_link(link).codebook
    assert book.scheme in program("link", "explain", link)
    program("waveform", link, "--out", tmp_path / "sent", "--frames", 2, *RATE)
    assert list(tmp_path.glob("sent*.sigmf-meta"))
    # Without errors: 32 dB in each frame, of which no scheme here needs more than 20.
    out, truth = recorded(tmp_path, name, 32)
    with open_results(out) as results:
        words, sent = results.words()
        summary = results.summary
        assert results.set_names == book.set_names
        np.testing.assert_array_equal(words, truth["words"])
        assert summary["frames"]["found"] == FRAMES
        if name == "space-shift-keying":  # the gantry's bits are its own
            assert summary["ber"] is None
            return
        np.testing.assert_array_equal(sent[sent >= 0], truth["words"][sent >= 0])
        known = int((sent >= 0).sum())
        assert summary["ber"]["errors"] == 0 and summary["ber"]["compared"] > 8 * known / 10
        counts = np.bincount(book.set_index[sent[sent >= 0]], minlength=len(book.antenna_sets))
        np.testing.assert_array_equal(results.confusion_total, np.diag(counts))
        assert summary["snr_db"]["mean"] == pytest.approx(32, abs=0.4)
        # EVM = 1 / sqrt(SNR): 2.512 %. Its relative spread is 1 / sqrt(4 * 2 * 4800) < 1 %.
        assert summary["evm"]["percent"] == pytest.approx(100 * 10 ** (-32 / 20), rel=0.04)
        assert summary["evm"]["data_aided"]


@pytest.mark.parametrize("name", [n for n in LINKS if n != "space-shift-keying"])
def test_errors_are_counted_as_the_truth_says(tmp_path, name):
    """At 7 dB some words are wrong: bits, sets and symbols are counted against the simulation."""
    book = load_link(DEMO / f"{LINKS[name]}.link.toml").codebook
    out, truth = recorded(tmp_path, name, 7)
    with open_results(out) as results:
        words, sent = (np.asarray(w, np.int64) for w in results.words())
        numbers = list(truth["frame_numbers"])
        rows = [numbers.index(n) for n in results.rows("frames/frame_number", 0, None)]
        true = truth["words"].astype(np.int64)[rows]
        known = sent >= 0
        np.testing.assert_array_equal(sent[known], true[known])
        confusion = np.zeros_like(results.confusion_total)
        pairs = book.set_index[true[known]], book.set_index[words[known]]
        np.add.at(confusion, pairs, 1)
        np.testing.assert_array_equal(results.confusion_total, confusion)
        assert confusion.sum() > np.trace(confusion) > 0
        wrong = book.words_to_bits(words) != book.words_to_bits(true)
        compared = load_link(DEMO / f"{LINKS[name]}.link.toml").payload.known_mask
        assert results.summary["ber"]["errors"] == wrong[:, compared].sum()
        # Predicted for these very channels; few errors, twelve channels: a rough guide only.
        measured = results.summary["ber"]["value"]
        assert 0.4 * measured < results.summary["predicted_ber"] < 2.5 * measured
        spatial = np.tile(book.spatial_bits, words.shape[1]) & compared
        if spatial.any():
            assert results.summary["ber_spatial"]["errors"] == wrong[:, spatial].sum()


@pytest.mark.parametrize("option", [("--llr", "exact"), ("--channel", "dispersive")])
def test_what_the_differential_form_does_not_have_is_refused(tmp_path, option):
    link = DEMO / "trolley_turns.link.toml"
    base = tmp_path / "run"
    program("simulate", link, "--out", base, "--frames", 2, *RATE)
    arguments = ["measure", base.with_suffix(".sigmf-meta"), link, *option]
    done = CliRunner().invoke(app, [str(a) for a in arguments])
    assert done.exit_code == 2
    assert "differential" in done.stderr and done.stderr.count("\n") == 1
    assert not list(tmp_path.glob("*.h5"))


def test_a_detector_that_cannot_decide_the_scheme_is_refused(tmp_path):
    link = DEMO / "boom_pairs.link.toml"
    base = tmp_path / "run"
    program("simulate", link, "--out", base, "--frames", 2, *RATE)
    arguments = ["measure", base.with_suffix(".sigmf-meta"), link, "--detector", "two-step"]
    done = CliRunner().invoke(app, [str(a) for a in arguments])
    assert done.exit_code == 2
    assert "one active antenna" in done.stderr and done.stderr.count("\n") == 1
    assert not list(tmp_path.glob("*.h5"))


def test_other_exact_detectors_count_the_same_errors(tmp_path):
    """Decisions are the same but for ties in single precision, of which there is none here."""
    link = DEMO / "winch_quadrature.link.toml"
    base = tmp_path / "run"
    program(
        "simulate", link, "--out", base, "--frames", 6, "--snr", 8, "--receive-channels", 2, *RATE
    )
    errors = []
    for name in ("maximum-likelihood", "tree-search"):
        out = tmp_path / f"{name}.h5"
        program("measure", base.with_suffix(".sigmf-meta"), link, "--out", out, "--detector", name)
        with open_results(out) as results:
            errors.append(results.summary["ber"]["errors"])
    assert errors[0] == errors[1] > 100
