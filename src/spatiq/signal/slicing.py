"""Nearest point of a constellation at a cost that does not grow with the number of points.

Points on a rectangular grid are found axis by axis, points at equal angles on a circle by their
angle. Others have to be searched.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.kernels import F64, I64, inlined

SEARCH, GRID, CIRCLE = 0, 1, 2


@dataclass(frozen=True, eq=False)
class Slicer:
    """What the kernel `sliced` needs.

    Attributes:
        kind: `SEARCH`, `GRID` or `CIRCLE`.
        places: float64, shape (4,); grid: lowest level and levels per unit, of both axes; circle:
            angle of the first point and points per radian.
        counts: int64, shape (2,); levels of the axes; points on the circle and 1.
        labels: int64, shape (M,); label at each place, row by row of the real axis.
    """

    kind: int
    places: NDArray[np.float64]
    counts: NDArray[np.int64]
    labels: NDArray[np.int64]


def slicer(points: NDArray[np.complex128]) -> Slicer:
    """The slicer of points (M,), indexed by label."""
    return _grid(points) or _circle(points) or searched()


def searched() -> Slicer:
    """Stands for points in no order: they have to be searched."""
    return Slicer(SEARCH, np.zeros(4), np.zeros(2, np.int64), np.zeros(0, np.int64))


def _levels(values: NDArray[np.float64], unit: float) -> tuple[NDArray[np.float64], float] | None:
    """Different levels, ascending, and levels per unit; None when they are not evenly spaced."""
    ordered = np.sort(values)
    kept = ordered[np.concatenate([[True], np.diff(ordered) > 1e-9 * unit])]
    if kept.size == 1:
        return kept, 0.0
    steps = np.diff(kept)
    if not np.allclose(steps, steps[0], rtol=0, atol=1e-9 * unit):
        return None
    return kept, 1.0 / float(steps.mean())


def _grid(points: NDArray[np.complex128]) -> Slicer | None:
    unit = float(np.abs(points).max())
    real, imag = _levels(points.real, unit), _levels(points.imag, unit)
    if real is None or imag is None or real[0].size * imag[0].size != points.size:
        return None
    row = np.rint((points.real - real[0][0]) * real[1]).astype(np.int64)
    column = np.rint((points.imag - imag[0][0]) * imag[1]).astype(np.int64)
    labels = np.full(points.size, -1, np.int64)
    labels[row * imag[0].size + column] = np.arange(points.size)
    if labels.min() < 0:
        return None
    places = np.array([real[0][0], real[1], imag[0][0], imag[1]])
    return Slicer(GRID, places, np.array([real[0].size, imag[0].size]), labels)


def _circle(points: NDArray[np.complex128]) -> Slicer | None:
    size = points.size
    first, magnitude = float(np.angle(points[0])), np.abs(points)
    place = np.angle(points * np.exp(-1j * first)) * size / (2 * np.pi)
    turn = np.rint(place).astype(np.int64) % size
    even = np.allclose(magnitude, magnitude[0], rtol=1e-9) and magnitude[0] > 0
    if not even or np.unique(turn).size != size or not np.allclose(place, np.rint(place)):
        return None
    labels = np.empty(size, np.int64)
    labels[turn] = np.arange(size)
    places = np.array([first, size / (2 * np.pi), 0.0, 0.0])
    return Slicer(CIRCLE, places, np.array([size, 1]), labels)


@inlined
def sliced(re: float, im: float, kind: int, places: F64, counts: I64, labels: I64) -> int:
    """Label of the point nearest to re + j im; kind `GRID` or `CIRCLE`."""
    if kind == GRID:
        # Limited before they are whole: without branches, which no processor could foresee.
        i = min(max((re - places[0]) * places[1] + 0.5, 0.0), counts[0] - 0.5)
        q = min(max((im - places[2]) * places[3] + 0.5, 0.0), counts[1] - 0.5)
        return int(labels[int(i) * counts[1] + int(q)])
    turn = int(np.rint((np.arctan2(im, re) - places[0]) * places[1])) % counts[0]
    return int(labels[turn])
