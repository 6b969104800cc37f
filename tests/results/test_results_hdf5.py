import json
import signal
import subprocess
import sys
import textwrap
import time
import tracemalloc
from pathlib import Path

import h5py
import numpy as np
import pytest
from made_results import (
    SETS,
    MadeRecording,
    made_frames,
    made_link,
    made_summary,
    write_results,
)

import spatiq
from spatiq.errors import InputError
from spatiq.metrics.frame_table import COLUMNS, Mark
from spatiq.receiver.frame_batch import LostFrame
from spatiq.receiver.options import ReceiverOptions
from spatiq.results.hdf5 import ResultsWriter
from spatiq.results.provenance import FIELDS
from spatiq.results.reader import open_results


def joined(batches, part):
    return np.concatenate([part(b) for b in batches])


@pytest.mark.nojit
def test_everything_comes_back_as_it_was_whatever_the_batches(tmp_path):
    # 4096 rows are a chunk: batches below, across and at its edge.
    batches = [
        made_frames(n, first, symbols=True)
        for n, first in [(0, 0), (1, 0), (4095, 1), (5000, 4096), (3, 9096)]
    ]
    path = write_results(tmp_path / "r.h5", batches, keep_symbols=True)
    with open_results(path) as results:
        assert results.count == 9099
        for column in COLUMNS:
            expected = joined(batches, lambda b, name=column.name: b.columns[name])
            found = results.column(column.name)
            np.testing.assert_array_equal(found, expected)
            assert found.dtype == np.dtype(column.dtype)
        np.testing.assert_array_equal(results.confusion(), joined(batches, lambda b: b.confusion))
        total = joined(batches, lambda b: b.confusion).sum(axis=0)
        np.testing.assert_array_equal(results.confusion_total, total)
        np.testing.assert_array_equal(results.channel(), joined(batches, lambda b: b.channel))
        np.testing.assert_array_equal(
            results.antenna_evm_percent(), joined(batches, lambda b: b.antenna_evm_percent)
        )
        np.testing.assert_array_equal(
            results.antenna_power(5, 9), joined(batches, lambda b: b.antenna_power)[5:9]
        )
        np.testing.assert_array_equal(
            results.rows("channel/error_variance"),
            joined(batches, lambda b: b.channel_error_variance),
        )
        np.testing.assert_array_equal(
            results.rows("antennas/error_energy", 3),
            joined(batches, lambda b: b.antenna_error_energy)[3:],
        )
        symbols = results.symbols()
        np.testing.assert_array_equal(symbols, joined(batches, lambda b: b.symbols))
        assert symbols.dtype == np.complex64
        decided, sent = results.words()
        np.testing.assert_array_equal(decided, joined(batches, lambda b: b.words_decided))
        np.testing.assert_array_equal(sent, joined(batches, lambda b: b.words_sent))
        assert results.antenna_sets == SETS
        sizes = [len(block["frame"]) for block in results.blocks(4000)]
        assert sizes == [4000, 4000, 1099]


def test_units_meanings_and_flags_are_in_the_file(tmp_path):
    path = write_results(tmp_path / "r.h5", [made_frames(3)])
    with h5py.File(path) as file:
        for column in COLUMNS:
            assert file["frames"][column.name].attrs["unit"] == column.unit
            assert file["frames"][column.name].attrs["meaning"] == column.meaning
        flags = json.loads(file["frames/marks"].attrs["flags"])
        assert flags == {m.name: m.value for m in Mark if m}
        assert "symbols" not in file
        for name in ("frames/ber", "confusion/per_frame", "channel/real", "lost/segment"):
            assert file[name].compression == "gzip"
            assert file[name].chunks is not None


def test_nothing_in_the_file_needs_a_compound_or_boolean_type(tmp_path):
    path = write_results(tmp_path / "r.h5", [made_frames(3, symbols=True)], keep_symbols=True)
    kinds = {}

    def visit(name, item):
        if isinstance(item, h5py.Dataset):
            kinds[name] = item.dtype.kind

    with h5py.File(path) as file:
        file.visititems(visit)
    texts = {n for n, kind in kinds.items() if kind == "O"}
    assert texts == {"summary/json", "lost/reasons", "confusion/names"} | {
        f"provenance/{n}" for n in FIELDS
    }
    assert {kind for kind in kinds.values() if kind != "O"} == set("iuf")


def test_lost_frames_come_back_in_order_with_their_reasons(tmp_path):
    first = [LostFrame(0, -12.5, -1, "cut off by the start"), LostFrame(0, 8.0, 3, "not found")]
    second = [LostFrame(2, 9e9, 7, "gap"), LostFrame(2, 9.1e9, 8, "not found")]
    batches = [made_frames(2, lost=first), made_frames(2, 2), made_frames(0, 4, lost=second)]
    path = write_results(tmp_path / "r.h5", batches)
    with open_results(path) as results:
        assert list(results.lost(rows=3)) == first + second
        assert results.file["lost/reasons"].shape == (3,)


def test_figures_that_a_batch_does_not_carry_are_missing_in_its_rows(tmp_path):
    batches = [made_frames(2, seed=0), made_frames(2, 2, seed=1)]
    with open_results(write_results(tmp_path / "r.h5", batches)) as results:
        energy = results.rows("antennas/reference_energy")
    assert np.isnan(energy[:2]).all()
    np.testing.assert_array_equal(energy[2:], batches[1].antenna_reference_energy)


def test_no_frame_at_all_is_a_result(tmp_path):
    path = write_results(tmp_path / "r.h5", [])
    with open_results(path) as results:
        assert results.count == 0
        assert list(results.blocks()) == []
        assert list(results.lost()) == []
        assert not results.confusion_total.any()


def test_summary_is_kept_whole_and_as_attributes(tmp_path):
    summary = made_summary(nested={"nan": float("nan"), "numpy": np.float64(2.5), "list": [1]})
    path = write_results(tmp_path / "r.h5", [made_frames(3)], summary)
    with open_results(path) as results:
        assert results.summary["nested"] == {"nan": None, "numpy": 2.5, "list": [1]}
        assert results.summary["ber"] == summary["ber"]
        attributes = results.file["summary"].attrs
        assert attributes["ber.high"] == summary["ber"]["high"]
        assert attributes["frames.lost_by_reason.not found"] == 1
        assert "nested.nan" not in attributes
        assert "implementation_loss_db" not in attributes


def test_provenance_is_complete_and_names_no_folder(tmp_path):
    recording = MadeRecording()
    path = write_results(tmp_path / "r.h5", [made_frames(3)], recording=recording)
    with open_results(path) as results:
        facts = results.provenance
    assert facts.keys() == FIELDS.keys()
    assert recording.digests == ["taken"]
    assert facts["program"] == f"spatiq {spatiq.__version__}"
    assert facts["recording_file"] == "run [07].sigmf-meta"
    assert facts["link_file"] == "four.link.toml"
    assert facts["link_text"] == made_link().text
    assert facts["recording_sha256"] == "ab" * 32
    assert json.loads(facts["options"]) == ReceiverOptions().as_dict()
    assert facts["numpy"] == np.__version__
    assert not [v for v in facts.values() if "somewhere" in v]


def test_sha256_is_that_of_the_published_example():
    from spatiq.results.provenance import sha256_text

    # FIPS 180-2, appendix B.1: message "abc" (from memory).
    digest = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"
    assert sha256_text("abc") == digest


def writer(path, **options):
    return ResultsWriter(path, made_link(), MadeRecording(), ReceiverOptions(**options))


def test_a_failure_leaves_nothing_behind(tmp_path):
    def fail_halfway():
        with writer(tmp_path / "r.h5") as w:
            w.add(made_frames(5000))
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        fail_halfway()
    assert list(tmp_path.iterdir()) == []


def test_leaving_without_a_summary_is_an_error_and_leaves_nothing(tmp_path):
    def forget():
        with writer(tmp_path / "r.h5") as w:
            w.add(made_frames(5))

    with pytest.raises(RuntimeError, match="without a summary"):
        forget()
    assert list(tmp_path.iterdir()) == []


def test_the_file_appears_only_when_it_is_whole(tmp_path):
    path = tmp_path / "r.h5"
    with writer(path) as w:
        w.add(made_frames(5))
        assert not path.exists()
        w.close(made_summary())
        assert not path.exists()
    assert [p.name for p in tmp_path.iterdir()] == ["r.h5"]


def test_an_older_file_survives_a_failed_measurement_and_is_never_replaced_unasked(tmp_path):
    path = write_results(tmp_path / "r.h5", [made_frames(3)])
    before = path.read_bytes()
    with pytest.raises(InputError, match="already there; expected a new name, or --overwrite"):
        write_results(path, [made_frames(4)])
    again = ResultsWriter(path, made_link(), MadeRecording(), ReceiverOptions(), overwrite=True)
    with pytest.raises(ZeroDivisionError), again:
        raise ZeroDivisionError
    assert path.read_bytes() == before
    assert len(list(tmp_path.iterdir())) == 1


def test_a_file_that_appears_meanwhile_is_not_replaced(tmp_path):
    path = tmp_path / "r.h5"
    w = writer(path)
    with pytest.raises(InputError, match="already there"), w:
        w.add(made_frames(2))
        w.close(made_summary())
        path.write_text("somebody else's")
    assert path.read_text() == "somebody else's"
    assert len(list(tmp_path.iterdir())) == 1


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda f: f.columns.pop("ber"), "foreign to, the frame table: .*ber"),
        (lambda f: f.columns.update(extra=f.columns["ber"]), "extra"),
        (lambda f: f.columns.update(ber=f.columns["ber"][:2]), "ber: 2 rows for 3 frames"),
        (lambda f: setattr(f, "channel", f.channel[:, :1]), "channel/real: rows of shape"),
    ],
)
def test_a_batch_that_does_not_fit_is_refused(tmp_path, change, message):
    frames = made_frames(3)
    change(frames)
    w = writer(tmp_path / "r.h5")
    with pytest.raises(ValueError, match=message), w:
        w.add(frames)


def test_symbols_that_should_be_kept_must_be_there(tmp_path):
    w = writer(tmp_path / "r.h5", keep_symbols=True)
    with pytest.raises(ValueError, match="this batch has none"), w:
        w.add(made_frames(3))


def test_memory_does_not_grow_with_the_number_of_frames(tmp_path):
    frames = made_frames(4096)
    peaks = []
    for batches in (4, 40):
        tracemalloc.start()
        with writer(tmp_path / f"{batches}.h5") as w:
            for _ in range(batches):
                w.add(frames)
            w.close(made_summary())
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
    # 36 batches more would be 36 * 4096 * some 400 bytes = 59 MB if they were kept.
    assert peaks[1] < peaks[0] + 1e6


def test_a_terminated_program_leaves_nothing(tmp_path):
    script = textwrap.dedent(
        f"""
        import sys, time
        sys.path.insert(0, {str(Path(__file__).parent)!r})
        import spatiq.cli.main as main
        from pathlib import Path
        from test_results_hdf5 import writer, made_frames
        def work():
            with writer(Path({str(tmp_path)!r}) / "r.h5") as w:
                w.add(made_frames(5000))
                print("writing", flush=True)
                time.sleep(60)
        main.app = work
        main.run()
        """
    )
    process = subprocess.Popen([sys.executable, "-c", script], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    assert process.stdout.readline() == "writing\n"
    assert len(list(tmp_path.iterdir())) == 1
    started = time.monotonic()
    process.send_signal(signal.SIGTERM)
    assert process.wait(timeout=30) == 128 + signal.SIGTERM
    assert time.monotonic() - started < 30
    process.stdout.close()
    assert list(tmp_path.iterdir()) == []


def test_wide_frames_are_cut_into_several_chunks(tmp_path):
    link = made_link(periods=70_000)
    options = ReceiverOptions(keep_symbols=True)
    frames = made_frames(2, symbols=True)
    rng = np.random.default_rng(3)
    frames.symbols = rng.standard_normal((2, 70_000, 2)).astype("c8")
    frames.words_decided = rng.integers(0, 9, (2, 70_000))
    frames.words_sent = frames.words_decided
    with ResultsWriter(tmp_path / "r.h5", link, MadeRecording(), options) as w:
        w.add(frames)
        w.close(made_summary())
    with open_results(tmp_path / "r.h5") as results:
        assert results.file["symbols/real"].chunks[1] < 70_000
        np.testing.assert_array_equal(results.symbols(), frames.symbols)


@pytest.mark.nojit
def test_what_is_no_results_file_is_refused_in_a_line(tmp_path):
    with pytest.raises(InputError, match="no such file; expected a results file"):
        open_results(tmp_path / "none.h5")
    (tmp_path / "text.h5").write_text("no")
    with pytest.raises(InputError, match="no HDF5 file"):
        open_results(tmp_path / "text.h5")
    with h5py.File(tmp_path / "other.h5", "w") as file:
        file.attrs["format"] = "weather"
    with pytest.raises(InputError, match="format 'weather', layout_version None"):
        open_results(tmp_path / "other.h5")
    whole = write_results(tmp_path / "whole.h5", [made_frames(9)]).read_bytes()
    (tmp_path / "cut.h5").write_bytes(whole[: len(whole) // 2])
    with pytest.raises(InputError, match="damaged file"):
        open_results(tmp_path / "cut.h5")


def test_reader_refuses_what_is_not_there(tmp_path):
    with open_results(write_results(tmp_path / "r.h5", [made_frames(3)])) as results:
        with pytest.raises(InputError, match=r"frames: found snr; expected one of .*snr_db"):
            results.column("snr")
        with pytest.raises(InputError, match="channel/phase: found nothing"):
            results.rows("channel/phase")
        with pytest.raises(InputError, match="expected results measured with symbols kept"):
            results.symbols()
        with pytest.raises(InputError, match="expected results measured with symbols kept"):
            results.words()
