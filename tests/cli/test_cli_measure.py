"""`spatiq measure` from the command line, on recordings that `spatiq simulate` makes."""

import csv
import json
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

from spatiq.cli import measuring
from spatiq.cli.main import app
from spatiq.link.loading import load_link
from spatiq.recording.opening import open_recording
from spatiq.results.reader import open_results

LINK = Path(__file__).with_name("bench.link.toml")
FRAMES = 30


def program(*arguments):
    return CliRunner().invoke(app, [str(a) for a in arguments])


@pytest.fixture(scope="module")
def recorded(tmp_path_factory):
    """A recording of 30 frames without an error at 30 dB SNR, and where its frames are."""
    folder = tmp_path_factory.mktemp("recorded")
    options = ["--frames", FRAMES, "--samples-per-symbol", 4, "--snr", 30, "--seed", 5]
    made = program("simulate", LINK, "--out", folder / "run", *options)
    assert made.exit_code == 0, made.stderr
    return folder


@pytest.fixture
def bench(recorded, tmp_path, monkeypatch):
    """The same in a folder of its own, which is the current one."""
    for path in recorded.iterdir():
        shutil.copy(path, tmp_path)
    shutil.copy(LINK, tmp_path)
    monkeypatch.chdir(tmp_path)
    return tmp_path


def names(folder):
    return {path.name for path in folder.iterdir()}


def test_measure_writes_what_was_asked_for_and_prints_the_tables(bench):
    before = {path.name: path.read_bytes() for path in bench.iterdir()}
    done = program(
        "measure", "run.sigmf-meta", LINK.name, "--csv", "--frames-json", "--annotations"
    )
    assert done.exit_code == 0, done.stderr
    made = names(bench) - before.keys()
    assert made == {
        "run.spatiq.h5",
        "run.frames.csv",
        "run.summary.csv",
        "run.frames.json",
        "run.annotated.sigmf-meta",
    }
    assert all((bench / name).read_bytes() == data for name, data in before.items())
    assert f" {FRAMES} of " in done.stdout
    assert "0 wrong of" in done.stdout
    assert all(name in done.stdout for name in made)
    with open_results("run.spatiq.h5") as results:
        assert results.count == FRAMES
        assert not results.column("bit_errors").any()
        assert results.column("bits_compared").all()
    with Path("run.frames.csv").open(newline="") as file:
        assert len(list(csv.reader(file))) == FRAMES + 1
    assert len(json.loads(Path("run.frames.json").read_text())["frames"]) == FRAMES
    annotations = json.loads(Path("run.annotated.sigmf-meta").read_text())["annotations"]
    assert len([a for a in annotations if a["core:label"].startswith("frame ")]) == FRAMES
    assert open_recording("run.annotated.sigmf-meta").n_samples > 0


def test_json_is_all_there_is_on_standard_output_and_equals_what_is_kept(bench):
    done = program("measure", "run", LINK.name, "--json")
    assert done.exit_code == 0, done.stderr
    summary = json.loads(done.stdout)
    assert summary["frames"]["found"] == FRAMES
    assert summary["ber"]["errors"] == 0
    shown = program("show", "run.spatiq.h5", "--json")
    assert json.loads(shown.stdout) == summary


def test_symbols_are_kept_on_request(bench):
    done = program("measure", "run", LINK.name, "--symbols", "--out", "with.h5", "--rows", 2)
    assert done.exit_code == 0, done.stderr
    assert f"{FRAMES - 2} more in with.h5" in done.stdout
    with open_results("with.h5") as results:
        decided, sent = results.words()
        assert decided.shape == (FRAMES, 256)
        assert (decided == sent).all()
        assert results.symbols().shape == (FRAMES, 256, 2)


@pytest.mark.parametrize("kind", ["exact", "max-log"])
def test_log_likelihood_ratios_are_kept_on_request(bench, kind):
    done = program("measure", "run", LINK.name, "--llr", kind, "--symbols", "--out", "with.h5")
    assert done.exit_code == 0, done.stderr
    with open_results("with.h5") as results:
        assert results.llr_kind == kind
        _, sent = results.words()
        llr, bits = results.llr(), load_link(LINK).codebook.words_to_bits(sent.astype(np.int64))
        assert llr.dtype == np.float32 and llr.shape == bits.shape
        # No bit is wrong at 30 dB: positive means 0.
        np.testing.assert_array_equal(llr < 0, bits == 1)
        assert json.loads(results.provenance["options"])["soft_output"] == kind


def test_an_unknown_kind_of_ratio_is_refused_in_one_line(bench):
    done = program("measure", "run", LINK.name, "--llr", "soft")
    assert done.exit_code == 2
    assert done.stderr == (
        "spatiq: receiver options: soft_output: found soft; expected none, exact, max-log\n"
    )
    assert "run.spatiq.h5" not in names(bench)


def test_noise_alone_is_measured_too(bench):
    # Expected false frames: 1e-10 per lag and carrier bin, 20,000 lags and less than 100 bins.
    rng = np.random.default_rng(11)
    noise = rng.normal(0, 1000, (20_000, 2, 2)).astype("<i2")
    noise.tofile("noise.sigmf-data")
    shutil.copy("run.sigmf-meta", "noise.sigmf-meta")
    document = json.loads(Path("noise.sigmf-meta").read_text())
    document["global"].pop("core:sha512", None)
    Path("noise.sigmf-meta").write_text(json.dumps(document))
    done = program("measure", "noise", LINK.name, "--csv", "--annotations", "--frames-json")
    assert done.exit_code == 0, done.stderr
    assert "No frame was found" in done.stdout
    with open_results("noise.spatiq.h5") as results:
        assert results.count == 0
        assert results.summary["frames"] == {
            "found": 0,
            "lost": 0,
            "expected": 0,
            "lost_by_reason": {},
        }
        assert results.summary["ber"] is None


def forbid_work(monkeypatch):
    def work(*_arguments, **_options):
        raise AssertionError("work began")

    monkeypatch.setattr(measuring, "measure", work)


@pytest.mark.parametrize(
    ("taken", "options"),
    [
        ("run.spatiq.h5", []),
        ("run.frames.csv", ["--csv"]),
        ("run.summary.csv", ["--csv"]),
        ("run.frames.json", ["--frames-json"]),
        ("run.annotated.sigmf-meta", ["--annotations"]),
        ("other.h5", ["--out", "other.h5"]),
        ("other.frames.csv", ["--out", "other.h5", "--csv"]),
    ],
)
def test_an_output_that_is_there_stops_the_command_before_the_work(
    bench, monkeypatch, taken, options
):
    forbid_work(monkeypatch)
    Path(taken).write_text("mine")
    before = names(bench)
    done = program("measure", "run", LINK.name, *options)
    assert done.exit_code == 2
    assert done.stderr.count("\n") == 1
    assert f"{taken}: found a file that is already there" in done.stderr
    assert done.stdout == ""
    assert Path(taken).read_text() == "mine"
    assert names(bench) == before


def test_overwrite_replaces_results_but_never_an_input(bench, monkeypatch):
    Path("run.spatiq.h5").write_text("old")
    assert program("measure", "run", LINK.name, "--overwrite").exit_code == 0
    with open_results("run.spatiq.h5") as results:
        assert results.count == FRAMES
    forbid_work(monkeypatch)
    for target in (LINK.name, "run.sigmf-meta", "run.sigmf-data"):
        before = Path(target).read_bytes()
        done = program("measure", "run", LINK.name, "--out", target, "--overwrite")
        assert done.exit_code == 2
        assert f"--out: found {target}, an input" in done.stderr
        assert Path(target).read_bytes() == before


def test_a_file_that_the_link_names_is_an_input_too(bench, monkeypatch):
    forbid_work(monkeypatch)
    Path("message.bin").write_bytes(bytes(100))
    field = 'type = "file"\nfile = "message.bin"\nbits = "rest"'
    text = LINK.read_text().replace('type = "prbs"\nname = "PRBS15"\nbits = "rest"', field)
    Path("with-file.link.toml").write_text(text)
    arguments = ["with-file.link.toml", "--out", "message.bin", "--overwrite"]
    done = program("measure", "run", *arguments)
    assert done.exit_code == 2
    assert "--out: found message.bin, an input" in done.stderr


def test_a_pager_that_is_left_early_is_no_fault_and_results_are_kept(bench):
    start = [sys.executable, "-c", "from spatiq.cli.main import run; run()"]
    assert program("measure", "run", LINK.name).exit_code == 0
    command = [*start, "show", "run.spatiq.h5", "--rows", "30"]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    assert process.stdout is not None
    assert process.stderr is not None
    process.stdout.close()
    assert process.stderr.read() == b""
    process.stderr.close()
    assert process.wait(timeout=60) == 0


def test_an_interrupted_measurement_leaves_nothing(bench, monkeypatch):
    whole = measuring.measure

    def interrupted(*arguments, **options):
        yield next(iter(whole(*arguments, **options)))
        raise KeyboardInterrupt

    monkeypatch.setattr(measuring, "measure", interrupted)
    before = names(bench)
    done = program("measure", "run", LINK.name, "--csv")
    assert done.exit_code == 130
    assert done.stderr == "spatiq: interrupted; unfinished files are removed\n"
    assert names(bench) == before


@pytest.mark.parametrize(
    ("recording", "link", "words"),
    [
        ("none", LINK.name, "none"),
        ("run", "none.toml", "none.toml: found No such file"),
        ("run", "run.sigmf-meta", "run.sigmf-meta: found"),
        (LINK.name, LINK.name, LINK.name),
    ],
)
def test_what_cannot_be_read_is_one_line_and_2(bench, recording, link, words):
    before = names(bench)
    done = program("measure", recording, link)
    assert done.exit_code == 2
    assert done.stderr.count("\n") == 1
    assert words in done.stderr
    assert names(bench) == before


def test_output_into_a_folder_that_is_not_there_is_refused(bench, monkeypatch):
    forbid_work(monkeypatch)
    done = program("measure", "run", LINK.name, "--out", "none/x.h5")
    assert done.exit_code == 2
    assert "none/x.h5: found no such folder" in done.stderr


def test_the_installed_program_measures_and_writes_nothing_to_standard_error(bench):
    command = [sys.executable, "-c", "from spatiq.cli.main import run; run()"]
    done = subprocess.run(
        [*command, "measure", "run", LINK.name, "--json"],
        capture_output=True,
        text=True,
        check=False,
    )
    assert (done.returncode, done.stderr) == (0, "")
    assert json.loads(done.stdout)["frames"]["found"] == FRAMES
