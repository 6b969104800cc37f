"""Figures over the recording's time: frames with their marks, timing, channel."""

from __future__ import annotations

from collections import Counter

import numpy as np
from numpy.typing import NDArray

from spatiq.report.gathered import Gathered
from spatiq.report.plots import Panel, Plot, Series, Table
from spatiq.results.wording import DASH, count, fixed, marks_text, number, printable, ratio

_LISTED = 200
_MOST_PATHS = 12


def thinned(seen: Gathered) -> str:
    """What was left out of plots over frames; empty when nothing was."""
    if seen.drawn.size == seen.count:
        return ""
    return (
        f"Drawn are {count(int(seen.drawn.size))} of {count(seen.count)} frames: of each stretch of"
        " time those with the smallest and the largest figures, those with most wrong bits, and"
        " some of every mark."
    )


def frames_over_time(seen: Gathered) -> Plot:
    """BER, EVM, SNR and carrier offset of frames, and where frames are marked or lost."""
    c, d = seen.columns, seen.drawn
    time = c["time_s"][d]
    ber, high = c["ber"][d], c["ber_high"][d]
    none = c["bit_errors"][d] == 0
    wrong = np.where(none, np.nan, ber)
    panels = [
        Panel(
            "time, s",
            "bit error ratio",
            [
                Series("measured", "points", time, wrong, frames=d),
                Series(
                    "no bit wrong: upper bound",
                    "bounds",
                    time,
                    np.where(none & (c["bits_compared"][d] > 0), high, np.nan),
                    frames=d,
                ),
                Series("predicted", "line", time, c["predicted_ber"][d], frames=d, hue=1),
            ],
            log_y=True,
        )
    ]
    for name, title in (
        ("evm_percent", "EVM, %"),
        ("snr_db", "SNR, dB"),
        ("cfo_hz", "carrier, Hz"),
    ):
        panels.append(Panel("time, s", title, [Series("", "points", time, c[name][d], frames=d)]))
    marks = _marks(seen)
    panels += [marks] if marks.series else []
    return Plot(
        "frames",
        "How did it go over time?",
        _marked(seen),
        panels,
        _frame_table(seen),
        shared_x=True,
        note=thinned(seen),
        more={"pick": True},
    )


def _marks(seen: Gathered) -> Panel:
    """A row of ticks for each mark that occurs, and one for lost frames."""
    c, d = seen.columns, seen.drawn
    marks = c["marks"][d]
    series: list[Series] = []
    for name, bit in seen.flags.items():
        here = d[(marks & bit) != 0]
        if here.size:
            label = name.lower().replace("_", " ")
            series.append(_row(label, c["time_s"][here], len(series), here))
    if seen.lost:
        series.append(_row("lost", seen.lost_time_s, len(series), ()))
    return Panel("time, s", "marks", series, y_names=[s.name for s in series])


def _row(label: str, time: NDArray[np.float64], level: int, frames: object) -> Series:
    ids = np.asarray(frames, np.int64)
    return Series(label, "points", time, np.full(time.size, -level, float), frames=ids, hue=level)


def _marked(seen: Gathered) -> str:
    totals = {n: int(np.count_nonzero(seen.columns["marks"] & b)) for n, b in seen.flags.items()}
    told = [f"{count(n)} {name.lower().replace('_', ' ')}" for name, n in totals.items() if n]
    lost = Counter(reason for _, _, reason in seen.lost)
    told += [f"{count(n)} lost: {printable(reason)}" for reason, n in lost.most_common()]
    if not told:
        return "No frame is marked, none was lost. Choose a point to see its frame."
    return f"Frames marked: {'; '.join(told)}. Choose a point to see its frame."


def _frame_table(seen: Gathered) -> Table:
    c = seen.columns
    order = np.argsort(-c["bit_errors"][seen.drawn], kind="stable")[:_LISTED]
    rows = []
    for i in sorted(seen.drawn[order].tolist()):
        compared = c["bits_compared"][i] > 0
        rows.append(
            (
                int(c["frame"][i]),
                fixed(float(c["time_s"][i]), "", 5),
                ratio(c["ber"][i], c["ber_high"][i], int(c["bit_errors"][i]) if compared else None),
                number(float(c["predicted_ber"][i])),
                fixed(float(c["evm_percent"][i])),
                fixed(float(c["snr_db"][i])),
                fixed(float(c["cfo_hz"][i]), "", 1),
                marks_text(int(c["marks"][i]), seen.flags) or DASH,
            )
        )
    headings = ("frame", "time s", "BER", "predicted", "EVM %", "SNR dB", "carrier Hz", "marks")
    note = ""
    if len(rows) < seen.count:
        note = f"The {len(rows)} frames with most wrong bits, of {count(seen.count)}."
    return Table(headings, rows, note)


def timing_track(seen: Gathered) -> Plot:
    """Frame starts against an even spacing; clock offset."""
    title = "Do timing and clock hold?"
    c, d = seen.columns, seen.drawn
    rate = float(seen.results.provenance["symbol_rate_hz"])
    period = float(seen.results.provenance["frame_symbols"]) / rate
    late = _lateness(c["time_s"], c["segment"], period)[d] * rate
    time = c["time_s"][d]
    panels = [
        Panel("time, s", "late, symbols", [Series("", "points", time, late, frames=d)]),
        Panel(
            "time, s",
            "clock, ppm",
            [
                Series(
                    "",
                    "points",
                    time,
                    c["clock_ppm"][d],
                    c["clock_ppm"][d] - c["clock_std_ppm"][d],
                    c["clock_ppm"][d] + c["clock_std_ppm"][d],
                    frames=d,
                )
            ],
        ),
    ]
    jitter = float(np.nanstd(late)) if np.isfinite(late).any() else None
    says = (
        f"Frame starts scatter by {number(jitter, 'symbol periods')} rms about an even spacing;"
        " bars of the clock offset are one standard deviation."
        if jitter is not None
        else "Frames do not come at an even spacing: starts are not compared."
    )
    rows = [
        (label, *(number(float(v), unit) for v in _spread(x)))
        for label, unit, x in (
            ("start, late by", "symbols", late),
            ("clock offset", "ppm", c["clock_ppm"]),
            ("carrier offset", "Hz", c["cfo_hz"]),
        )
    ]
    table = Table(("figure", "mean", "rms scatter", "least", "most"), rows)
    return Plot("timing", title, says, panels, table, shared_x=True, note=thinned(seen))


def _spread(values: NDArray[np.float64]) -> tuple[float, float, float, float]:
    good = values[np.isfinite(values)]
    if not good.size:
        return (np.nan,) * 4
    return float(good.mean()), float(good.std()), float(good.min()), float(good.max())


def _lateness(
    time: NDArray[np.float64], segment: NDArray[np.int32], shortest: float
) -> NDArray[np.float64]:
    """Seconds that each frame starts after the straight line through its segment's starts.

    NaN where fewer than 3 frames are in a segment, or spacings are no multiples of one period.
    """
    late = np.full(time.size, np.nan)
    for s in np.unique(segment):
        here = np.flatnonzero(segment == s)
        if here.size < 3:
            continue
        steps = np.diff(time[here])
        period = float(np.median(steps[steps < 1.5 * steps.min()]))
        number_of = np.round((time[here] - time[here[0]]) / period)
        for _ in range(2):  # the first line's period numbers distant frames well enough
            slope, start = np.polyfit(number_of, time[here], 1)
            number_of = np.round((time[here] - start) / slope)
        left = time[here] - (start + slope * number_of)
        if np.abs(left).max() < 0.1 * shortest:
            late[here] = left
    return late


def channel_over_time(seen: Gathered) -> Plot:
    """Level of each antenna's path, and likeness of the channel to that of its middle frame."""
    h, frames = seen.channel, seen.channel_frames
    time = seen.columns["time_s"][frames]
    paths = [(r, a) for r in range(h.shape[1]) for a in range(h.shape[2])]
    with np.errstate(divide="ignore"):
        level = 20 * np.log10(np.abs(h))
    drawn = paths[:_MOST_PATHS]
    series = [
        Series(f"antenna {a} to channel {r}", "line", time, level[:, r, a], frames=frames, hue=i)
        for i, (r, a) in enumerate(drawn)
    ]
    like = _likeness(h)
    panels = [
        Panel("time, s", "level, dB", series),
        Panel("time, s", "likeness", [Series("", "line", time, like, frames=frames)]),
    ]
    rows = []
    for r, a in paths:
        turn = np.angle(np.mean(h[:, r, a] * np.conj(h[:, 0, a]))) if h.shape[0] else np.nan
        rows.append(
            (
                a,
                r,
                fixed(float(np.mean(level[:, r, a]))),
                fixed(float(np.std(level[:, r, a]))),
                fixed(float(np.degrees(turn)), "", 1),
            )
        )
    table = Table(
        ("antenna", "receive channel", "mean level dB", "scatter dB", "phase against channel 0, °"),
        rows,
    )
    least = float(like.min()) if like.size else np.nan
    says = (
        "Levels are relative to full scale. Likeness is the correlation of a frame's channel with"
        " that of the middle frame, common phase left out: 1 means that"
        f" nothing moved. Least here: {number(least)}."
    )
    note = (
        f"Drawn are the first {len(drawn)} of {len(paths)} paths; the table has all."
        if len(drawn) < len(paths)
        else ""
    )
    return Plot("channel", "Did the channel move?", says, panels, table, shared_x=True, note=note)


def _likeness(h: NDArray[np.complex128]) -> NDArray[np.float64]:
    if not h.shape[0]:
        return np.zeros(0)
    middle = h[h.shape[0] // 2]
    product = np.abs(np.einsum("fra,ra->f", h, middle.conj()))
    size = np.linalg.norm(h.reshape(h.shape[0], -1), axis=1) * np.linalg.norm(middle)
    return np.asarray(product / np.where(size > 0, size, np.nan), np.float64)
