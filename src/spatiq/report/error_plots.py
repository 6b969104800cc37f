"""Where errors come from: confused antennas, SNR, kind of bit, place in the frame."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.metrics.frame_table import Mark
from spatiq.metrics.intervals import clopper_pearson
from spatiq.metrics.prediction import predicted_confusion
from spatiq.report.gathered import Gathered
from spatiq.report.plots import Matrix, Panel, Plot, Series, Table
from spatiq.report.thinning import spread_out
from spatiq.results.wording import DASH, count, number, pick, ratio

_PREDICTED_FRAMES = 48
_MOST_SETS = 16  # of antennas drawn as a matrix with texts
_MOST_BINS = 24
_PLACES = 100
# Frames detected otherwise than on the channel and white noise that are kept of them.
_OTHERWISE = Mark.COLOURED_NOISE | Mark.ANTENNA_DELAYS | Mark.ECHOES


def confusion(seen: Gathered) -> Plot:
    """Antenna decided against antenna sent, beside what theory predicts."""
    title = "Which antennas were confused?"
    counts = seen.results.confusion_total
    names = list(seen.results.set_names)
    total = int(counts.sum())
    if not total:
        return Plot("confusion", title, "No symbol period could be compared with a known one.")
    predicted, why = _predicted(seen)
    sent = counts.sum(axis=1, keepdims=True)
    shares = np.where(sent > 0, counts / np.maximum(sent, 1), np.nan)
    low = _lowest(shares, predicted)
    texts = [[_cell(int(n), int(s[0])) for n in row] for row, s in zip(counts, sent, strict=True)]
    panels = [_map("measured", names, shares, texts, low)]
    if predicted is not None:
        words = [[number(float(p)) for p in row] for row in predicted]
        panels.append(_map("predicted by theory", names, predicted, words, low))
    wrong = total - int(np.trace(counts))
    says = f"{count(wrong)} of {count(total)} symbol periods were decided for a wrong antenna."
    if predicted is not None:
        expected = float(np.sum(sent[:, 0] * (1 - np.diag(predicted))))
        says += f" Theory expects {_expected(expected)} on the channel and noise measured."
    return Plot("confusion", title, says + why, panels, _pairs(counts, predicted, names), abreast=2)


def _expected(periods: float) -> str:
    return count(round(periods)) if periods >= 100 else number(periods)


def _lowest(shares: NDArray[Any], predicted: NDArray[np.float64] | None) -> float:
    """Decade at which the colour scale starts, the same for both maps."""
    seen = shares if predicted is None else np.concatenate([shares, predicted])
    positive = seen[np.isfinite(seen) & (seen > 1e-9)]
    return float(np.floor(np.log10(positive.min()))) if positive.size else -1.0


def _cell(n: int, sent: int) -> str:
    return f"{count(n)}\n{number(100 * n / sent)} %" if n and sent else "0"


def _map(title: str, names: list[str], shares: NDArray[Any], texts: Any, low: float) -> Panel:
    with np.errstate(divide="ignore", invalid="ignore"):
        decades = np.log10(shares)
    decades = np.where(np.isfinite(decades) & (decades >= low), decades, np.nan)
    drawn = texts if len(names) <= _MOST_SETS else [[""] * len(names)] * len(names)
    matrix = Matrix(names, names, decades, drawn, low)
    return Panel("antenna decided", "antenna sent", title=title, square=True, matrix=matrix)


def _pairs(counts: NDArray[Any], predicted: NDArray[np.float64] | None, names: list[str]) -> Table:
    sent = counts.sum(axis=1)
    order = np.argsort(-(counts - np.diag(np.diag(counts))), axis=None, kind="stable")
    rows = []
    for i, j in zip(*np.unravel_index(order[:400], counts.shape), strict=True):
        if i != j and sent[i]:
            theory = number(float(predicted[i, j])) if predicted is not None else DASH
            share = number(float(counts[i, j] / sent[i])) if counts[i, j] else "0"
            rows.append((names[i], names[j], int(counts[i, j]), share, theory))
    return Table(("sent", "decided", "symbol periods", "share of sent", "predicted"), rows[:200])


def _predicted(seen: Gathered) -> tuple[NDArray[np.float64] | None, str]:
    """Shares that theory predicts, averaged over frames of the recording; else why not."""
    link = seen.link
    if link is None:
        return None, f" Not predicted: {seen.link_fault}"
    if link.codebook.block > 1:
        return None, " Not predicted: words of this scheme take several symbol periods."
    c = seen.columns
    usual = ((c["marks"] & int(_OTHERWISE)) == 0) & (c["channel_model"] == 0)
    frames = spread_out(np.flatnonzero(usual), _PREDICTED_FRAMES)
    if not frames.size or "impulse_responses" in seen.results.file:
        return None, " Not predicted: no frame has a still channel without echoes in white noise."
    amplitude = float(np.sqrt(np.mean(link.layout.payload_amplitude**2)))
    channel = np.stack([seen.results.channel(i, i + 1)[0] for i in frames.tolist()])
    spread = np.stack([seen.row("channel/error_variance", i) for i in frames.tolist()])
    spread = np.where(np.isfinite(spread), spread, 0.0)
    noise = c["noise_power"][frames]
    shares = predicted_confusion(channel * amplitude, noise, spread * amplitude**2, link.codebook)
    return (shares, "") if np.isfinite(shares).all() else (None, "")


def ber_over_snr(seen: Gathered) -> Plot:
    """Measured ratios pooled over frames of like SNR, beside the mean prediction."""
    title = "Is it what theory expects at this SNR?"
    c = seen.columns
    use = np.flatnonzero(np.isfinite(c["snr_db"]) & (c["bits_compared"] > 0))
    if not use.size:
        return Plot("ber", title, "No frame has bits to compare with.")
    snr = c["snr_db"][use]
    bins = int(np.clip(np.sqrt(use.size), 1, _MOST_BINS))
    edges = np.quantile(snr, np.linspace(0, 1, bins + 1))
    place = np.clip(np.searchsorted(edges, snr, side="right") - 1, 0, bins - 1)
    bits = np.bincount(place, c["bits_compared"][use], bins).astype(np.int64)
    wrong = np.bincount(place, c["bit_errors"][use], bins).astype(np.int64)
    keep = bits > 0
    middle = np.bincount(place, snr, bins)[keep] / np.bincount(place, minlength=bins)[keep]
    known = np.where(np.isfinite(c["predicted_ber"][use]), c["bits_compared"][use], 0)
    weighted = np.bincount(place, np.nan_to_num(c["predicted_ber"][use]) * known, bins)[keep]
    weight = np.bincount(place, known, bins)[keep]
    predicted = np.where(weight > 0, weighted / np.maximum(weight, 1), np.nan)
    bits, wrong = bits[keep], wrong[keep]
    level = pick(seen.results.summary, "confidence") or 0.95
    low, high = clopper_pearson(wrong, bits, level)
    some = wrong > 0
    series = [
        Series("measured", "points", middle[some], (wrong / bits)[some], low[some], high[some]),
        Series("no bit wrong: upper bound", "bounds", middle[~some], high[~some]),
        Series("predicted", "line", middle, predicted, hue=1),
    ]
    rows = [
        (
            f"{m:.2f}",
            ratio(w / b, h, int(w)),
            f"{number(lo)} to {number(h)}",
            number(float(p)),
            f"{count(int(w))} of {count(int(b))}",
        )
        for m, w, b, lo, h, p in zip(
            middle.tolist(), wrong.tolist(), bits.tolist(), low, high, predicted, strict=True
        )
    ]
    says = f"Frames are pooled by SNR, equally many in each point; bars are {100 * level:g} %."
    headings = ("SNR dB", "BER", "interval", "predicted", "wrong bits")
    panel = Panel("SNR, dB", "bit error ratio", series, log_y=True)
    return Plot("ber", title, says, [panel], Table(headings, rows))


def spatial_and_signal(seen: Gathered) -> Plot:
    """Ratios of the bits that chose the antenna and of those in the symbol."""
    title = "Antenna or symbol: which bits fail?"
    summary = seen.results.summary
    kinds = [("all bits", "ber"), ("spatial bits", "ber_spatial"), ("signal bits", "ber_signal")]
    rows, names, values, low, high, theory = [], [], [], [], [], []
    for name, key in kinds:
        found, expected = summary.get(key), summary.get(f"predicted_{key}")
        if found is None or not found["compared"]:
            continue
        names.append(name)
        bound = found["errors"] == 0
        values.append(float(found["high"] if bound else found["value"]))
        low.append(float(found["high"] if bound else found["low"]))
        high.append(float(found["high"]))
        theory.append(np.nan if not expected else float(expected))
        rows.append(
            (
                name,
                ratio(found["value"], found["high"], found["errors"]),
                f"{number(found['low'])} to {number(found['high'])}",
                number(expected),
                f"{count(found['errors'])} of {count(found['compared'])}",
            )
        )
    if not rows:
        return Plot("bits", title, "No bit is known: nothing to compare with.")
    places = np.arange(len(names), dtype=float)
    panel = Panel(
        "",
        "bit error ratio",
        [
            Series("measured", "points", places, values, low, high),
            Series("predicted", "points", places + 0.1, theory, hue=1),
        ],
        log_y=True,
        x_names=names,
    )
    says = "A point without a bar is an upper bound: no bit was wrong."
    table = Table(("bits", "BER", "interval", "predicted", "wrong bits"), rows)
    return Plot("bits", title, says, [panel], table)


def error_positions(seen: Gathered) -> Plot:
    """Share of wrong antennas and wrong symbols over the place in the payload."""
    title = "Where in the frame do errors lie?"
    if not seen.results.has_symbols:
        return Plot("positions", title, "Words were not kept: measure with --symbols to see this.")
    if seen.link is None:
        return Plot("positions", title, f"The link cannot be built: {seen.link_fault}")
    book = seen.link.codebook
    words = int(seen.results.file["symbols/words_sent"].shape[1])
    compared, antenna, symbol = (np.zeros(words, np.int64) for _ in range(3))
    for start in range(0, seen.count, 512):
        decided, sent = seen.results.words(start, start + 512)
        known = sent >= 0
        safe = np.maximum(sent, 0)
        other = known & (book.set_index[safe] != book.set_index[decided])
        compared += known.sum(axis=0)
        antenna += other.sum(axis=0)
        symbol += (known & ~other & (safe != decided)).sum(axis=0)
    if not compared.any():
        return Plot("positions", title, "No word is known: nothing to compare with.")
    edges = np.unique(np.linspace(0, words, min(_PLACES, words) + 1).astype(int))
    starts = edges[:-1]
    pooled = [np.add.reduceat(x, starts) for x in (compared, antenna, symbol)]
    middle = (edges[:-1] + edges[1:] - 1) / 2
    total = np.maximum(pooled[0], 1)
    series = [
        Series("wrong antenna", "line", middle, pooled[1] / total),
        Series("right antenna, wrong symbol", "line", middle, pooled[2] / total, hue=1),
    ]
    rows = [
        (f"{a} to {b - 1}", int(n), int(x), int(y))
        for a, b, n, x, y in zip(edges[:-1], edges[1:], *pooled, strict=True)
    ]
    says = (
        "Errors that gather at the beginning point to a switch that settles slowly; errors that"
        " grow towards the end, to a track that was lost."
    )
    panel = Panel("payload word", "share of words", series)
    headings = ("payload words", "compared", "wrong antenna", "wrong symbol")
    return Plot("positions", title, says, [panel], Table(headings, rows))
