"""What is to be drawn, told without saying by what: pages and printed figures both draw from it.

To add a plot: a function that gives a `Plot`, entered in recording_sheet.py or night_sheet.py. Its
table holds the same figures as its panels, for those who read rather than look.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike

from spatiq.results.plain import plain

DIGITS = 7  # significant digits of what is drawn: a screen shows four

Kind = Literal["points", "line", "bounds", "cloud", "density"]
Cell = str | int | float | None


@dataclass(frozen=True)
class Series:
    """One run of values in a panel.

    Attributes:
        name: in the legend; empty: not in it.
        kind: "points"; "line"; "bounds": upper bounds, drawn as arrows down; "cloud": many points,
            small; "density": cells of a grid, `weights` symbols in each.
        x, y: shape (n,); NaN is not drawn.
        low, high: ends of each value's interval, or empty.
        frames: index of the frame behind each value, or empty.
        labels: a text beside each point, or empty.
        hints: a text of each value, shown when it is pointed at, or empty.
        weights: counts of "density", or empty.
        hue: which of the plot's colours; equal names share one.
    """

    name: str
    kind: Kind
    x: ArrayLike
    y: ArrayLike
    low: ArrayLike = ()
    high: ArrayLike = ()
    frames: ArrayLike = ()
    labels: Sequence[str] = ()
    hints: Sequence[str] = ()
    weights: ArrayLike = ()
    hue: int = 0


@dataclass(frozen=True)
class Matrix:
    """A table of shares as a map: values (rows, columns), NaN where there is nothing."""

    rows: Sequence[str]
    columns: Sequence[str]
    values: ArrayLike
    texts: Sequence[Sequence[str]]
    low: float  # of the colour scale, decades
    unit: str = "share of row, logarithmic"


@dataclass(frozen=True)
class Panel:
    """One pair of axes."""

    x_title: str
    y_title: str
    series: Sequence[Series] = ()
    title: str = ""
    log_x: bool = False
    log_y: bool = False
    square: bool = False
    reach: float | None = None  # both axes from -reach to reach
    dates: bool = False
    matrix: Matrix | None = None
    x_names: Sequence[str] = ()  # of 0, 1, 2, ...
    y_names: Sequence[str] = ()  # of 0, -1, -2, ...
    links: Sequence[tuple[float, float, float, float]] = ()  # x0, y0, x1, y1


@dataclass(frozen=True)
class Table:
    """The same figures to be read; numbers are set right, texts left."""

    headings: Sequence[str]
    rows: Sequence[Sequence[Cell]]
    note: str = ""


@dataclass(frozen=True)
class Plot:
    """One figure of a page.

    Attributes:
        key: short name, used in addresses and file names.
        title: the question that it answers.
        says: what it shows, in words.
        panels: drawn beside each other where there is room; none: `says` tells why.
        abreast: panels in a row, where there is room.
        shared_x: panels stand above each other and share the horizontal axis.
        note: what was left out in drawing.
    """

    key: str
    title: str
    says: str
    panels: Sequence[Panel] = ()
    table: Table | None = None
    abreast: int = 1
    shared_x: bool = False
    note: str = ""
    more: dict[str, Any] = field(default_factory=dict)


def rounded(values: ArrayLike) -> list[Any]:
    """Values to `DIGITS` significant digits; None for what is not finite."""
    return [
        v if not isinstance(v, float) else float(f"{v:.{DIGITS}g}") if math.isfinite(v) else None
        for v in np.asarray(values).tolist()
    ]


def _series(series: Series) -> dict[str, Any]:
    lists = {
        name: rounded(getattr(series, name))
        for name in ("x", "y", "low", "high", "frames", "weights")
        if np.size(getattr(series, name))
    }
    labels = {n: list(t) for n in ("labels", "hints") if (t := getattr(series, n))}
    return {"name": series.name, "kind": series.kind, "hue": series.hue, **lists, **labels}


def _panel(panel: Panel) -> dict[str, Any]:
    told = {
        name: getattr(panel, name)
        for name in ("title", "x_title", "y_title", "log_x", "log_y", "square", "reach", "dates")
    }
    told["series"] = [_series(s) for s in panel.series]
    for series, drawn in zip(panel.series, told["series"], strict=True):
        if panel.dates:  # milliseconds since 1970 have more digits than a figure
            drawn["x"] = np.asarray(series.x).tolist()
    told["x_names"], told["y_names"] = list(panel.x_names), list(panel.y_names)
    told["links"] = [rounded(link) for link in panel.links]
    if panel.matrix is not None:
        m = panel.matrix
        told["matrix"] = {
            "rows": list(m.rows),
            "columns": list(m.columns),
            "values": [rounded(row) for row in np.asarray(m.values, float)],
            "texts": [list(row) for row in m.texts],
            "low": m.low,
            "unit": m.unit,
        }
    return told


def drawing(plot: Plot) -> dict[str, Any]:
    """A plot's panels as plain JSON values, for the page's own script."""
    out: dict[str, Any] = plain(
        {
            "key": plot.key,
            "title": plot.title,
            "abreast": plot.abreast,
            "shared_x": plot.shared_x,
            "panels": [_panel(p) for p in plot.panels],
            **plot.more,
        }
    )
    return out
