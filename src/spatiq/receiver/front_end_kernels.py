"""Kernels of the front-end stage: sums over a frame's residuals, and samples set right."""

from __future__ import annotations

import numpy as np

from spatiq.kernels import C64, C128, F32, I64, kernel

LAGS = 3  # symbol periods over which the residual's correlation is looked at
_EXACT = 64  # symbol periods after which the turning phasor is set anew

# Sums of one frame, in the order of `FrontEndSums`.
Sums = tuple[C128, C128, C128, C128, C128, C128, C128]


@kernel
def residual_sums(
    y: F32,
    mean: C64,
    channel: C128,
    active: I64,
    phase: F32,
    timing: tuple[float, float],
    turn: tuple[float, float],
    sums: Sums,
) -> None:
    """Sums of e = y - H E[x] against E[x], its image, a constant, and itself some periods ago.

    With theta the angle by which a received vector has been turned back and u = exp(-j theta), a
    constant of the raw samples is seen as u, and the conjugate of the signal as conj(H x) u^2.

    Args:
        y: float32 (Ka, 2, Nr); received vectors, carrier phase removed.
        mean: complex64 (Ka, Nt); E[x].
        channel: complex128 (Nr, Nt).
        active, phase: (Ka,); symbol periods, and carrier phase removed from them.
        timing: t0 and step, samples.
        turn: turns per sample, and turns at sample 0 with the sign reversed: what was removed from
            the samples is exp(2 pi j (turn[0] n - turn[1])).
        sums: overwritten: e conj(x) and e x conj(u^2) (Nr, Nt); conj(x x^T) u^2 and conj(x)
            x^T (Nt, Nt); e conj(u) (Nr,); conj(x) u (Nt,); e conj(e earlier) (Nr, LAGS + 1).
    """
    ex, eimage, turned, gram, econstant, xconstant, lagged = sums
    channels, antennas = channel.shape
    ex[:] = 0.0
    eimage[:] = 0.0
    turned[:] = 0.0
    gram[:] = 0.0
    econstant[:] = 0.0
    xconstant[:] = 0.0
    lagged[:] = 0.0
    error = np.zeros((LAGS + 1, channels), np.complex128)
    used = np.empty(antennas, np.int64)
    radians = 2.0 * np.pi * turn[0] * timing[1]
    single = complex(np.cos(radians), -np.sin(radians))
    u = 1.0 + 0.0j
    for i in range(active.size):
        slot = i % (LAGS + 1)
        if i % _EXACT != 0 and active[i] == active[i - 1] + 1:
            small = float(phase[i]) - float(phase[i - 1])
            u = u * single * complex(1.0 - 0.5 * small * small, -small)
        else:
            cycles = turn[0] * (timing[0] + timing[1] * active[i]) - turn[1]
            angle = 2.0 * np.pi * (cycles - np.floor(cycles)) + float(phase[i])
            u = complex(np.cos(angle), -np.sin(angle))
        square = u * u
        count = 0
        for a in range(antennas):
            if mean[i, a] != 0.0:
                used[count] = a
                count += 1
        for r in range(channels):
            e = complex(y[i, 0, r], y[i, 1, r])
            for j in range(count):
                e -= channel[r, used[j]] * mean[i, used[j]]
            error[slot, r] = e
            econstant[r] += e * np.conj(u)
            seen = e * np.conj(square)
            for j in range(count):
                a = used[j]
                ex[r, a] += e * np.conj(mean[i, a])
                eimage[r, a] += seen * mean[i, a]
            for m in range(LAGS + 1):
                if i >= m and active[i - m] == active[i] - m:
                    lagged[r, m] += e * np.conj(error[(i - m) % (LAGS + 1), r])
        for j in range(count):
            a = used[j]
            xa = np.conj(complex(mean[i, a]))
            xconstant[a] += xa * u
            for m in range(count):
                b = used[m]
                turned[a, b] += xa * np.conj(mean[i, b]) * square
                gram[a, b] += xa * mean[i, b]


@kernel
def set_right(planes: F32, image: C128, constant: C128, per_sample: float, at_start: float) -> None:
    """Take image and constant out of turned samples float32 (Nr, 2, n), in place.

    With v the samples as they came and c, d of each channel: (v - d - c conj(v - d)) / (1 - |c|^2),
    turned as the samples are (see `residual_sums` for the two numbers that tell it).
    """
    for r in range(planes.shape[0]):
        c, d = image[r], constant[r]
        offset = d - c * np.conj(d)
        gain = 1.0 / (1.0 - (c.real * c.real + c.imag * c.imag))
        for i in range(planes.shape[2]):
            cycles = per_sample * i - at_start
            angle = 2.0 * np.pi * (cycles - np.floor(cycles))
            u = complex(np.cos(angle), -np.sin(angle))
            v = complex(planes[r, 0, i], planes[r, 1, i])
            v = gain * (v - c * np.conj(v) * u * u - offset * u)
            planes[r, 0, i] = v.real
            planes[r, 1, i] = v.imag
