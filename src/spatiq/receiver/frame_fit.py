"""Fit of one frame that moves: expectation-maximisation over codewords, phase and channel in time.

Each round takes the posterior of the codewords under the present channel H(k), phase and N0, then
smooths the phase (`phase_smoothing`), the channel (`channel_smoothing`) and estimates N0 and timing
in turn. The walk's variance and the Doppler spread are those of the largest evidence on a grid;
both grids begin with "none". Method as in `refit`; for channels in time: N. Noels et al., Proc.
IEEE ICC 2003; M. Huang, X. Chen, L. Xiao, S. Zhou, J. Wang, IEEE Trans. Commun. 2007 (titles from
memory).
"""

from __future__ import annotations

import copy
from collections.abc import Callable
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from spatiq.receiver.channel_smoothing import Complex, Moments, SmoothedChannel, smooth_channel
from spatiq.receiver.frame_posterior import FrameBlocks, frame_blocks, moments, posterior
from spatiq.receiver.link_tables import LinkTables
from spatiq.receiver.matched_filter import FilterBank, sample_periods
from spatiq.receiver.moving_channel import Following
from spatiq.receiver.phase_smoothing import SmoothedPhase, smooth_walk
from spatiq.receiver.slow_basis import SlowBasis, longest_block, slow_basis
from spatiq.receiver.timing_kernels import refit_timing, timing_density

_SLOWEST = 0.02  # Doppler spread times frame length below which nothing can be told from standing
_FASTEST = 2.5e-3  # Doppler spread, cycles per symbol period: pilots cannot be denser than needed
_LARGEST = 1024  # unknowns in one system of equations
_FINEST_ENTRIES = 1 << 22  # of Gram matrices: bounds memory
_STILL = 1e-6  # variance over the frame of a phase that does not walk
_SETTLED = 0.1  # change of the score below which another round is not worth its time
_WALKS = 0.03  # largest walk, radians^2 per period


@dataclass(frozen=True, eq=False)
class FittingPlan:
    """What frames of a link have in common: blocks, bases, grids.

    Attributes:
        tables: link tables.
        bank: filter bank.
        step_var: prior variance of samples per symbol, squared samples.
        blocks: finest blocks.
        bandwidths: Doppler spreads tried, ascending from 0.
        walks: walk variances tried, ascending; the first stands for none.
        distance: (Ka - 1,); symbol periods between active periods.
    """

    tables: LinkTables
    bank: FilterBank
    step_var: float
    blocks: FrameBlocks
    bandwidths: tuple[float, ...]
    walks: tuple[float, ...]
    distance: NDArray[np.float64]
    _bases: dict[tuple[float, int], SlowBasis] = field(default_factory=dict)

    def factor(self, bandwidth: float) -> int:
        """Finest blocks joined to one for a bandwidth: a power of two."""
        factor = 1
        while factor * 2 * self.blocks.length <= longest_block(bandwidth):
            if factor >= self.blocks.count:
                break
            factor *= 2
        return factor

    def basis(self, bandwidth: float) -> SlowBasis:
        """The basis over its own blocks, made once."""
        factor = self.factor(bandwidth)
        key = (bandwidth, factor)
        if key not in self._bases:
            count = -(-self.blocks.count // factor)
            self._bases[key] = slow_basis(bandwidth, count, factor * self.blocks.length)
        return self._bases[key]

    def spread(self, channels: Complex) -> Complex:
        """Channels over any of the blocks, given for each of the finest."""
        factor = 1
        while -(-self.blocks.count // factor) > len(channels):
            factor *= 2
        return np.repeat(channels, factor, axis=0)[: self.blocks.count]


def fitting_plan(tables: LinkTables, bank: FilterBank, clock_std: float) -> FittingPlan:
    """The plan of a link."""
    span = int(tables.active[-1] - tables.active[0]) + 1
    antennas = tables.codebook.antennas
    bandwidths, bandwidth = [0.0], _SLOWEST / span
    while bandwidth <= _FASTEST and (2 * bandwidth * span + 4) * antennas <= _LARGEST:
        bandwidths.append(bandwidth)
        bandwidth *= 2
    length = longest_block(bandwidths[-1]) if len(bandwidths) > 1 else span
    length = max(length, -(-span * antennas * antennas // _FINEST_ENTRIES))
    walks = [_STILL / span]
    while walks[-1] * 4 <= _WALKS:
        walks.append(walks[-1] * 4)
    return FittingPlan(
        tables=tables,
        bank=bank,
        step_var=(clock_std * bank.samples_per_symbol) ** 2,
        blocks=frame_blocks(tables, length),
        bandwidths=tuple(bandwidths),
        walks=tuple(walks),
        distance=np.diff(tables.active).astype(np.float64),
    )


@dataclass(eq=False)
class FrameFit:
    """One frame's estimates; rounds of `refine` improve them in place.

    Attributes:
        plan: of the link.
        planes: float32 (Nr, 2, W); samples.
        timing: (4,); t0, step and their variances.
        phase: float64 (Ka,).
        channels: complex128 (B, Nr, Nt) over the finest blocks.
        noise: N0.
        may_move, may_walk: whether the channel may move, and the phase walk.
        bandwidth, walk: as chosen.
        following: how it was had.
        evidence_gain: log evidence of what was chosen over a frame that stands still.
        score: log likelihood of the frame with the paths of channel and phase, to compare fits: a
            cycle slip leaves no noise behind, but is a path that costs.
        antenna_energy, mean, gram: as in `FrameBatch`; E[x]; its Gram matrices.
        y: complex128 (Ka, Nr); received vectors with the phase left in.
    """

    plan: FittingPlan
    planes: NDArray[np.float32]
    timing: NDArray[np.float64]
    phase: NDArray[np.float64]
    channels: Complex
    noise: float
    may_move: bool = True
    may_walk: bool = True
    bandwidth: float = 0.0
    walk: float = 0.0
    following: Following = Following.FOLLOWED
    evidence_gain: float = 0.0
    antenna_energy: NDArray[np.float64] = field(default_factory=lambda: np.zeros(0))
    mean: Complex = field(default_factory=lambda: np.zeros((0, 0), np.complex128))
    gram: Complex = field(default_factory=lambda: np.zeros((0, 0, 0), np.complex128))
    score: float = -np.inf
    y: Complex = field(init=False)
    _phase_prior: float = 0.0
    _phase_freedom: float = 0.0

    def __post_init__(self) -> None:
        """Take the symbols at the present timing."""
        self.sample()

    @property
    def freedoms(self) -> tuple[bool, bool]:
        """Whether the channel may move, and the phase walk."""
        return self.may_move, self.may_walk

    def copy(self) -> FrameFit:
        """A fit of its own that begins where this one is."""
        other = copy.copy(self)
        other.timing, other.phase = self.timing.copy(), self.phase.copy()
        other.channels = self.channels.copy()
        return other

    def sample(self) -> None:
        """Matched-filter outputs at the present timing into y."""
        self.y = self._filtered(self.plan.bank.taps)

    def _filtered(self, table: NDArray[np.float32]) -> Complex:
        active = self.plan.tables.active
        out = np.empty((active.size, 2, self.planes.shape[0]), np.float32)
        phases = self.plan.bank.phases
        sample_periods(self.planes, self.timing[0], self.timing[1], active, table, phases, out)
        return np.asarray(out[:, 0] + 1j * out[:, 1], np.complex128)

    def straightened(self) -> Complex:
        """y with the present phase removed."""
        return np.asarray(self.y * np.exp(-1j * self.phase)[:, None], np.complex128)

    def refine(self, rounds: int) -> None:
        """Rounds of expectation-maximisation."""
        every = np.arange(self.plan.tables.active.size)
        before = -np.inf
        for turn in range(rounds):
            if turn > 1 and abs(self.score - before) < _SETTLED:
                break
            before = self.score
            straight = self.straightened()
            known = posterior(
                straight, every, self.plan.blocks, self.channels, self.noise, self.plan.tables
            )
            self.mean, self.gram = known.mean, known.gram
            gain = self._refit_phase(straight)
            if turn % 2 == 1:
                self._refit_timing()
            found = moments(self.straightened(), known, every, self.plan.blocks)
            self.evidence_gain = gain + self.fit_channel(found)

    def references(self) -> Complex:
        """H(k) E[x] of all active periods, (Ka, Nr)."""
        block = self.plan.blocks.block
        out = np.empty_like(self.y)
        step = max(1, (1 << 20) // max(self.channels[0].size, 1))
        for first in range(0, len(out), step):
            part = slice(first, first + step)
            channels = self.channels[block[part]]
            out[part] = np.einsum("kra,ka->kr", channels, self.mean[part])
        return out

    def _refit_phase(self, straight: Complex) -> float:
        """Smooth the phase; returns by how much the evidence prefers the walk to none."""
        reference = self.references()
        weight = np.sum(np.abs(reference) ** 2, axis=1)
        error = np.sum(reference.conj() * straight, axis=1).imag
        precision = 2.0 * weight / self.noise
        active = self.plan.tables.active
        line = np.polyfit(active, self.phase, 1, w=np.sqrt(precision) + 1e-300)
        bent = self.phase - np.polyval(line, active)
        observed = bent + error / np.maximum(weight, 1e-300)
        walks, distance = self.plan.walks, self.plan.distance

        made: dict[float, SmoothedPhase] = {}

        def trial(walk: float) -> SmoothedPhase:
            if walk not in made:
                made[walk] = smooth_walk(observed, precision, distance, walk)
            return made[walk]

        best = walks[0]
        if self.may_walk:
            best = _climb(walks, self.walk, lambda walk: trial(walk).evidence)
        self.phase = trial(best).mean + np.polyval(line, active)
        self.walk = best if best != walks[0] else 0.0
        self._phase_prior, self._phase_freedom = trial(best).prior, trial(best).freedom
        return trial(best).evidence - trial(walks[0]).evidence

    def fit_channel(self, found: Moments) -> float:
        """Smooth the channel, take N0; returns by how much evidence prefers motion to standing."""
        plan = self.plan
        sent = max(float(np.einsum("baa->", found.gram).real), 1e-300)
        left = found.energy - found.periods * self.noise * found.cross.shape[1]
        power = max(left, 0.1 * found.energy) / (found.cross.shape[1] * sent)
        made: dict[float, SmoothedChannel] = {}

        def trial(bandwidth: float) -> SmoothedChannel:
            if bandwidth not in made:
                basis = plan.basis(bandwidth)
                joined = found.over(len(basis.values), plan.factor(bandwidth))
                made[bandwidth] = smooth_channel(joined, basis, self.noise, power)
            return made[bandwidth]

        best = 0.0
        if self.may_move:
            best = _climb(plan.bandwidths, self.bandwidth, lambda w: trial(w).evidence)
        chosen = trial(best)
        self.bandwidth = best
        self.channels = plan.spread(chosen.channels)
        self.antenna_energy = chosen.antenna_energy
        periods = found.periods - chosen.freedom
        freedom = max(found.cross.shape[1] * periods - 0.5 * self._phase_freedom, 1.0)
        floor = 1e-12 * found.energy / (found.cross.shape[1] * max(found.periods, 1))
        self.noise = max(chosen.error / freedom, floor, 1e-30)
        samples = found.periods * found.cross.shape[1]
        self.score = chosen.volume + self._phase_prior - samples * float(np.log(self.noise))
        return chosen.evidence - trial(0.0).evidence

    def _refit_timing(self) -> None:
        """Newton step for t0 and step, then take the symbols anew."""
        reference, active = self.references(), self.plan.tables.active
        slope = self._filtered(self.plan.bank.slopes) * np.exp(-1j * self.phase)[:, None]
        shown = _parts(reference)
        density = np.empty(active.size)
        timing_density(shown, active, self.plan.bank.curvature, density)
        refit_timing(
            _parts(slope), shown, density, active, self.noise, self.plan.step_var, self.timing
        )
        self.sample()


def _parts(values: Complex) -> NDArray[np.float32]:
    """complex (n, Nr) -> float32 (n, 2, Nr)."""
    return np.ascontiguousarray(np.stack([values.real, values.imag], axis=1), np.float32)


def _climb(grid: tuple[float, ...], start: float, score: Callable[[float], float]) -> float:
    """The grid's value of the largest score, uphill from `start`; from the grid's first value, for
    which the others may be much too small a step, some way ahead."""
    here = max((i for i, value in enumerate(grid) if value <= start), default=0)
    scores: dict[int, float] = {}

    def at(i: int) -> float:
        if i not in scores:
            scores[i] = score(grid[i])
        return scores[i]

    while True:
        ahead = 4 if here == 0 else 1
        near = [i for i in range(here - 1, here + ahead + 1) if 0 <= i < len(grid)]
        best = max(near, key=at)
        if best == here:
            return grid[here]
        here = best
