"""`spatiq verify` on real files: report, JSON, HDF5, exit codes, refusals."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import h5py
import pytest
from acceptance_cases import BENCH, bench
from typer.testing import CliRunner

from spatiq.acceptance.limits import load_limits
from spatiq.acceptance.limits_manual import MANUAL, manual
from spatiq.cli.main import app
from spatiq.recording.writing import write_recording

STARTER = MANUAL.with_name("starter.limits.toml")


@pytest.fixture(scope="module")
def capture(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("bench")
    made = bench(frames=10)
    written = write_recording(
        folder / "bench", made.samples(), sample_rate=made.sample_rate, datatype=made.datatype
    )
    return written.meta_path


def _limits(folder: Path, text: str) -> Path:
    path = folder / "own.limits.toml"
    path.write_text("format = 1\n" + text, encoding="utf-8")
    return path


def _run(*arguments: object) -> tuple[int, str, str]:
    found = CliRunner().invoke(app, ["verify", *map(str, arguments)])
    return found.exit_code, found.stdout, found.stderr


def test_accepted_by_the_starter_limits(capture: Path, tmp_path: Path) -> None:
    code, out, _ = _run(
        capture, BENCH, STARTER, "--json-out", tmp_path / "a.json", "--out", tmp_path / "a.h5"
    )
    assert code == 0, out
    assert out.startswith("Transmitter ACCEPTED")
    assert len(out.splitlines()) < 90 and max(map(len, out.splitlines())) <= 100
    for part in ("cannot tell", "not a certificate", "evm_rms 0", "licence"):
        assert part in out
    made = json.loads((tmp_path / "a.json").read_text())
    assert made["verdict"] == "accepted" and made["frames"] == 10
    with h5py.File(tmp_path / "a.h5") as file:
        assert file.attrs["verdict"] == "accepted"
        names = file["figures/figure"].asstr()[:].tolist()
        assert names == [row["figure"] for row in made["figures"]]
        assert file["figures/value"][0] == made["figures"][0]["value"]
        assert len(file["judgements/decision"]) == len(made["judgements"])


@pytest.mark.parametrize(
    ("limit", "verdict"),
    [
        ('figure = "evm_rms"\nupper = 1', "not accepted"),
        ('figure = "carrier_error_hz"\nlower = -10\nupper = 10', "not accepted"),
        ('figure = "isolation_db"\nantenna = "each"\nlower = 15', "undecided"),
    ],
)
def test_refused_and_undecided(capture: Path, tmp_path: Path, limit: str, verdict: str) -> None:
    """Over the air, isolation cannot be measured: a limit on it leaves the verdict open."""
    limits = _limits(tmp_path, f"[[limit]]\n{limit}\n")
    code, out, _ = _run(capture, BENCH, limits, "--json")
    assert (code, json.loads(out)["verdict"]) == (1, verdict)


def test_ports_and_calibration(capture: Path, tmp_path: Path) -> None:
    """Receive gains are taken out of powers; isolation is of one channel, and does not change."""
    limits = _limits(tmp_path, '[[limit]]\nfigure = "isolation_db"\nantenna = "each"\nlower = 15')
    calibration = tmp_path / "gains.toml"
    calibration.write_text("format = 1\ngains = [[0, 2], [2, 0]]\n", encoding="utf-8")
    plain, calibrated = [capture, BENCH, limits, "--json"], ["--calibration", calibration]
    ported = ["--setup", "ports"]
    found = [json.loads(_run(*plain, *ported, *more)[1]) for more in ([], calibrated)]

    def value(made: dict[str, Any], name: str, subject: str) -> float:
        rows = made["figures"]
        (one,) = [r["value"] for r in rows if (r["figure"], r["subject"]) == (name, subject)]
        return float(one)

    for made in found:
        assert made["verdict"] == "accepted"
        assert value(made, "isolation_db", "0") == pytest.approx(20.0, abs=0.3)
        assert value(made, "isolation_db", "1") == pytest.approx(24.08, abs=0.3)
    change = value(found[1], "power_db", "0") - value(found[0], "power_db", "0")
    assert change == pytest.approx(-6.02, abs=0.01)


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("format = 2\ngains = [[1, 0], [1, 0]]", "format"),
        ("format = 1\ngains = [[1, 0]]", "2, one for each"),
        ("format = 1\ngains = [[1, 0], [0, 0]]", "gains[1]"),
        ("format = 1\ngains = [[1, 0], [true, 0]]", "gains[1]"),
        ("format = 1\ngain = 1\ngains = [[1, 0], [1, 0]]", "unknown key"),
        ("format = ", "TOML"),
    ],
)
def test_bad_calibration_is_one_line(capture: Path, tmp_path: Path, text: str, part: str) -> None:
    calibration = tmp_path / "gains.toml"
    calibration.write_text(text, encoding="utf-8")
    code, _, err = _run(capture, BENCH, STARTER, "--calibration", calibration)
    assert code == 2 and part in err and len(err.strip().splitlines()) == 1


def test_other_refusals(capture: Path, tmp_path: Path) -> None:
    for extra in (
        ["--setup", "antenna"],
        ["--out", tmp_path],
        ["--json-out", BENCH, "--overwrite"],
        ["--calibration", tmp_path / "none"],
    ):
        code, _, err = _run(capture, BENCH, STARTER, *extra)
        assert code == 2 and len(err.strip().splitlines()) == 1, err


def test_manual_and_starter_are_true() -> None:
    assert MANUAL.read_text(encoding="utf-8") == manual()
    assert load_limits(STARTER).name == "starter limits"


def test_demo_of_crossed_cables() -> None:
    """Made with antennas 1 and 2 exchanged in the payload (tools/make_demo.py)."""
    demo = Path(__file__).parents[2] / "captures_demo"
    code, out, _ = _run(
        demo / "hook_crossed.sigmf-meta",
        demo / "hook_crossed.link.toml",
        demo / "hook.limits.toml",
        "--setup",
        "combined",
    )
    assert code == 1
    assert out.startswith("Transmitter NOT ACCEPTED")
    assert "permuted between pilots and payload: 1 sent by 2, 2 sent by 1" in out
