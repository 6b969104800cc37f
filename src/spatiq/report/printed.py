"""Plots for papers: the same as on the pages, by matplotlib, and the data that they draw."""

from __future__ import annotations

import csv
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import matplotlib
import numpy as np
from matplotlib.axes import Axes
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.report.plots import Panel, Plot, Series
from spatiq.results.whole_files import whole_file

FORMATS = ("svg", "pdf", "png")
WIDTHS_MM = (40.0, 400.0)
COLUMN_MM = 88.0  # of two columns on A4; common practice, no source
_HUES = ("#0b5a8a", "#b3480a", "#00795a", "#8c3f7d", "#6b5a00", "#2f7fb5", "#1d2329", "#b0305a")
_SHAPES = ("o", "P", "s", "D", "^", "X", "*", "p")
_DASHES = ("-", "--", ":", "-.", (0, (8, 3)), (0, (8, 3, 2, 3)))
_DENSITY = LinearSegmentedColormap.from_list("density", ["#8fb9d9", "#062a45"])
_STYLE: Any = {
    "font.size": 7,
    "axes.titlesize": 7,
    "axes.linewidth": 0.5,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "grid.linewidth": 0.3,
    "grid.color": "#c9c6ba",
    "lines.linewidth": 0.9,
    "lines.markersize": 2.2,
    "legend.fontsize": 6,
    "legend.frameon": False,
    "savefig.dpi": 400,
    "pdf.fonttype": 42,
    "svg.hashsalt": "spatiq",
}
_WITHOUT_DATE = {"svg": {"Date": None}, "pdf": {"CreationDate": None}, "png": {}}


def write_printed(
    plots: list[Plot], folder: Path, form: str, width_mm: float, *, overwrite: bool = False
) -> list[Path]:
    """Each plot as KEY.form, and the data it draws as KEY.csv.

    Returns:
        the files written; plots without anything to draw give none.

    Raises:
        InputError: another format or width than can be, or see `whole_file`.
    """
    if form not in FORMATS:
        raise InputError("--format", "", form, f"one of {', '.join(FORMATS)}")
    if not WIDTHS_MM[0] <= width_mm <= WIDTHS_MM[1]:
        allowed = f"{WIDTHS_MM[0]:g} to {WIDTHS_MM[1]:g} mm"
        raise InputError("--width", "", f"{width_mm:g}", allowed)
    written = []
    for plot in (p for p in plots if p.panels):
        picture, data = folder / f"{plot.key}.{form}", folder / f"{plot.key}.csv"
        with (
            matplotlib.rc_context(_STYLE),
            whole_file(picture, overwrite=overwrite) as partial,
        ):
            drawn(plot, width_mm / 25.4).savefig(partial, format=form, metadata=_WITHOUT_DATE[form])
        with whole_file(data, overwrite=overwrite) as partial:
            _write_data(plot, partial)
        written += [picture, data]
    return written


def drawn(plot: Plot, width: float) -> Figure:
    """A plot as a figure `width` inches wide."""
    abreast = min(plot.abreast, len(plot.panels), max(1, int(width / 1.6)))
    rows = -(-len(plot.panels) // abreast)
    heights = [_height(plot, plot.panels[r * abreast], width / abreast) for r in range(rows)]
    heights[0] += 0.12 * -(-_named(plot.panels[0]) // 2)  # the legend takes two columns
    figure = Figure(figsize=(width, sum(heights) + 0.3), layout="constrained")
    axes = figure.subplots(
        rows,
        abreast,
        squeeze=False,
        sharex=plot.shared_x,
        gridspec_kw={"height_ratios": heights},
    )
    for index, place in enumerate(axes.flat):
        if index >= len(plot.panels):
            place.set_axis_off()
            continue
        panel = plot.panels[index]
        _draw(place, panel)
        if plot.shared_x and index < len(plot.panels) - 1:
            place.set_xlabel("")
    return figure


def _named(panel: Panel) -> int:
    return 0 if panel.y_names else sum(bool(s.name) and _seen(s) for s in panel.series)


def _seen(series: Series) -> bool:
    return bool(np.isfinite(np.asarray(series.y, float)).any())


def _height(plot: Plot, panel: Panel, width: float) -> float:
    if panel.y_names:
        return 0.25 + 0.11 * len(panel.y_names)
    if panel.square:
        return min(width, 3.4)
    return 0.95 if plot.shared_x else min(0.7 * width, 3.0)


def _draw(place: Axes, panel: Panel) -> None:
    place.set(xlabel=panel.x_title, ylabel=panel.y_title, title=panel.title)
    if panel.matrix is not None:
        _matrix(place, panel)
        return
    place.grid(True)
    place.set_axisbelow(True)
    for series in panel.series:
        if _seen(series):
            _series(place, series, panel)
    for x0, y0, x1, y1 in panel.links:
        place.plot([x0, x1], [y0, y1], ":", color=_HUES[1])
    if panel.log_x:
        place.set_xscale("log")
    if panel.log_y:
        place.set_yscale("log")
    if panel.square:
        place.set_aspect("equal", adjustable="box" if panel.reach else "datalim")
    if panel.reach:
        place.set(xlim=(-panel.reach, panel.reach), ylim=(-panel.reach, panel.reach))
    if panel.x_names:
        place.set_xticks(range(len(panel.x_names)), panel.x_names)
        place.set_xlim(-0.6, len(panel.x_names) - 0.4)
    if panel.y_names:
        place.set_yticks([-k for k in range(len(panel.y_names))], panel.y_names)
        place.set(ylim=(0.5 - len(panel.y_names), 0.5), ylabel="")
    elif _named(panel):
        place.legend(loc="lower left", bbox_to_anchor=(0, 1), ncols=2, borderaxespad=0.1)


def _series(place: Axes, series: Series, panel: Panel) -> None:
    x, y = np.asarray(series.x, float), np.asarray(series.y, float)
    tone, name = _HUES[series.hue % 8], series.name or None
    if series.kind == "line":
        place.plot(x, y, linestyle=_DASHES[series.hue % 6], color=tone, label=name)
    elif series.kind == "density":
        weights = np.log10(np.asarray(series.weights, float))
        place.scatter(x, y, c=weights, s=1.5, marker="s", cmap=_DENSITY, linewidths=0)
    elif series.kind == "cloud":
        place.scatter(x, y, s=1.0, color=tone, linewidths=0, alpha=0.6)
    elif series.kind == "bounds":
        place.plot(x, y, "v", color=tone, fillstyle="none", label=name)
    else:
        bars = _bars(series, y)
        shape = "+" if panel.square and not panel.links and not series.labels else ""
        place.errorbar(
            x,
            y,
            bars,
            fmt=shape or _SHAPES[series.hue % 8],
            color=tone,
            label=name,
            elinewidth=0.6,
            markersize=6 if shape else None,
        )
        for at_x, at_y, label in zip(x, y, series.labels, strict=False):
            place.annotate(label, (at_x, at_y), (0, 2), textcoords="offset points", fontsize=4.5)


def _bars(series: Series, y: NDArray[np.float64]) -> NDArray[np.float64] | None:
    if not np.size(series.low):
        return None
    low, high = np.asarray(series.low, float), np.asarray(series.high, float)
    bars: NDArray[np.float64] = np.maximum(np.stack([y - low, high - y]), 0.0)
    return bars


def _matrix(place: Axes, panel: Panel) -> None:
    matrix = panel.matrix
    if matrix is None:
        return
    values = np.asarray(matrix.values, float)
    place.imshow(values, cmap="cividis", vmin=matrix.low, vmax=0.0, aspect="equal")
    place.set_xticks(range(len(matrix.columns)), matrix.columns)
    place.set_yticks(range(len(matrix.rows)), matrix.rows)
    for (i, j), value in np.ndenumerate(values):
        bright = np.isfinite(value) and value > matrix.low / 2
        tone = "#000000" if bright or not np.isfinite(value) else "#ffffff"
        text = matrix.texts[i][j]
        place.text(j, i, text, ha="center", va="center", color=tone, fontsize=5)


def _rows(plot: Plot) -> Iterator[tuple[Any, ...]]:
    for number, panel in enumerate(plot.panels):
        name = panel.title or panel.y_title or str(number)
        if panel.matrix is not None:
            for (i, j), value in np.ndenumerate(np.asarray(panel.matrix.values, float)):
                share = 10.0**value if np.isfinite(value) else 0.0
                yield name, "", panel.matrix.columns[j], panel.matrix.rows[i], share, "", ""
        for series in panel.series:
            nothing = [""] * np.size(series.x)
            columns = (
                np.asarray(values).tolist() if np.size(values) else nothing
                for values in (series.x, series.y, series.weights, series.low, series.high)
            )
            for x, y, weight, low, high in zip(*columns, strict=True):
                if y == y:  # what is not drawn is not exported
                    yield name, series.name, x, y, weight, low, high


def _write_data(plot: Plot, path: Path) -> None:
    """One line for each thing drawn; a matrix: x decided, y sent, value their share."""
    with path.open("w", encoding="utf-8", newline="") as file:
        table = csv.writer(file, lineterminator="\n")
        table.writerow(("panel", "series", "x", "y", "value", "low", "high"))
        table.writerows(_rows(plot))
