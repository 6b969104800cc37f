"""Limits files and the decision rule."""

from __future__ import annotations

import contextlib
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from spatiq.acceptance.decision import Decision, judge, judge_all, overall
from spatiq.acceptance.figure_kinds import BY_NAME, KINDS, Figure
from spatiq.acceptance.limits import Limit, Limits, load_limits, parse_limits
from spatiq.errors import InputError


def _figure(name: str, value: float, half: float, subject: str = "", frames: int = 100) -> Figure:
    return Figure(BY_NAME[name], subject, value, value - half, value + half, 0.95, frames)


HEAD = "format = 1\n"


def test_names_are_unique() -> None:
    assert len(BY_NAME) == len(KINDS)


def test_limits_are_read() -> None:
    limits = parse_limits(
        HEAD
        + """
name = "bench"
snr_db = 12
[[adjacent]]
name = "upper"
offset_hz = 2e6
bandwidth_hz = 1e6
[[limit]]
figure = "evm_rms"
antenna = "each"
upper = 8
source = "own"
[[limit]]
figure = "power_db"
antenna = 2
lower = -20.0
upper = -10.0
[[limit]]
figure = "adjacent_power_db"
channel = "upper"
upper = -45
"""
    )
    assert limits.confidence == 0.95
    assert [limit.antenna for limit in limits.limit] == ["each", 2, None]
    assert limits.limit[0].covers(_figure("evm_rms", 1, 0, "3"))
    assert not limits.limit[0].covers(_figure("evm_rms", 1, 0))
    assert limits.limit[1].covers(_figure("power_db", 1, 0, "2"))
    assert not limits.limit[1].covers(_figure("power_db", 1, 0, "1"))
    assert limits.limit[2].covers(_figure("adjacent_power_db", 1, 0, "upper"))


@pytest.mark.parametrize(
    ("text", "place", "expected"),
    [
        ("", "limits: format", "a whole number, 1 to 1"),
        (HEAD, "limits: limit", ""),
        (HEAD + '[[limit]]\nfigure = "evm_rsm"\nupper = 1', "limit[0].figure", "nearest: evm_rms"),
        (HEAD + '[[limit]]\nfigure = "evm_rms"', "limit[0]", "lower, upper or both"),
        (HEAD + '[[limit]]\nfigure = "evm_rms"\nupper = "a"', "limit[0].upper", "a number"),
        (HEAD + '[[limit]]\nfigure = "evm_rms"\nupper = nan', "limit[0].upper", "a number"),
        (HEAD + '[[limit]]\nfigure = "evm_rms"\nuper = 1', "limit[0].uper", "nearest: upper"),
        (HEAD + '[[limit]]\nfigure = "evm_rms"\nlower=2\nupper = 1', "limit[0].lower", "at most"),
        (HEAD + '[[limit]]\nfigure = "bit_error_ratio"\nantenna=1\nupper = 1', "antenna", "no ant"),
        (HEAD + '[[limit]]\nfigure = "adjacent_power_db"\nupper = 1', "limit[0]", "[[adjacent]]"),
        (HEAD + '[[limit]]\nfigure = "predicted_ber_at_snr"\nupper = 1', "snr_db", "SNR"),
        ("format = ", "limits", "TOML"),
    ],
)
def test_faults_are_told_in_one_line(text: str, place: str, expected: str) -> None:
    with pytest.raises(InputError) as caught:
        parse_limits(text, "limits")
    line = str(caught.value)
    assert place in line and expected in line and "\n" not in line


def test_unreadable_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="readable"):
        load_limits(tmp_path / "none.limits.toml")


@given(st.text(max_size=200))
def test_any_text_is_read_or_refused(text: str) -> None:
    with contextlib.suppress(InputError):
        assert isinstance(parse_limits(text), Limits)


@pytest.mark.parametrize(
    ("value", "half", "decision"),
    [
        (5.0, 1.0, Decision.ACCEPTED),
        (7.0, 1.0, Decision.ACCEPTED),
        (7.5, 1.0, Decision.UNDECIDED),
        (8.5, 1.0, Decision.UNDECIDED),
        (9.5, 1.0, Decision.NOT_ACCEPTED),
        (2.5, 1.0, Decision.UNDECIDED),
        (0.5, 1.0, Decision.NOT_ACCEPTED),
        (5.0, 9.0, Decision.UNDECIDED),
        (math.nan, math.nan, Decision.NOT_MEASURED),
    ],
)
def test_decision_rule(value: float, half: float, decision: Decision) -> None:
    limit = Limit(figure="evm_rms", lower=2.0, upper=8.0)
    assert judge(_figure("evm_rms", value, half), limit).decision is decision


def test_frames_needed_shrink_the_interval_to_the_bound() -> None:
    limit = Limit(figure="evm_rms", upper=8.0)
    judgement = judge(_figure("evm_rms", 7.5, 1.0, frames=100), limit)
    assert judgement.frames_needed == 400
    assert judge(_figure("evm_rms", 8.0, 1.0), limit).frames_needed is None


def test_chance_of_a_wrong_verdict_on_the_bound() -> None:
    """A figure that truly lies on its bound is accepted and refused in 2.5 % each (level 95 %).

    20,000 draws: the standard deviation of each share is 0.11 %; five of them: chance 6e-7.
    """
    rng = np.random.default_rng(5)
    limit = Limit(figure="evm_rms", upper=8.0)
    half = 1.959964 * 0.3
    found = [
        judge(_figure("evm_rms", v, half), limit).decision for v in rng.normal(8.0, 0.3, 20_000)
    ]
    for decision in (Decision.ACCEPTED, Decision.NOT_ACCEPTED):
        assert abs(found.count(decision) / 20_000 - 0.025) < 0.0055


def test_overall() -> None:
    limits = parse_limits(
        HEAD
        + '[[limit]]\nfigure="evm_rms"\nantenna="each"\nupper=8\n'
        + '[[limit]]\nfigure="carrier_error_ppm"\nlower=-1\nupper=1'
    )
    good = [_figure("evm_rms", 4, 1, "0"), _figure("evm_rms", 4, 1, "1")]
    carrier = _figure("carrier_error_ppm", 0.1, 0.1)
    assert overall(judge_all([*good, carrier], limits)) is Decision.ACCEPTED
    assert overall(judge_all(good, limits)) is Decision.UNDECIDED
    bad = _figure("evm_rms", 12, 1, "2")
    assert overall(judge_all([*good, carrier, bad], limits)) is Decision.NOT_ACCEPTED
