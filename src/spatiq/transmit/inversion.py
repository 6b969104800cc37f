"""Spectral inversion: a mixer on the wrong side of the carrier, or I and Q swapped."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from spatiq.transmit.front_end import Context, Samples, Stage


@dataclass(frozen=True)
class SpectralInversion:
    """Conjugates every sample: frequency f becomes -f, on all receive channels."""

    def begin(self, context: Context) -> Stage:
        """The stage."""

        def stage(samples: Samples, first: int) -> Samples:
            np.conjugate(samples, out=samples)
            return samples

        return stage
