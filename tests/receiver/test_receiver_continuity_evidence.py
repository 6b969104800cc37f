"""Sums over blocks of a frame's residuals, and what is taken for evidence of a break."""

from __future__ import annotations

import numpy as np
import pytest
import scipy.stats
from receiver_cases import complex_noise, parts_of

from spatiq.receiver import continuity_evidence
from spatiq.receiver.continuity_evidence import evidence
from spatiq.receiver.continuity_kernels import block_scores

BLOCK = 32


@pytest.mark.nojit
def test_block_scores_are_the_sums_they_say():
    """Against NumPy in double precision; the last block is short, doubt is spread over payload."""
    rng = np.random.default_rng(8)
    count, channels = 3 * BLOCK + 9, 3
    y, reference, slope = complex_noise(rng, (3, count, channels), 1.0)
    density = rng.uniform(0.5, 2.0, count)
    active = np.sort(rng.choice(2 * count, count, replace=False)).astype(np.int64)
    word = np.where(rng.uniform(size=count) < 0.7, 3, -1).astype(np.int64)
    in_doubt, moved = 5.5, (0.03, -2e-4)
    scores = np.full((4, 6), np.nan)
    block_scores(
        parts_of(y), parts_of(reference), parts_of(slope), density, active, word, in_doubt, moved,
        BLOCK, scores,
    )  # fmt: skip
    share = in_doubt * (word >= 0) / np.sum(word >= 0)
    product = np.sum(np.conj(reference) * (y - reference), axis=1)
    each = np.column_stack(
        [
            np.ones(count),
            np.sum(np.abs(reference) ** 2, axis=1) + share,
            np.sum(np.abs(y - reference) ** 2, axis=1) + share,
            product.real - share,
            product.imag,
            np.sum(np.conj(reference) * slope, axis=1).real
            - density * (moved[0] + moved[1] * active),
        ]
    )
    expected = np.add.reduceat(each, np.arange(0, count, BLOCK), axis=0)
    np.testing.assert_allclose(scores, expected, rtol=2e-5, atol=2e-4)


def scores_of_noise(rng, frames, blocks, channels, slope_energy):
    """Scores of unbroken frames in white noise of power 1, references of constant energy."""
    amplitude = 4.0
    noise = complex_noise(rng, (frames, blocks, BLOCK, channels), 1.0)
    slope = complex_noise(rng, (frames, blocks, BLOCK, channels), slope_energy)
    scores = np.empty((frames, blocks, 6))
    scores[..., 0] = BLOCK
    scores[..., 1] = BLOCK * channels * amplitude**2
    scores[..., 2] = np.sum(np.abs(noise) ** 2, axis=(2, 3))
    scores[..., 3] = amplitude * noise.real.sum(axis=(2, 3))
    scores[..., 4] = amplitude * noise.imag.sum(axis=(2, 3))
    scores[..., 5] = amplitude * slope.real.sum(axis=(2, 3))
    return scores


@pytest.mark.nojit
def test_unbroken_frames_pass_for_broken_no_more_often_than_stated(monkeypatch):
    """`CHANCE` raised to 1e-3, no change too small: of 4,000 frames of 12 blocks, at most 4 B
    CHANCE = 4.8 % (Bonferroni) pass for broken, and not far fewer for want of power: more than
    CHANCE of them for each kind. Each bound's false failure: below 1e-6 (binomial)."""
    chance, frames, blocks, channels, step = 1e-3, 4000, 12, 2, 4.0
    monkeypatch.setattr(continuity_evidence, "CHANCE", chance)
    monkeypatch.setattr(continuity_evidence, "LEAST", (0.0, 0.0, 0.0, 1.0))
    rng = np.random.default_rng(12)
    scores = scores_of_noise(rng, frames, blocks, channels, 0.5)
    found = evidence(scores, channels, 0.5, step).found
    most = scipy.stats.binom.isf(1e-6, frames, 4 * blocks * chance)
    assert np.count_nonzero(found.any(axis=1)) <= most
    # The maximum over borders passes at least as often as the test of any one border.
    least = scipy.stats.binom.ppf(1e-6, frames, chance)
    for kind in (0, 1, 3):
        assert np.count_nonzero(found[:, kind]) >= least


@pytest.mark.nojit
@pytest.mark.parametrize("kind", [0, 1, 2, 3])
def test_a_change_is_found_at_its_border(kind):
    """Gain, phase, timing, noise: each at the seventh of twelve blocks, in the column named."""
    rng = np.random.default_rng(13)
    scores = scores_of_noise(rng, 20, 12, 2, 0.5)
    if kind < 3:
        # Mean 0 over the frame, as a fit leaves it.
        jump = np.where(np.arange(12) < 7, -5.0 / 12, 7.0 / 12) * 0.2
        scale = (1.0, 1.0, 0.5 * 4.0)[kind]
        scores[..., 3 + kind] += jump * scale * scores[..., 1]
    else:
        scores[:, 7:, 2] *= 3.0
    seen = evidence(scores, 2, 0.5, 4.0)
    assert seen.found[:, kind].all()
    assert np.all(np.abs(seen.border[:, kind] - 7) <= 1)
    wanted = 3.0 if kind == 3 else 0.2
    np.testing.assert_allclose(seen.size[:, kind], wanted, rtol=0.35)
