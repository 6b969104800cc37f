"""Links, recordings in memory and plain NumPy signal models for the tests of the receiver."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from types import SimpleNamespace

import numpy as np
from numpy.typing import NDArray

from spatiq.link.description import Link
from spatiq.link.loading import parse_link
from spatiq.receiver.matched_filter import FilterBank
from spatiq.recording.placement import Segment

SYNC = """
[[frame.section]]
kind = "sync"
sequence = {type = "m-sequence", order = 6}
antennas = [0]
"""
IN_TURN = """
[[frame.section]]
kind = "pilots"
sequence = {type = "zadoff-chu", length = 16, root = 3}
send = "in-turn"
"""
PRBS = '[[payload.field]]\ntype = "prbs"\nname = "PRBS15"\nbits = "rest"'


def payload_section(symbols: int, more: str = "") -> str:
    return f'\n[[frame.section]]\nkind = "payload"\nsymbols = {symbols}\n{more}\n'


def link_text(
    antennas: int = 2,
    constellation: str | None = "QPSK",
    sections: str = SYNC + IN_TURN + payload_section(128),
    pulse: str = 'shape = "root-raised-cosine"\nrolloff = 0.25\nspan_symbols = 16',
    fields: str = PRBS,
    air: str = "carrier_hz = 2.4e9",
    frame: str = "",
) -> str:
    scheme = "space-shift-keying" if constellation is None else "spatial-modulation"
    points = "" if constellation is None else f'constellation = {{name = "{constellation}"}}'
    return f"""
format = 1
[air]
antennas = {antennas}
symbol_rate_hz = 1e6
{air}
[modulation]
scheme = "{scheme}"
{points}
[pulse]
{pulse}
[frame]
{frame}
{sections}
{fields}
"""


def make_link(**choices: object) -> Link:
    return parse_link(link_text(**choices))  # type: ignore[arg-type]  # names are link_text's own


@dataclass
class MemoryRecording:
    """What the chain asks of a recording, samples held in memory."""

    samples: NDArray[np.complex64]
    sample_rate: float
    segments: tuple[Segment, ...] = ()
    clipping_known: bool = False
    path: str = "memory"
    datasets: tuple[object, ...] = ()

    def __post_init__(self) -> None:
        if not self.segments:
            self.segments = (Segment(0, 0, self.n_samples, 0, None, None),)

    @property
    def channels(self) -> int:
        return self.samples.shape[0]

    @property
    def n_samples(self) -> int:
        return self.samples.shape[1]

    def blocks(
        self, block_size: int = 1 << 18, start: int = 0, stop: int | None = None
    ) -> Iterator[SimpleNamespace]:
        stop = self.n_samples if stop is None else stop
        for at in range(start, stop, block_size):
            part = self.samples[:, at : min(stop, at + block_size)]
            yield SimpleNamespace(samples=np.ascontiguousarray(part, np.complex64))


def complex_noise(rng: np.random.Generator, shape: tuple[int, ...], variance: float) -> NDArray:
    parts = rng.standard_normal((*shape, 2)) * np.sqrt(variance / 2)
    return parts[..., 0] + 1j * parts[..., 1]


def planes_of(samples: NDArray) -> NDArray[np.float32]:
    """complex (Nr, n) -> float32 (Nr, 2, n)."""
    return np.ascontiguousarray(np.stack([samples.real, samples.imag], axis=1).astype(np.float32))


def complex_of(values: NDArray) -> NDArray[np.complex128]:
    """float (..., 2, Nr) -> complex (..., Nr)."""
    return values[..., 0, :].astype(float) + 1j * values[..., 1, :]


def parts_of(values: NDArray) -> NDArray[np.float32]:
    """complex (n, Nr) -> float32 (n, 2, Nr)."""
    return np.ascontiguousarray(np.stack([values.real, values.imag], axis=1).astype(np.float32))


def pulses_at(link: Link, sps: float, t0: float, periods: NDArray, samples: int) -> NDArray:
    """float64 (n, K): unit-energy pulse of each symbol period at samples 0..n-1, sps a float."""
    n = np.arange(samples)[:, None]
    return link.pulse.samples((n - t0) / sps - periods[None, :], sps) / np.sqrt(sps)


def waveform(
    link: Link, sps: float, t0: float, vectors: NDArray, channel: NDArray, samples: int
) -> NDArray[np.complex128]:
    """Samples complex (Nr, n) of transmit vectors (K, Nt) through a flat channel (Nr, Nt)."""
    shape = pulses_at(link, sps, t0, np.arange(vectors.shape[0]), samples)
    return (shape @ (vectors @ channel.T)).T


def nearest_row(bank: FilterBank, t: float, table: NDArray) -> tuple[int, NDArray]:
    """First tap's sample and the table's row for an instant, as the documentation states them."""
    whole = int(np.floor(t))
    return whole - bank.half + 1, table[int((t - whole) * bank.phases + 0.5)].astype(float)


def filtered(bank: FilterBank, samples: NDArray, t: float, table: NDArray) -> NDArray:
    """Filter outputs of all channels at one instant, by a direct sum in double precision."""
    first, taps = nearest_row(bank, t, table)
    return samples[:, first : first + taps.size] @ taps


def rayleigh(rng: np.random.Generator, receive: int, transmit: int) -> NDArray[np.complex128]:
    return complex_noise(rng, (receive, transmit), 1.0)
