"""Recordings whose frames are torn, measured through files, and a genie told all about them."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
from received_frames import record

from spatiq.link.description import Link
from spatiq.metrics.measuring import measure
from spatiq.metrics.summary import Summary
from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.genie import genie_symbols
from spatiq.transmit.losses import spread
from spatiq.transmit.simulation import simulate


def measured(folder, link: Link, samples=None, captures=None, options=None, **choices):
    """All that `measure` gives for a simulated recording, in one."""
    recording, capture = record(folder, link, samples=samples, captures=captures, **choices)
    summary, parts, lost, words, sent = Summary(link), [], [], [], []
    for m in measure(recording, link, options or ReceiverOptions()):
        summary.add(m)
        parts.append(m.columns)
        words.append(m.words_decided)
        sent.append(m.words_sent)
        lost += m.lost
    columns = {name: np.concatenate([p[name] for p in parts]) for name in parts[0]}
    return SimpleNamespace(
        recording=recording,
        capture=capture,
        columns=columns,
        lost=lost,
        words=np.concatenate(words),
        sent=np.concatenate(sent),
        summary=summary.as_dict(),
    )


def which_frames(case) -> np.ndarray:
    """Simulated frame of each one found, by where it starts in the file (half a frame's leeway)."""
    starts = case.capture.truth.recorded_starts
    found = np.array([int(np.nanargmin(np.abs(starts - s))) for s in case.columns["start_sample"]])
    assert np.unique(found).size == found.size
    return found


def genie_wrong_bits(case, which: np.ndarray) -> np.ndarray:
    """Wrong bits of a genie in the words that were compared: told timing, carrier, channel, N0,
    which samples are missing, and the gain at every sample. (F,)"""
    truth, link = case.capture.truth, case.capture.link
    samples = case.capture.samples()
    lost = int(truth.gaps[:, 1].sum())
    samples = spread(samples, truth.gaps, samples.shape[1] + lost)
    if truth.gain_steps is not None:
        gain = truth.gain_steps.at(np.arange(samples.shape[1]))
        samples = (samples / gain).astype(np.complex64)
    y = genie_symbols(truth, samples)[:, link.layout.payload_index]
    bits, true = link.codebook.words_to_bits, truth.words()
    wrong = np.zeros(which.size, int)
    for i, f in enumerate(which):
        words = maximum_likelihood(y[f].astype(np.complex64), truth.H[f], truth.N0, link.codebook)
        compared = case.sent[i] >= 0
        if compared.any():
            ours = bits(words[None, compared])
            wrong[i] = np.count_nonzero(ours != bits(true[f][None, compared]))
    return wrong


def losses_in_frames(link: Link, counts, shares, **choices):
    """Runs of samples, one in each frame: (first, count), at shares of the frames that they hit."""
    truth = simulate(link, **choices).truth
    length = link.layout.length * truth.spacing
    return [
        (int(start + share * length), int(count))
        for start, share, count in zip(truth.starts, shares, counts, strict=False)
    ]
