"""Detectors over the whole family: the contract, its own alarms, and what each is by definition."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from spatiq.errors import InputError
from spatiq.receiver.coloured_noise import detect_under_covariance
from spatiq.receiver.detection import DETECTORS, check_detector_applies, maximum_likelihood
from spatiq.receiver.detector_contract import check_detector, distances
from spatiq.receiver.project_and_slice import project_and_slice
from spatiq.receiver.tree_search import search_counted, tree_search
from spatiq.signal.codebooks import generalised_spatial_modulation, spatial_modulation
from spatiq.signal.constellations import explicit, named
from spatiq.signal.scheme_examples import scheme_examples
from spatiq.signal.several_antennas import first_sets
from spatiq.signal.slicing import SEARCH, sliced, slicer

EXAMPLES = scheme_examples()
TIE = 1e-5


def normal(rng, *shape):
    return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)) / np.sqrt(2)


def received(book, channels, noise, words, seed):
    rng = np.random.default_rng(seed)
    channel = normal(rng, channels, book.antennas)
    sent = rng.integers(0, book.size, words)
    y = book.vectors[sent] @ channel.T + np.sqrt(noise) * normal(rng, words, channels)
    return sent, y.astype(np.complex64), channel


@pytest.mark.nojit
@pytest.mark.parametrize("name", sorted(DETECTORS))
def test_registered_detectors_keep_the_contract(name):
    report = check_detector(DETECTORS[name], exact=name != "two-step")
    of_schemes = {line.split(" ")[0] for line in report.kept}
    expected = {
        "maximum-likelihood": set(EXAMPLES),
        "tree-search": set(EXAMPLES) - {"differential-spatial-modulation"},
    }
    one_antenna = {"spatial-modulation", "space-shift-keying", "vector-table"}
    assert of_schemes == expected.get(name, one_antenna)
    assert "contract kept" in str(report)


def wrong_by_one(y, channel, noise, book):
    return (maximum_likelihood(y, channel, noise, book) + 1) % book.size


def nearly_right(y, channel, noise, book):
    """Right without noise; with it, every 50th word is another one than the nearest."""
    words = maximum_likelihood(y, channel, noise, book)
    if noise > 1e-3:
        words[::50] = (words[::50] + 1) % book.size
    return words


def of_doubles(y, channel, noise, book):
    words = maximum_likelihood(y, channel, noise, book)
    return words.astype(float) if noise > 1e-3 else words


def careless(y, channel, noise, book):
    words = maximum_likelihood(y, channel, noise, book)
    y *= 2
    return words


def looking_back(y, channel, noise, book):
    """What it says of a word depends on where the run begins."""
    words = maximum_likelihood(y, channel, noise, book)
    if noise > 1e-3 and words.size:
        words[0] = 0
    return words


def refusing(y, channel, noise, book):
    raise InputError("detector", "", "this", "another")


@pytest.mark.parametrize(
    ("detector", "alarm"),
    [
        (wrong_by_one, "words wrong without noise"),
        (nearly_right, "words farther than the nearest|cut in two"),
        (of_doubles, "float64 array"),
        (careless, "arguments changed"),
        (looking_back, "cut in two"),
        (refusing, "every codebook refused"),
    ],
)
def test_the_contract_notices(detector, alarm):
    with pytest.raises(InputError, match=alarm):
        check_detector(detector)


def test_a_detector_worse_than_maximum_likelihood_is_no_exact_one():
    with pytest.raises(InputError, match=r"farther than the nearest|wrong without noise"):
        check_detector(DETECTORS["two-step"])


@pytest.mark.parametrize("name", ["two-step", "project-and-slice"])
def test_what_a_detector_cannot_do_is_said_before_anything_is_received(name):
    with pytest.raises(InputError, match=f"detector: found {name}; expected one active antenna"):
        check_detector_applies(name, EXAMPLES["quadrature-spatial-modulation"][0])
    check_detector_applies(name, EXAMPLES["spatial-modulation"][1])


def nearest(y, channel, noise, codebook):
    """As the README gives it."""
    seen = channel @ codebook.vectors.T
    return (abs(y[:, :, None] - seen) ** 2).sum(axis=1).argmin(axis=1)


def test_ones_own_detector_by_one_call():
    report = check_detector(nearest, schemes=["spatial-modulation", "vector-table"])
    assert len(report.kept) == 9 and not report.refused
    with pytest.raises(InputError, match="schemes: found beam; expected spatial-modulation"):
        check_detector(nearest, schemes=["beam"])


POINTS = [
    *(named(n, of).points for n in ("BPSK", "QPSK", "8PSK", "16QAM", "64QAM", "256QAM")
      for of in ("3gpp", "802.11")),
    explicit([3, 1, -1, -3], ["00", "01", "11", "10"], normalise=True).points,
    np.exp(2j * np.pi * (np.arange(16)[::-1] + 0.3) / 16),
    (np.arange(8)[:, None] + 0.5j * np.arange(2)).ravel() - 2 + 1j,
]  # fmt: skip
UNEVEN = np.array([1, 1j, -2, -1j])


@pytest.mark.nojit
@settings(max_examples=60, deadline=None)
@given(st.sampled_from(range(len(POINTS))), st.complex_numbers(max_magnitude=20))
def test_slicing_finds_a_nearest_point(i, z):
    points = POINTS[i]
    cut = slicer(points)
    label = sliced(z.real, z.imag, cut.kind, cut.places, cut.counts, cut.labels)
    distance = np.abs(points - z)
    assert distance[label] <= distance.min() + 1e-9 * (1 + abs(z))


def test_points_in_no_order_are_searched():
    assert slicer(UNEVEN).kind == SEARCH
    assert all(slicer(points).kind != SEARCH for points in POINTS)


@pytest.mark.parametrize("points", ["8PSK", "64QAM", "256QAM"])
@pytest.mark.parametrize(("antennas", "channels"), [(4, 1), (8, 2), (16, 4)])
def test_project_and_slice_decides_as_the_exhaustive_search(points, antennas, channels):
    """Rajashekar and Hari, arXiv:1206.6190: cost without M, decisions unchanged."""
    spatial = list(range(antennas.bit_length() - 1))
    book = spatial_modulation(antennas, named(points), range(antennas), spatial)
    _, y, channel = received(book, channels, 0.05, 1500, antennas * channels)
    metric = distances(y, channel, book)
    words = project_and_slice(y, channel, 0.05, book)
    taken = np.take_along_axis(metric, words[:, None], 1)[:, 0]
    assert np.all(taken <= metric.min(axis=1) + TIE * (1 + metric.max(axis=1)))
    assert np.mean(words == metric.argmin(axis=1)) > 0.998


def test_an_antenna_that_nothing_is_heard_of():
    book = spatial_modulation(2, named("QPSK"), [0, 1], [0])
    channel = np.array([[1.0, 0.0], [0.5j, 0.0]], complex)
    y = (book.vectors @ channel.T).astype(np.complex64)
    for detector in (project_and_slice, tree_search):
        words = detector(y, channel, 0.1, book)
        np.testing.assert_array_equal(words[:4], np.arange(4))
        assert set(words[4:]) <= {4, 5, 6, 7}


@pytest.mark.parametrize(("channels", "most"), [(4, 0.1), (2, 0.6), (1, 1.07)])
def test_tree_search_of_a_large_codebook_looks_at_a_part_of_it(channels, most):
    """2048 words of two independent 16QAM symbols.

    One receive channel tells nothing before both symbols are chosen: all nodes are looked at then,
    which are 1/16 more than words.
    """
    sets = first_sets(6, 2)
    book = generalised_spatial_modulation(6, named("16QAM"), sets, range(3), "independent")
    assert book.size == 2048
    _, y, channel = received(book, channels, 0.02, 300, channels)
    metric = distances(y, channel, book)
    words, looked = search_counted(y, channel, book)
    taken = np.take_along_axis(metric, words[:, None], 1)[:, 0]
    assert np.all(taken <= metric.min(axis=1) + TIE * (1 + metric.max(axis=1)))
    assert looked < most * book.size * 300


@pytest.mark.parametrize("name", ["maximum-likelihood", "tree-search", "project-and-slice"])
def test_detector_under_noise_covariance(name):
    """argmin (y - H x)^H R^-1 (y - H x), by plain NumPy over all words."""
    book = EXAMPLES["spatial-modulation"][1]
    rng = np.random.default_rng(8)
    root = normal(rng, 3, 3) + np.eye(3)
    covariance = root @ root.conj().T
    channel = normal(rng, 3, 4)
    sent = rng.integers(0, book.size, 2000)
    y = book.vectors[sent] @ channel.T + 0.3 * normal(rng, 2000, 3) @ root.T
    words = detect_under_covariance(
        y.astype(np.complex64), channel, 0.09 * covariance, book, DETECTORS[name]
    )
    left = y[:, None] - book.vectors @ channel.T
    metric = np.einsum("kci,ij,kcj->kc", left.conj(), np.linalg.inv(covariance), left).real
    assert np.mean(words == metric.argmin(axis=1)) > 0.998
    blind = np.mean(DETECTORS[name](y.astype(np.complex64), channel, 0.1, book) != sent)
    assert np.mean(words != sent) < 0.8 * blind  # it is worth its while here


@pytest.mark.parametrize("covariance", [np.eye(2), np.zeros((3, 3)), -np.eye(3)])
def test_covariances_that_are_none(covariance):
    y, channel = np.zeros((4, 3), np.complex64), np.ones((3, 4), complex)
    with pytest.raises(InputError, match="covariance"):
        detect_under_covariance(
            y, channel, covariance, EXAMPLES["spatial-modulation"][1], maximum_likelihood
        )
