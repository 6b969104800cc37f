"""A receive channel that gives nothing: a loose connector, a front end without power."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

from spatiq.errors import InputError
from spatiq.transmit.front_end import Context, Samples, Stage


@dataclass(frozen=True)
class DeadChannels:
    """Zeros instead of samples on some receive channels.

    Attributes:
        channels: receive channels, counted from 0.
        from_s: seconds from the first sample on which they are dead.
    """

    channels: Sequence[int]
    from_s: float = 0.0

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for a channel that there is not, or a negative time."""
        for channel in self.channels:
            if not 0 <= channel < context.receive_channels:
                expected = f"receive channels 0 to {context.receive_channels - 1}"
                raise InputError("dead channel", "", channel, expected)
        if not 0.0 <= self.from_s < 1e9:
            raise InputError("dead channel", "time", self.from_s, "0 to 1e9 s")
        begin = round(self.from_s * context.sample_rate)
        rows = list(self.channels)

        def stage(samples: Samples, first: int) -> Samples:
            samples[rows, max(0, begin - first) :] = 0
            return samples

        return stage
