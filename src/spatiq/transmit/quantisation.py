"""The converter: rounding to n bits, clipping at full scale."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from spatiq.errors import InputError
from spatiq.kernels import kernel
from spatiq.transmit.front_end import Context, Samples, Stage


@kernel
def round_to_steps(
    values: NDArray[np.float32], steps: np.float32, clipped: NDArray[np.int64]
) -> None:
    """Round in place to multiples of 1/steps within [-1, 1 - 1/steps]; count clipped samples.

    Args: values float32 (Nr, 2 n), I and Q in turn; steps float32, 2^(bits-1); clipped int64 (Nr,),
    added to: complex samples with a component beyond the range. Halves round to even.
    """
    channels, n = values.shape
    top = steps - np.float32(1)
    inverse = np.float32(1) / steps
    for r in range(channels):
        count = 0
        for i in range(0, n, 2):
            over = False
            for j in range(i, i + 2):
                level = np.rint(values[r, j] * steps)
                if level > top:
                    level = top
                    over = True
                elif level < -steps:
                    level = -steps
                    over = True
                values[r, j] = level * inverse
            count += over
        clipped[r] += count


@dataclass(frozen=True, eq=False)
class Converter:
    """Quantises to full scale 1.0.

    Mid-tread, two's complement: levels k / 2^(bits-1), k = -2^(bits-1) .. 2^(bits-1) - 1, so that
    integer sample formats hold the result exactly.

    Attributes:
        bits: bits per component, 2 to 24.
        clipped: int64 (Nr,) counter of clipped samples, reset by `begin`; None counts nothing.
    """

    bits: int
    clipped: NDArray[np.int64] | None = None

    def begin(self, context: Context) -> Stage:
        """The stage; raises InputError for a resolution outside 2 to 24 bits."""
        if not 2 <= self.bits <= 24:
            raise InputError("converter", "bits", self.bits, "2 to 24")
        counter = np.zeros(context.receive_channels, np.int64)
        if self.clipped is not None:
            counter = self.clipped
            counter[:] = 0
        steps = np.float32(2 ** (self.bits - 1))

        def stage(samples: Samples, first: int) -> Samples:
            round_to_steps(samples.view(np.float32), steps, counter)
            return samples

        return stage


def converter_gain(mean_power: float, backoff_db: float) -> float:
    """Gain that puts the rms of one component `backoff_db` below full scale 1.0.

    Args:
        mean_power: expected |sample|^2, signal and noise; one component has half of it.
        backoff_db: full scale of a component over its rms, dB, 0 to 100.

    Raises:
        InputError: backoff out of range.
    """
    if not 0.0 <= backoff_db <= 100.0:
        raise InputError("converter", "backoff", backoff_db, "0 to 100 dB")
    return float(10 ** (-backoff_db / 20) / np.sqrt(mean_power / 2))
