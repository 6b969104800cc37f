"""Constellation tables against the standards, and labels that explicit ones must carry."""

from __future__ import annotations

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad
from scipy.special import erfc

from spatiq.errors import InputError
from spatiq.signal.constellations import LABELLINGS, NAMES, Constellation, explicit, named

EVERY = list(itertools.product(NAMES, LABELLINGS))


def expected_3gpp(name: str) -> list[complex]:
    """3GPP TS 38.211 clause 5.1.2 to 5.1.6, formulas written out label by label."""
    width = {"BPSK": 1, "QPSK": 2, "16QAM": 4, "64QAM": 6, "256QAM": 8}[name]
    points = []
    for label in itertools.product((0, 1), repeat=width):
        s = [1 - 2 * b for b in label]
        if name == "BPSK":
            i, q, power = s[0], s[0], 2
        elif name == "QPSK":
            i, q, power = s[0], s[1], 2
        elif name == "16QAM":
            i, q, power = s[0] * (2 - s[2]), s[1] * (2 - s[3]), 10
        elif name == "64QAM":
            i, q, power = s[0] * (4 - s[2] * (2 - s[4])), s[1] * (4 - s[3] * (2 - s[5])), 42
        else:
            i = s[0] * (8 - s[2] * (4 - s[4] * (2 - s[6])))
            q = s[1] * (8 - s[3] * (4 - s[5] * (2 - s[7])))
            power = 170
        points.append(complex(i / np.sqrt(power), q / np.sqrt(power)))
    return points


# IEEE 802.11 clause 17.3.5.8: one axis' bits against its levels, lowest level first. The 256QAM row
# carries the same reflected order one bit deeper (from memory).
LEVELS_80211 = {
    "QPSK": (["0", "1"], 2),
    "16QAM": (["00", "01", "11", "10"], 10),
    "64QAM": (["000", "001", "011", "010", "110", "111", "101", "100"], 42),
    "256QAM": (
        [
            "0000",
            "0001",
            "0011",
            "0010",
            "0110",
            "0111",
            "0101",
            "0100",
            "1100",
            "1101",
            "1111",
            "1110",
            "1010",
            "1011",
            "1001",
            "1000",
        ],
        170,
    ),
}


@pytest.mark.nojit
@pytest.mark.parametrize("name", ["BPSK", "QPSK", "16QAM", "64QAM", "256QAM"])
def test_3gpp_table_is_exact(name: str) -> None:
    assert named(name, "3gpp").points.tolist() == expected_3gpp(name)


@pytest.mark.nojit
@pytest.mark.parametrize("name", sorted(LEVELS_80211))
def test_80211_table_is_exact(name: str) -> None:
    words, power = LEVELS_80211[name]
    points = named(name, "802.11").points
    lowest = 1 - len(words)
    for (i, first), (q, second) in itertools.product(enumerate(words), repeat=2):
        expected = complex((lowest + 2 * i) / np.sqrt(power), (lowest + 2 * q) / np.sqrt(power))
        assert points[int(first + second, 2)] == expected


def test_80211_bpsk_is_real() -> None:
    # IEEE 802.11 clause 17.3.5.8: 0 -> -1, 1 -> +1.
    assert named("BPSK", "802.11").points.tolist() == [-1, 1]


def test_the_two_standards_differ_in_sign_and_place() -> None:
    # 0000 is (1+j)/sqrt(10) in the table of 3GPP TS 36.211 and (-3-3j)/sqrt(10) in IEEE 802.11.
    root = np.sqrt(10)
    assert named("16QAM", "3gpp").points[0] == complex(1 / root, 1 / root)
    assert named("16QAM", "802.11").points[0] == complex(-3 / root, -3 / root)


@pytest.mark.parametrize("labelling", LABELLINGS)
def test_8psk_counts_gray_code_round_the_circle(labelling: str) -> None:
    # Own documented table: neither standard has 8PSK.
    points = named("8PSK", labelling).points
    around = [0b000, 0b001, 0b011, 0b010, 0b110, 0b111, 0b101, 0b100]
    np.testing.assert_allclose(points[around], np.exp(2j * np.pi * np.arange(8) / 8), atol=3e-16)


@pytest.mark.parametrize(("name", "labelling"), EVERY)
def test_contract_of_every_named_constellation(name: str, labelling: str) -> None:
    constellation = named(name, labelling)
    points = constellation.points
    assert constellation.size == 1 << constellation.bits
    assert points.dtype == np.complex128
    assert constellation.mean_power == pytest.approx(1.0, rel=1e-15)
    assert abs(points.sum()) < 1e-13
    distance = np.abs(points[:, None] - points)
    near = distance < 1.0001 * distance[distance > 0].min()
    labels = np.arange(points.size)
    changed = np.bitwise_count(labels[:, None] ^ labels)
    assert set(changed[near & (distance > 0)]) == {1}  # Gray: neighbours differ by one bit


@pytest.mark.parametrize(
    ("name", "peak_db"), [("16QAM", 2.5527), ("64QAM", 3.6798), ("256QAM", 4.2276)]
)
def test_peak_to_mean_power(name: str, peak_db: float) -> None:
    # Closed form 3 (sqrt M - 1) / (sqrt M + 1).
    peak = np.max(np.abs(named(name).points) ** 2)
    assert 10 * np.log10(peak) == pytest.approx(peak_db, abs=5e-5)


def _axis_transitions(levels: np.ndarray, sigma: float) -> np.ndarray:
    """Probability that level i plus Gaussian noise falls into the nearest-level region of j."""
    edges = np.concatenate([[-np.inf], (levels[1:] + levels[:-1]) / 2, [np.inf]])
    below = 0.5 * erfc((levels[:, None] - edges) / (sigma * np.sqrt(2)))
    return np.diff(below, axis=1)


@pytest.mark.parametrize("labelling", LABELLINGS)
@pytest.mark.parametrize(
    ("name", "ebn0_db", "ber"),
    [
        # Exact Gray bit error ratios: Cho and Yoon, IEEE Trans. Commun. 50(7), 2002 (from memory).
        ("16QAM", 8, 9.247214e-3),
        ("16QAM", 10, 1.754151e-3),
        ("16QAM", 12, 1.386587e-4),
        ("64QAM", 10, 2.653271e-2),
        ("64QAM", 14, 2.154004e-3),
        ("64QAM", 18, 6.351148e-6),
        # Q(sqrt(2 Eb/N0)): Proakis, Digital Communications, ch. 4 (from memory).
        ("QPSK", 4, 1.250082e-2),
        ("QPSK", 8, 1.909078e-4),
    ],
)
def test_labels_give_the_published_bit_error_ratio(
    name: str, ebn0_db: float, ber: float, labelling: str
) -> None:
    constellation = named(name, labelling)
    points, m = constellation.points, constellation.size
    side = int(np.sqrt(m))
    levels = (2 * np.arange(side) - side + 1) * np.sqrt(1.5 / (m - 1))
    n0 = 1 / (constellation.bits * 10 ** (ebn0_db / 10))
    one_axis = _axis_transitions(levels, np.sqrt(n0 / 2))
    i = np.abs(points.real[:, None] - levels).argmin(axis=1)
    q = np.abs(points.imag[:, None] - levels).argmin(axis=1)
    chance = one_axis[i[:, None], i] * one_axis[q[:, None], q]
    labels = np.arange(m)
    wrong = np.bitwise_count(labels[:, None] ^ labels)
    assert np.sum(chance * wrong) / m / constellation.bits == pytest.approx(ber, rel=1e-6)


@pytest.mark.parametrize(
    ("ebn0_db", "ber"), [(4, 4.589492e-2), (8, 6.181056e-3), (10, 1.011395e-3), (12, 6.337879e-5)]
)
def test_8psk_labels_give_the_published_bit_error_ratio(ebn0_db: float, ber: float) -> None:
    # Lee, IEEE Trans. Commun. 34, 1986 (from memory); here: density of the phase, by sectors.
    amplitude = np.sqrt(2 * 3 * 10 ** (ebn0_db / 10))

    def density(angle: float) -> float:
        c = amplitude * np.cos(angle)
        rest = np.exp(-(amplitude**2) / 2) / (2 * np.pi)
        tail = np.exp(-((amplitude * np.sin(angle)) ** 2) / 2) / np.sqrt(2 * np.pi)
        return float(rest + c * tail * 0.5 * erfc(-c / np.sqrt(2)))

    points = named("8PSK").points
    place = np.rint(np.angle(points) * 4 / np.pi).astype(int) % 8
    total = 0.0
    for sector in range(8):
        middle = sector * np.pi / 4
        chance = quad(density, middle - np.pi / 8, middle + np.pi / 8, epsabs=1e-14)[0]
        decided = np.argsort(place)[(place + sector) % 8]
        total += chance * np.mean(np.bitwise_count(np.arange(8) ^ decided)) / 3
    assert total == pytest.approx(ber, rel=1e-6)


@pytest.mark.parametrize(("name", "labelling"), EVERY)
def test_explicit_rebuilds_any_named_one(name: str, labelling: str) -> None:
    wanted = named(name, labelling)
    order = np.random.default_rng(7).permutation(wanted.size)
    labels = [format(v, f"0{wanted.bits}b") for v in order]
    rebuilt = explicit(wanted.points[order], labels, normalise=False)
    np.testing.assert_array_equal(rebuilt.points, wanted.points)


@given(
    st.integers(0, 4).flatmap(
        lambda b: st.tuples(
            st.permutations(range(1 << b)),
            st.lists(
                st.complex_numbers(min_magnitude=0.01, max_magnitude=100),
                min_size=1 << b,
                max_size=1 << b,
                unique=True,
            ),
        )
    )
)
def test_explicit_puts_each_point_at_its_label(given_: tuple[list[int], list[complex]]) -> None:
    order, points = given_
    width = len(order).bit_length() - 1
    labels = [format(v, f"0{width}b") if width else "" for v in order]
    plain = explicit(points, labels, normalise=False)
    scaled = explicit(points, labels, normalise=True)
    assert [plain.points[v] for v in order] == points
    assert scaled.mean_power == pytest.approx(1.0)
    np.testing.assert_allclose(scaled.points * np.sqrt(plain.mean_power), plain.points, rtol=1e-12)


@pytest.mark.parametrize(
    ("points", "labels", "text"),
    [
        ([1, -1, 1j], ["0", "1", "0"], "power of two"),
        ([1, -1], ["0"], "1 labels"),
        ([1, -1], ["0", "0"], "each label once"),
        ([1, -1], ["0", "01"], r"labels\[1\]"),
        ([1, -1], ["0", "x"], r"labels\[1\]"),
        ([1, 1], ["0", "1"], "all differ"),
        ([1, np.nan], ["0", "1"], "finite"),
        ([0], [""], "positive mean power"),
        ([], [], "power of two"),
    ],
)
def test_explicit_refuses(points: list[complex], labels: list[str], text: str) -> None:
    with pytest.raises(InputError, match=text):
        explicit(points, labels, normalise=True)


def test_named_refuses_unknown_names() -> None:
    with pytest.raises(InputError, match=r"found '32QAM'; expected one of BPSK"):
        named("32QAM")
    with pytest.raises(InputError, match=r"labelling: found 'gray'"):
        named("QPSK", "gray")


def test_one_point_carries_no_bits() -> None:
    single = Constellation("single", np.ones(1, np.complex128))
    assert (single.size, single.bits) == (1, 0)
