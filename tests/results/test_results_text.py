import io
import json

import numpy as np
import pytest
from made_results import MadeRecording, made_frames, made_summary, write_results
from rich.console import Console

from spatiq.results import wording
from spatiq.results.reader import open_results
from spatiq.results.text import show_results


def screen(tmp_path, batches, summary=None, rows=20, **options):
    path = write_results(tmp_path / "r.h5", batches, summary, **options)
    stream = io.StringIO()
    console = Console(file=stream, width=140, highlight=False, markup=False)
    with open_results(path) as results:
        show_results(results, console, rows=rows)
    return stream.getvalue()


def line(text, label):
    lines = [" ".join(ln.split()) for ln in text.splitlines()]
    (found,) = [ln for ln in lines if ln.startswith(label)]
    return found


def test_the_summary_comes_first_and_says_whether_it_was_good(tmp_path):
    text = screen(tmp_path, [made_frames(3)])
    lines = text.splitlines()
    assert lines[0].startswith("run [07]  link four by two, 2 receive channels")
    assert lines[2].strip().startswith("bit error ratio")
    assert line(text, "bit error ratio") == (
        "bit error ratio < 3.69e-06 upper bound (95 %) 0 wrong of 1,000,000 bits"
    )
    assert line(text, "antenna errors") == (
        "antenna errors 0.01 0.008 to 0.0124 (95 %) 100 wrong of 10,000 words"
    )
    assert line(text, "frames found") == (
        "frames found 98 of 100 2 lost 1 cut off by the end, 1 not found"
    )
    assert line(text, "implementation loss") == "implementation loss -"
    assert line(text, "frames marked") == "frames marked 3 clipped, 1 crc failed"
    assert line(text, "CRC ") == "CRC 97 passed 1 failed"
    assert "No frame was found" not in text


def test_evm_says_what_it_refers_to(tmp_path):
    text = screen(tmp_path, [made_frames(3)])
    assert line(text, "EVM rms 8") == "EVM rms 8.21 % -21.7 dB data-aided"
    (tmp_path / "r.h5").unlink()
    evm = {"percent": 20.0, "db": -14.0, "data_aided": False, "data_aided_frames": 0}
    text = screen(tmp_path, [made_frames(3)], made_summary(evm=evm))
    assert "against decided symbols" in line(text, "EVM rms 20")
    (tmp_path / "r.h5").unlink()
    text = screen(tmp_path, [made_frames(3)], made_summary(evm=evm | {"data_aided_frames": 40}))
    assert "data-aided in 40 of 98 frames" in line(text, "EVM rms 20")


def test_each_transmit_antenna_has_its_line(tmp_path):
    text = screen(tmp_path, [made_frames(3)])
    rows = text[text.index("transmit antennas") :].splitlines()
    assert [" ".join(r.split()) for r in rows[3:7]] == [
        "0 8.00 -20.00",
        "1 8.10 -16.99",
        "2 - -",
        "3 8.30 -13.98",
    ]


def test_nothing_measured_shows_dashes_and_no_zeros(tmp_path):
    nothing = {"frames": {"found": 0, "lost": 0, "expected": None, "lost_by_reason": {}}}
    text = screen(tmp_path, [], nothing)
    for label in ("bit error ratio", "EVM rms, equalised", "SNR", "carrier offset", "predicted"):
        assert line(text, label).split(" - ")[0].removesuffix(" -") == label
    assert line(text, "frames found") == "frames found 0 none lost"
    assert "antenna sent" not in text
    assert "No frame was found" in text


def test_confusion_matrix_shows_counts_and_shares_of_the_row(tmp_path):
    batch = made_frames(1)
    batch.confusion[:] = [[990, 10, 0], [0, 500, 0], [0, 0, 0]]
    text = screen(tmp_path, [batch])
    rows = text[text.index("antenna sent") :].splitlines()
    body = [" ".join(r.split()) for r in rows[1:6]]
    assert body[0] == "0 1 3"
    assert body[2:5] == ["0 990 99 % 10 1 % -", "1 - 500 100 % -", "3 - - -"]


def test_a_rare_confusion_is_never_rounded_away(tmp_path):
    batch = made_frames(1)
    batch.confusion[:] = [[4_000_000, 1, 0], [0, 500, 0], [0, 0, 7]]
    text = screen(tmp_path, [batch])
    assert "<0.01 %" in text
    assert ">99.99 %" in text


def test_frames_are_listed_up_to_the_limit_and_the_rest_is_counted(tmp_path):
    text = screen(tmp_path, [made_frames(2500)], rows=4)
    listed = text[text.index("  frames\n") :].splitlines()
    assert [ln.split()[0] for ln in listed[3:7]] == ["0", "1", "2", "3"]
    assert listed[7].strip() == "2,496 more in r.h5"
    assert "clipped" in listed[6]
    assert "ok" in listed[4]
    assert "failed" in listed[3]


def test_no_frames_are_listed_when_none_are_wanted(tmp_path):
    text = screen(tmp_path, [made_frames(5)], rows=0)
    assert "start, samples" not in text


def test_a_frame_without_errors_shows_its_bound_and_one_without_reference_dashes(tmp_path):
    batch = made_frames(2)
    batch.columns["bits_compared"][:] = [1000, 0]
    batch.columns["periods_compared"][:] = [500, 0]
    batch.columns["bit_errors"][:] = 0
    batch.columns["antenna_errors"][:] = 0
    batch.columns["ber"][:] = [0.0, np.nan]
    batch.columns["ber_high"][:] = [0.00368, np.nan]
    text = screen(tmp_path, [batch])
    listed = text[text.index("  frames\n") :].splitlines()
    assert "< 0.00368" in listed[3]
    assert listed[4].split()[6:9] == ["-", "-", "-"]


def test_names_out_of_files_cannot_steer_the_terminal(tmp_path):
    text = screen(tmp_path, [], recording=MadeRecording(name="a\x1b[2Jb[red]c"))
    assert text.startswith("a?[2Jb[red]c  link")


def test_a_wide_matrix_is_given_as_its_most_frequent_confusions():
    from spatiq.results.text_tables import confusion_table

    class Wide:
        confusion_total = np.diag(np.full(16, 100))
        set_names = tuple(str(a) for a in range(16))

    Wide.confusion_total[5, 9] = 25
    Wide.confusion_total[0, 1] = 1
    stream = io.StringIO()
    Console(file=stream, width=140).print(confusion_table(Wide()))
    rows = [" ".join(r.split()) for r in stream.getvalue().splitlines()[2:]]
    assert rows == ["right 1,600 98.4 %", "wrong 5 9 25 20 %", "wrong 0 1 1 0.9901 %"]


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("value", "text"),
    [
        (None, "-"),
        (float("nan"), "-"),
        (0.0, "0"),
        (1234.0, "1234"),
        (-21.66, "-21.7"),
        (3.69e-6, "3.69e-06"),
        (0.00123, "0.00123"),
        (2.4e9, "2.4e+09"),
    ],
)
def test_numbers(value, text):
    assert wording.number(value) == text


@pytest.mark.nojit
def test_a_ratio_is_never_shown_as_zero():
    assert wording.ratio(0.0, 0.01, 0) == "< 0.01"
    assert wording.ratio(0.0, None, 0) == "-"
    assert wording.ratio(None, None, None) == "-"
    assert wording.ratio(0.5, 0.6, 3) == "0.5"


def test_show_command_prints_the_tables_or_strict_json(tmp_path):
    from typer.testing import CliRunner

    from spatiq.cli.main import app

    path = str(write_results(tmp_path / "r.h5", [made_frames(30)]))
    shown = CliRunner().invoke(app, ["show", path, "--rows", "3"])
    assert shown.exit_code == 0
    assert "27 more in r.h5" in shown.stdout
    as_json = CliRunner().invoke(app, ["show", path, "--json"])
    assert json.loads(as_json.stdout) == made_summary()
