"""Frames that the transmitter's numbers say were sent between those found."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.frame_batch import NOT_FOUND, LostFrame
from spatiq.recording.placement import Segment


def places_in_stream(
    segments: tuple[Segment, ...], segment: NDArray[Any], start: NDArray[np.float64]
) -> NDArray[np.float64]:
    """Starts (F,) in file samples as places in the original stream, gaps counted."""
    shift = [s.global_index - s.start for s in segments]
    return np.asarray(start + np.asarray(shift, np.float64)[segment], np.float64)


@dataclass
class SkippedFrames:
    """Lists them, batch by batch; with a frame period time says so, and none is listed here.

    Attributes:
        periodic: whether the link states a frame period.
        shortest: least distance of two frames' starts in samples.
    """

    periodic: bool
    shortest: float
    _previous: tuple[int, float] | None = None

    def before(
        self, columns: dict[str, NDArray[Any]], position: NDArray[np.float64]
    ) -> list[LostFrame]:
        """Those before the frames of a batch, and after the frames of the one before.

        Args:
            columns: frame_number, segment and start_sample of the batch's frames.
            position: of each frame in the original stream, samples.
        """
        lost: list[LostFrame] = []
        for i, number in enumerate(columns["frame_number"].tolist()):
            if number < 0:
                continue
            if self._previous is not None and not self.periodic:
                before, at = self._previous
                room = int((position[i] - at) / self.shortest) + 1
                # A jump that time has no room for is no loss: the numbers have begun anew.
                skipped = range(before + 1, number) if number - before <= room else range(0)
                for n in skipped:
                    share = (n - before) / (number - before)
                    between = at + share * (position[i] - at)
                    shift = position[i] - columns["start_sample"][i]
                    segment = int(columns["segment"][i])
                    lost.append(LostFrame(segment, float(between - shift), n, NOT_FOUND))
            self._previous = (number, float(position[i]))
        return lost
