"""Lost samples: which are missing, and what the metadata tells."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from transmit_links import make_link

from spatiq.errors import InputError
from spatiq.recording.opening import open_recording
from spatiq.transmit.losses import Losses, capture_segments, kept, recorded_index, spread
from spatiq.transmit.output import RecordingSet, staged, write_set
from spatiq.transmit.simulation import simulate

RUNS = st.lists(st.tuples(st.integers(0, 180), st.integers(1, 19)), max_size=8)


def present(gaps, n):
    wanted = np.ones(n, bool)
    for first, count in gaps:
        wanted[first : first + count] = False
    return wanted


@given(RUNS, st.integers(1, 70))
def test_runs_are_left_out(runs, chunk):
    """Any runs, any chunks: what is kept is what no run covers, and spreads back to its place."""
    n = 200
    losses = Losses(tuple(runs))
    gaps = losses.gaps(np.random.default_rng(0), n)
    wanted = present(runs, n)
    assert np.array_equal(present(gaps, n), wanted)
    assert np.all(gaps[1:, 0] > gaps[:-1].sum(axis=1)), "merged, ascending"
    whole = np.arange(1, 2 * n + 1).reshape(2, n).astype(np.complex64)
    pieces = [kept(whole[:, a : a + chunk], a, gaps) for a in range(0, n, chunk)]
    recorded = np.concatenate(pieces, axis=1)
    assert np.array_equal(recorded, whole[:, wanted])
    assert np.array_equal(spread(recorded, gaps, n), whole * wanted)
    index = recorded_index(np.arange(n, dtype=float), gaps)
    assert np.array_equal(np.isnan(index), ~wanted)
    assert np.array_equal(index[wanted], np.arange(wanted.sum()))


@given(RUNS)
def test_captures_tell_every_gap(runs):
    """From the captures alone each recorded sample's place on the sampling clock is found."""
    n = 200
    gaps = Losses(tuple(runs)).gaps(np.random.default_rng(0), n)
    wanted = present(gaps, n)
    segments = capture_segments(gaps, int(wanted.sum()), 1e9)
    starts = [s["core:sample_start"] for s in segments]
    assert starts == sorted(set(starts))
    place = np.zeros(int(wanted.sum()), int)
    for s in segments:
        first = s["core:sample_start"]
        place[first:] = s["core:global_index"] + np.arange(len(place) - first)
        assert s["core:frequency"] == 1e9
    assert np.array_equal(place, np.flatnonzero(wanted))


def test_runs_at_random_places():
    """Lengths uniform in 10..30, places over the whole recording: 5 standard errors each."""
    n, runs = 10_000_000, 400
    gaps = Losses((), runs, (10, 30)).gaps(np.random.default_rng(4), n)
    lengths = gaps[:, 1]
    assert len(gaps) > runs - 4, "hardly any touch"
    assert abs(lengths.mean() - 20) < 5 * np.sqrt((21**2 - 1) / 12 / runs) + 0.1
    assert abs(gaps[:, 0].mean() / n - 0.5) < 5 / np.sqrt(12 * runs)


def written(made, folder):
    recordings = RecordingSet(
        folder / "run", ("",), made.sample_rate, made.datatype, 2.4e9, "test", False,
        made.captures(),
    )  # fmt: skip
    with staged(recordings.base, recordings.files(), False) as part:
        write_set(recordings, part, made.blocks())
    return open_recording(folder / "run.sigmf-meta")


@pytest.mark.parametrize("marked", [True, False])
def test_known_and_unknown_losses_in_a_file(tmp_path, marked):
    choices = {"samples_per_symbol": 4, "frames": 20, "seed": 3, "datatype": "ci16_le"}
    losses = Losses(((500, 60), (3000, 1)), 3, 200, marked)
    plain = simulate(make_link(), **choices)
    made = simulate(make_link(), losses=losses, **choices)
    gaps = made.truth.gaps
    recording = written(made, tmp_path)
    samples = np.concatenate([b.samples for b in recording.blocks()], axis=1)
    assert np.array_equal(samples, plain.samples()[:, present(gaps, plain.n_samples)])
    assert recording.n_samples == made.n_samples == plain.n_samples - gaps[:, 1].sum()
    assert recording.warnings == ()
    assert recording.carrier_hz == 2.4e9
    if not marked:
        assert made.captures() is None
        assert len(recording.segments) == 1
        return
    assert len(recording.segments) == len(gaps) + 1
    ends = [0, *(gaps[:, 0] + gaps[:, 1])]
    assert [s.global_index for s in recording.segments] == ends


def test_starts_in_the_file():
    link = make_link()
    losses = Losses(((0, 100),))
    made = simulate(link, samples_per_symbol=4, frames=3, losses=losses)
    truth = made.truth
    np.testing.assert_allclose(truth.recorded_starts, truth.starts - 100)
    again = Losses(((int(truth.starts[1]) - 5, 10),))
    lost = simulate(link, samples_per_symbol=4, frames=3, losses=again).truth.recorded_starts
    assert np.array_equal(np.isnan(lost), [False, True, False])
    assert lost[2] == truth.starts[2] - 10


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("losses", "message"),
    [
        (Losses(((-1, 5),)), "runs within"),
        (Losses(((5, 0),)), "runs within"),
        (Losses(((5, 10**9),)), "runs within"),
        (Losses((), -1), "runs"),
        (Losses((), 3, (5, 2)), "lower end first"),
        (Losses((), 3, 10**9), "samples"),
    ],
)
def test_bad_losses_are_refused(losses, message):
    with pytest.raises(InputError, match=message):
        simulate(make_link(), samples_per_symbol=4, losses=losses)


def test_a_recording_with_nothing_left_is_refused():
    with pytest.raises(InputError, match="every sample lost"):
        Losses(((0, 60), (60, 40))).gaps(np.random.default_rng(0), 100)
