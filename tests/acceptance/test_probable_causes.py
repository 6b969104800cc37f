"""Causes named for injected faults, none for a clean transmitter; tools/ has the whole matrix."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from acceptance_cases import BENCH, bench, verified

from spatiq.acceptance.setup import Setup
from spatiq.acceptance.word_maps import word_maps
from spatiq.link.loading import load_link, parse_link
from spatiq.signal.codebook import Codebook
from spatiq.transmit.transmitter_faults import LateSwitch, Permuted, PortLevel

TEXT = Path(BENCH).read_text(encoding="utf-8")
CHANNEL = np.array([[1.0, 1.0], [1.0, 1j]])
POINTS = 'points = [[1, -1], [1, 1], [-1, -1], [-1, 1]], labels = ["00", "01", "10", "11"]'


def _names(text: str = TEXT, **choices: Any) -> list[str]:
    capture = bench(parse_link(text), channels=CHANNEL, snr_db=18.0, **choices)
    return [cause.name for cause in verified(capture, setup=Setup.COMBINED).causes]


@pytest.mark.parametrize(
    ("expected", "choices"),
    [
        ("0 sent by 1, 1 sent by 0", {"faults": [Permuted((1, 0))]}),
        ("antenna 1 dead", {"faults": [PortLevel(1, -np.inf)]}),
        ("antenna 1 weak", {"faults": [PortLevel(1, -13.0)]}),
        ("switch slow or late", {"faults": [LateSwitch(0.08)]}),
        ("PRBS9 instead of PRBS15", {"text": TEXT.replace("PRBS15", "PRBS9")}),
        ("inverted", {"text": TEXT.replace('"PRBS15"', '"PRBS15"\ninverted = false')}),
        (
            "conjugated",
            {"text": TEXT.replace('name = "QPSK"', f"{POINTS}, normalise = true")},
        ),
    ],
)
def test_the_fault_is_named_first(expected: str, choices: dict[str, Any]) -> None:
    assert expected in _names(**choices)[0]


def test_nothing_is_named_when_nothing_is_wrong() -> None:
    """Each of six tests has a false alarm of at most 1e-6."""
    for seed in range(8):
        assert _names(seed=seed, cfo_hz=500.0 * seed, clock_ppm=seed - 4.0) == []


def test_over_the_air_a_fade_is_not_laid_to_the_transmitter() -> None:
    capture = bench(faults=[PortLevel(1, -13.0)], channels=CHANNEL)
    assert verified(capture, setup=Setup.OVER_AIR).causes == []


def test_late_switch_is_measured() -> None:
    """80 ns of 1 us; a root-raised-cosine pulse is the simulation's own, room 10 %."""
    capture = bench(faults=[LateSwitch(0.08)], channels=CHANNEL, frames=20)
    (cause,) = verified(capture, setup=Setup.COMBINED).causes
    late = float(cause.name.split("about ")[1].split()[0])
    assert late == pytest.approx(80.0, rel=0.1)
    assert cause.chance < 1e-6 and cause.advice


def _oracle(book: Codebook) -> dict[str, list[int]]:
    """Some maps of a 2-antenna QPSK book, by hand: word = spatial bit, then two signal bits."""
    return {
        "spatial bits complemented": [w ^ 4 for w in range(8)],
        "signal bits complemented": [w ^ 3 for w in range(8)],
        "bits of each word complemented": [7 - w for w in range(8)],
        "bits of each word reversed": [0, 4, 2, 6, 1, 5, 3, 7],
        "constellation rotated by 180 degrees": [w ^ 3 for w in range(8)],
        "constellation conjugated": [w ^ 1 for w in range(8)],
    }


@pytest.mark.nojit
def test_word_maps_by_hand() -> None:
    book = load_link(BENCH).codebook
    maps = word_maps(book)
    for name, expected in _oracle(book).items():
        (found,) = [m for m in maps if name in m.names]
        assert found.words.tolist() == expected
        assert found.words[found.inverse].tolist() == list(range(8))
    assert len({m.words.tobytes() for m in maps}) == len(maps)
    assert all(sorted(m.words.tolist()) == list(range(8)) for m in maps)
