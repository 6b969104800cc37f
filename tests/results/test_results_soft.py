"""Log-likelihood ratios in the results file: as they were, described, and missed when not there."""

from __future__ import annotations

import h5py
import numpy as np
import pytest
from made_results import BITS, PERIODS, MadeRecording, made_frames, made_link, write_results

from spatiq.errors import InputError
from spatiq.receiver.options import ReceiverOptions
from spatiq.results.hdf5 import ResultsWriter
from spatiq.results.reader import open_results


@pytest.mark.nojit
@pytest.mark.parametrize("kind", ["exact", "max-log"])
def test_ratios_come_back_as_they_were(tmp_path, kind):
    batches = [made_frames(n, first, llr=True) for n, first in [(3, 0), (0, 3), (4100, 3)]]
    path = write_results(tmp_path / "r.h5", batches, soft_output=kind)
    with open_results(path) as results:
        expected = np.concatenate([b.llr for b in batches])
        np.testing.assert_array_equal(results.llr(), expected)
        np.testing.assert_array_equal(results.llr(2, 5), expected[2:5])
        assert results.llr().dtype == np.float32
        assert results.llr().shape == (4103, PERIODS * BITS)
        assert results.llr_kind == kind and not results.has_symbols


@pytest.mark.nojit
def test_the_dataset_says_what_it_is(tmp_path):
    path = write_results(tmp_path / "r.h5", [made_frames(3, llr=True)], soft_output="max-log")
    with h5py.File(path) as file:
        assert dict(file["soft/llr"].attrs) == {
            "unit": "",
            "meaning": "log-likelihood ratio, natural logarithm, of each payload bit as sent",
            "sign": "positive: 0 is the likelier value of the bit",
            "kind": "max-log",
        }


@pytest.mark.nojit
def test_ratios_that_were_not_asked_for_are_not_there(tmp_path):
    with open_results(write_results(tmp_path / "r.h5", [made_frames(3, llr=True)])) as results:
        assert "soft" not in results.file and results.llr_kind == "none"
        with pytest.raises(InputError, match="expected results measured with soft output"):
            results.llr()


@pytest.mark.nojit
def test_ratios_that_should_be_kept_must_be_there(tmp_path):
    options = ReceiverOptions(soft_output="exact")
    writer = ResultsWriter(tmp_path / "r.h5", made_link(), MadeRecording(), options)
    with pytest.raises(ValueError, match="soft output, but this batch has none"), writer:
        writer.add(made_frames(3))
    assert not (tmp_path / "r.h5").exists()
