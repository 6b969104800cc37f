"""The one-page report: verdict, limits, figures, what cannot be told."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator
from typing import Any

_WIDTH = 98


def report(made: dict[str, Any]) -> str:
    """The page, from the document of `spatiq.acceptance.document`."""
    return "\n".join(_lines(made)) + "\n"


def _lines(made: dict[str, Any]) -> Iterator[str]:
    yield f"Transmitter {made['verdict'].upper()}"
    yield f"  recording {made['recording']}, link {made['link']}, limits {made['limits']}"
    lost = sum(made["lost"].values())
    yield (
        f"  set-up {made['setup']}; {made['frames']} frames, {lost} lost; intervals at "
        f"{100 * made['confidence']:g} %"
    )
    for reason, count in made["lost"].items():
        yield f"  lost: {count} {reason}"
    if made["causes"]:
        yield ""
        yield "Probable causes"
    for cause in made["causes"]:
        yield from _wrapped(f"{cause['name']}: {cause['saw']} (by chance: {cause['chance']:.1g})")
        yield from textwrap.wrap(f"try: {cause['advice']}", _WIDTH, initial_indent="    ")
    yield ""
    yield "Limits"
    yield f"  {'figure':<40} {'value':>11}  {'bounds':<22} decision"
    yield from (_judgement(row) for row in made["judgements"])
    yield from _wrapped(made["rule"])
    yield ""
    yield "Figures"
    yield f"  {'figure':<40} {'value':>11}  {'interval':<24} unit"
    yield from (_figure(row) for row in made["figures"])
    notes = sorted({row["note"] for row in made["figures"] if row["note"]})
    for note in notes:
        names = sorted({row["figure"] for row in made["figures"] if row["note"] == note})
        yield from _wrapped(f"{note}: {', '.join(names)}")
    yield ""
    yield "What this set-up cannot tell"
    for sentence in made["cannot_tell"]:
        yield from _wrapped(sentence)
    yield ""
    yield from textwrap.wrap(made["caution"], _WIDTH)


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, _WIDTH, initial_indent="  ", subsequent_indent="    ")


def _title(row: dict[str, Any]) -> str:
    return f"{row['figure']} {row['subject']}" if row["subject"] else row["figure"]


def _number(value: float | None) -> str:
    return "unbounded" if value is None else f"{value:.4g}"


def _figure(row: dict[str, Any]) -> str:
    ends = f"{_number(row['low'])} to {_number(row['high'])}"
    return f"  {_title(row):<40} {_number(row['value']):>11}  {ends:<24} {row['unit']}".rstrip()


def _judgement(row: dict[str, Any]) -> str:
    parts = []
    if row["lower"] is not None:
        parts.append(f"from {row['lower']:g}")
    if row["upper"] is not None:
        parts.append(f"to {row['upper']:g}")
    value = "missing" if row["value"] is None else _number(row["value"])
    decision = row["decision"]
    if row["frames_needed"] is not None:
        decision += f": {math.ceil(row['frames_needed'])} frames would do"
    return f"  {_title(row):<40} {value:>11}  {' '.join(parts):<22} {decision}"
