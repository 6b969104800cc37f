"""What was received: symbols of each antenna, equalised, and the codebook behind the channel."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.special import erfc

from spatiq.link.description import Link
from spatiq.report.gathered import Gathered
from spatiq.report.plots import Panel, Plot, Series, Table
from spatiq.results.wording import DASH, count, fixed, number

_MOST_PANELS = 8
_MOST_POINTS = 1200  # of a panel; more are drawn as a density
_CELLS = 72
_MOST_WORDS = 256
_CLOSEST = 10


def first_values(link: Link) -> NDArray[np.complex128]:
    """Symbol of each word's first active antenna, (C,); 0 for a word that sends nothing."""
    vectors = link.codebook.vectors
    active = vectors != 0
    return np.asarray(vectors[np.arange(len(vectors)), active.argmax(axis=1)])


def equalised(
    symbols: NDArray[np.complex64],
    channel: NDArray[np.complex128],
    words: NDArray[np.int64],
    link: Link,
) -> NDArray[np.complex128]:
    """Received vectors projected on the word's own direction: the symbol as it came out, (n,).

    The z of the equalised EVM (metrics/measuring_kernels.py): (H u)^H y / ||H u||^2, u the word's
    vector over its first active antenna's symbol. NaN for words that send nothing.

    Args:
        symbols: (n, Nr).
        channel: (Nr, Nt).
        words: (n,); word of each period.
        link: as measured with.
    """
    first = first_values(link)
    with np.errstate(divide="ignore", invalid="ignore"):
        unit = (link.codebook.vectors @ channel.T) / first[:, None]  # (C, Nr)
        gain = np.sum(np.abs(unit) ** 2, axis=1)
        return np.asarray(np.sum(unit[words].conj() * symbols, axis=1) / gain[words])


def frame_symbols(
    seen: Gathered, frame: int, link: Link
) -> tuple[NDArray[np.complex128], NDArray[np.int64], NDArray[np.bool_]]:
    """Equalised symbols, their reference words and whether these are known, of one frame.

    The reference is the word sent where it is known, else the word decided.
    """
    decided, sent = seen.results.words(frame, frame + 1)
    known = sent[0] >= 0
    words = np.where(known, sent[0], decided[0]).astype(np.int64)
    y = seen.results.symbols(frame, frame + 1)[0]
    h = seen.results.channel(frame, frame + 1)[0]
    return equalised(y, h, words, link), words, known


def _why_not(seen: Gathered) -> str:
    if not seen.results.has_symbols:
        return "Symbols were not kept: measure with --symbols to see them."
    if seen.link is None:
        return f"The link cannot be built: {seen.link_fault}"
    if seen.link.codebook.block > 1:
        return "Words of this scheme take several symbol periods: there is no single symbol."
    if not seen.symbol_frames().size:
        return "The channel moved within every frame: its symbols have no one channel to stand on."
    return ""


def received_symbols(seen: Gathered) -> Plot:
    """One panel for each antenna set: symbols as they came out, and where they should be."""
    title = "What came out of each antenna?"
    why = _why_not(seen)
    link = seen.link
    if why or link is None:
        return Plot("symbols", title, why)
    frames = seen.symbol_frames()
    parts = [frame_symbols(seen, int(f), link) for f in frames]
    z = np.concatenate([p[0] for p in parts])
    words = np.concatenate([p[1] for p in parts])
    book, first = link.codebook, first_values(link)
    names = list(seen.results.set_names)
    reach = _reach(z[np.isfinite(z)])
    panels, rows = [], []
    for index, name in enumerate(names):
        here = (book.set_index[words] == index) & np.isfinite(z)
        ideal = np.unique(np.round(first[book.set_index == index], 12))
        error = np.abs(z[here] - first[words[here]]) ** 2
        power = np.mean(np.abs(first[first != 0]) ** 2)
        evm = 100 * np.sqrt(error.mean() / power) if error.size else np.nan
        worst = 100 * np.sqrt(error.max() / power) if error.size else np.nan
        rows.append((name, int(here.sum()), fixed(float(evm)), fixed(float(worst))))
        if index < _MOST_PANELS:
            series = [_cloud(z[here], reach), Series("", "points", ideal.real, ideal.imag, hue=1)]
            panels.append(Panel("I", "Q", series, f"antenna {name}", square=True, reach=reach))
    note = f"Symbols of {count(int(frames.size))} of {count(seen.count)} frames."
    if len(names) > _MOST_PANELS:
        note += f" Drawn are {_MOST_PANELS} of {len(names)} antenna sets; the table has all."
    says = (
        "Each received vector, projected on the direction of the word sent (where unknown: of the"
        " word decided); larger marks show where symbols should be."
    )
    table = Table(("antenna", "symbols", "equalised EVM %", "largest error %"), rows)
    return Plot("symbols", title, says, panels, table, abreast=4, note=note)


def _reach(z: NDArray[np.complex128]) -> float:
    """Half the side of the square that holds nearly all symbols."""
    if not z.size:
        return 1.0
    return float(np.quantile(np.maximum(np.abs(z.real), np.abs(z.imag)), 0.9995)) * 1.15


def _cloud(z: NDArray[np.complex128], reach: float) -> Series:
    if z.size <= _MOST_POINTS:
        return Series("", "cloud", z.real, z.imag)
    counts, edges, _ = np.histogram2d(
        z.real, z.imag, bins=_CELLS, range=[[-reach, reach], [-reach, reach]]
    )
    middle = (edges[:-1] + edges[1:]) / 2
    i, j = np.nonzero(counts)
    return Series("", "density", middle[i], middle[j], weights=counts[i, j])


def codebook_as_received(seen: Gathered) -> Plot:
    """Where the channel puts the words, and which pairs lie closest."""
    title = "Which words lie too close together?"
    link = seen.link
    if link is None:
        return Plot("codebook", title, f"The link cannot be built: {seen.link_fault}")
    if link.codebook.block > 1 or not seen.channel.shape[0]:
        return Plot("codebook", title, "No words of one symbol period on a measured channel.")
    if link.codebook.size > _MOST_WORDS:
        return Plot("codebook", title, f"More than {_MOST_WORDS} words: too many to draw.")
    middle = seen.channel_frames.size // 2
    frame = int(seen.channel_frames[middle])
    noise = float(seen.columns["noise_power"][frame])
    amplitude = float(np.sqrt(np.mean(link.layout.payload_amplitude**2)))
    received = amplitude * link.codebook.vectors @ seen.channel[middle].T  # (C, Nr)
    flat = np.concatenate([received.real, received.imag], axis=1)
    centred = flat - flat.mean(axis=0)
    _, sizes, axes = np.linalg.svd(centred, full_matrices=False)
    plane = centred @ axes[:2].T / np.sqrt(noise)
    if plane.shape[1] < 2:
        plane = np.pad(plane, ((0, 0), (0, 2 - plane.shape[1])))
    held = float(np.sum(sizes[:2] ** 2) / max(np.sum(sizes**2), 1e-300))
    pairs = _closest(received, noise)
    links = [(*plane[i], *plane[j]) for i, j, _ in pairs]
    bits = link.codebook.bits
    names = seen.results.set_names
    series = []
    for index, name in enumerate(names):
        here = link.codebook.set_index == index
        labels = [format(w, f"0{bits}b") for w in np.flatnonzero(here)] if bits <= 5 else []
        points = plane[here]
        title_of = f"antenna {name}" if len(names) <= _MOST_PANELS else ""
        series.append(
            Series(title_of, "points", points[:, 0], points[:, 1], labels=labels, hue=index)
        )
    rows = [
        (
            format(i, f"0{bits}b"),
            names[link.codebook.set_index[i]],
            format(j, f"0{bits}b"),
            names[link.codebook.set_index[j]],
            fixed(distance),
            number(float(0.5 * erfc(distance / 2))) if np.isfinite(distance) else DASH,
        )
        for i, j, distance in pairs
    ]
    table = Table(
        ("word", "antenna", "word", "antenna", "distance / √N0", "chance of confusion"),
        rows,
        "Chance of confusion: of these two words alone, Q(d / √(2 N0)).",
    )
    says = (
        f"Codebook behind the channel of frame {count(frame)}, seen in the plane of its largest"
        f" spread, which holds {100 * held:.0f} % of it; lines join the closest pairs, by their"
        " true distance."
    )
    panel = Panel("first direction, √N0", "second direction, √N0", series, square=True, links=links)
    return Plot("codebook", title, says, [panel], table)


def _closest(received: NDArray[np.complex128], noise: float) -> list[tuple[int, int, float]]:
    """Pairs of smallest distance over the root of N0, ascending."""
    apart = np.linalg.norm(received[:, None] - received[None], axis=2) / np.sqrt(noise)
    i, j = np.triu_indices(len(received), 1)
    order = np.argsort(apart[i, j], kind="stable")[:_CLOSEST]
    return [(int(i[k]), int(j[k]), float(apart[i[k], j[k]])) for k in order]
