"""Stages after framing on a dispersive channel: in place of `standard_stages`.

    acquisition -> dispersive reception (-> measuring)

What the flat stages do one after the other happens inside one stage here, because words, carrier
and impulse responses hang together.
"""

from __future__ import annotations

from collections.abc import Callable

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.receiver.acquisition import Acquisition
from spatiq.receiver.block_detection import BlockDetector
from spatiq.receiver.detection import find_detector
from spatiq.receiver.dispersive_plan import DispersivePlan, dispersive_plan
from spatiq.receiver.dispersive_reception import DispersiveReception
from spatiq.receiver.dispersive_tracking import RunDetector
from spatiq.receiver.frame_batch import FrameBatch
from spatiq.receiver.frame_deciders import BlockDecider, FrameDecider, RunDecider
from spatiq.receiver.linear_equaliser import LinearEqualiser
from spatiq.receiver.options import ReceiverOptions
from spatiq.receiver.sequence_detection import SequenceDetector


def dispersive_stages(
    link: Link,
    options: ReceiverOptions,
    acquisition: Acquisition,
    clock_std: float,
    walk: float,
) -> list[Callable[[FrameBatch], FrameBatch]]:
    """The stages.

    Args:
        link: the link description.
        options: how to receive.
        acquisition: of the flat chain; its timing serves here, too.
        clock_std: standard deviation of the clock offset expected, as a ratio.
        walk: variance of the phase's random walk per symbol period.

    Raises:
        InputError: options that do not go together with a dispersive channel, or a link whose known
            symbols cannot tell one.
    """
    if options.soft_output != "none":
        expected = "none on a dispersive channel"
        raise InputError("receiver options", "soft_output", options.soft_output, expected)
    if link.codebook.block > 1:
        expected = f"a flat channel for {link.codebook.scheme}"
        raise InputError("receiver options", "channel", options.channel, expected)
    plan = dispersive_plan(link, options.memory)
    decider = frame_decider(link, options, plan, walk)
    reception = DispersiveReception(
        plan, acquisition.bank, decider, options.memory, acquisition, clock_std, walk
    )
    return [acquisition, reception]


def frame_decider(
    link: Link, options: ReceiverOptions, plan: DispersivePlan, walk: float
) -> FrameDecider:
    """What decides frames.

    Raises:
        InputError: payload some of which is in blocks with a prefix, and some is not; or options
            that do not go together with it.
    """
    runs = link.layout.blocks
    prefixed = any(run.has_prefix for run in runs)
    in_blocks = sum(run.count * run.slots.size for run in runs) == plan.payload.size
    if prefixed and not in_blocks:
        found = "payload with a prefix, and payload without blocks"
        expected = "all of a frame's payload in blocks on a dispersive channel"
        raise InputError(link.path or "link description", "frame.section", found, expected)
    if prefixed and options.equaliser == "sequence":
        expected = "mmse or auto where blocks have a prefix"
        raise InputError("receiver options", "equaliser", options.equaliser, expected)
    if prefixed or (in_blocks and options.equaliser == "mmse"):
        detector = find_detector(options.detector)
        return BlockDecider(plan, BlockDetector(link.codebook, detector), walk)
    return RunDecider(plan, run_detector(link, options), walk)


def run_detector(link: Link, options: ReceiverOptions) -> RunDetector:
    """What decides runs of words.

    Raises:
        InputError: a detector of flat channels asked for where sequences are decided.
    """
    if options.equaliser == "mmse":
        return LinearEqualiser(link.codebook, find_detector(options.detector))
    if options.detector != "maximum-likelihood":
        expected = 'maximum-likelihood with equaliser "sequence"; others with "mmse"'
        raise InputError("receiver options", "detector", options.detector, expected)
    return SequenceDetector(link.codebook, options.survivors)
