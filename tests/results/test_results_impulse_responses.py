"""Impulse responses in the results file: as they were, or missing; none on a flat channel."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from made_results import ANTENNAS, CHANNELS, made_frames, write_results

from spatiq.errors import InputError
from spatiq.results.reader import open_results


@pytest.mark.nojit
def test_impulse_responses_come_back_as_they_were(tmp_path):
    rng = np.random.default_rng(1)
    parts = rng.standard_normal((2, 5, 16, CHANNELS, ANTENNAS))
    taps = parts[0] + 1j * parts[1]
    batches = [replace(made_frames(3), taps=taps[:3]), replace(made_frames(2, 3), taps=taps[3:])]
    path = write_results(tmp_path / "r.h5", batches, channel="dispersive")
    with open_results(path) as results:
        lags, found = results.impulse_responses()
        assert lags.tolist() == list(range(-3, 13))
        np.testing.assert_array_equal(found, taps)
        np.testing.assert_array_equal(results.impulse_responses(1, 4)[1], taps[1:4])


@pytest.mark.nojit
def test_missing_ones_are_missing(tmp_path):
    path = write_results(tmp_path / "r.h5", [made_frames(3)], channel="dispersive")
    with open_results(path) as results:
        assert np.all(np.isnan(results.impulse_responses()[1]))


@pytest.mark.nojit
def test_none_on_a_flat_channel(tmp_path):
    with open_results(write_results(tmp_path / "r.h5", [made_frames(3)])) as results:
        assert "impulse_responses" not in results.file
        with pytest.raises(InputError, match="results measured on a dispersive channel"):
            results.impulse_responses()
