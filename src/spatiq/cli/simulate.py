"""`spatiq simulate`: a recording of a link, channel and front end simulated."""

from __future__ import annotations

import json
from pathlib import Path
from typing import TYPE_CHECKING, Any

import typer

from spatiq.cli.sample_progress import with_progress
from spatiq.cli.simulate_choices import (
    FadingOptions,
    FrontEndOptions,
    carrier_choices,
    channels,
    front_end_choices,
    loss_choices,
    noise_choices,
    parse_spacing,
    path_choices,
    time_choices,
)
from spatiq.cli.simulate_options import (
    AntennaDelayOption,
    ArrivalOption,
    AsJsonOption,
    BackoffOption,
    BitsOption,
    CfoDriftOption,
    CfoOption,
    ChannelKind,
    ChannelOption,
    ClipOption,
    ClockPpmOption,
    CollectionOption,
    ConstantOption,
    DatatypeOption,
    DcOption,
    DeadOption,
    DelaySpreadOption,
    DepartureOption,
    DopplerOption,
    FirstFrameOption,
    FrameGainOption,
    FramesOption,
    GainStepOption,
    InterfererOption,
    InvertOption,
    IqGainOption,
    IqPhaseOption,
    LeadInOption,
    LeadOutOption,
    LinewidthOption,
    LinkArgument,
    LoseOption,
    LoseRandomOption,
    MatricesOption,
    NoiseCorrelationOption,
    NoiseFeedbackOption,
    NoisePowerOption,
    NoiseTapsOption,
    OtherOption,
    OutOption,
    OverwriteOption,
    PauseOption,
    PhaseNoiseOption,
    ReceiveChannelsOption,
    ReceiveCorrelationOption,
    ReceiveDelayOption,
    ReceiveGainOption,
    ReferencePpmOption,
    RicianKOption,
    SampleRateOption,
    SamplesPerSymbolOption,
    SeedOption,
    SilentLossOption,
    SnrOption,
    SnrReference,
    SnrReferenceOption,
    SpacingOption,
    TransmitCorrelationOption,
    TruthOption,
)

if TYPE_CHECKING:
    from spatiq.transmit.simulation import SimulatedCapture


def simulate_command(
    link: LinkArgument,
    out: OutOption,
    frames: FramesOption = 100,
    first_frame: FirstFrameOption = 0,
    samples_per_symbol: SamplesPerSymbolOption = None,
    sample_rate: SampleRateOption = None,
    receive_channels: ReceiveChannelsOption = 2,
    snr: SnrOption = 20,
    snr_reference: SnrReferenceOption = SnrReference.AVERAGE,
    channel: ChannelOption = ChannelKind.RAYLEIGH,
    rician_k: RicianKOption = 7,
    arrival: ArrivalOption = 0,
    departure: DepartureOption = 0,
    receive_correlation: ReceiveCorrelationOption = None,
    transmit_correlation: TransmitCorrelationOption = None,
    constant: ConstantOption = False,
    matrices: MatricesOption = None,
    doppler: DopplerOption = None,
    delay_spread: DelaySpreadOption = None,
    antenna_delay: AntennaDelayOption = "",
    receive_delay: ReceiveDelayOption = "",
    receive_gain: ReceiveGainOption = "",
    spacing: SpacingOption = "link",
    lead_in: LeadInOption = 64,
    lead_out: LeadOutOption = 64,
    pause: PauseOption = "",
    other: OtherOption = None,
    cfo: CfoOption = "0",
    cfo_drift: CfoDriftOption = 0,
    linewidth: LinewidthOption = 0,
    phase_noise: PhaseNoiseOption = "",
    clock_ppm: ClockPpmOption = 0,
    reference_ppm: ReferencePpmOption = None,
    noise_power: NoisePowerOption = "",
    noise_correlation: NoiseCorrelationOption = None,
    noise_taps: NoiseTapsOption = "",
    noise_feedback: NoiseFeedbackOption = "",
    interferer: InterfererOption = None,
    gain_step: GainStepOption = None,
    frame_gain: FrameGainOption = 0,
    iq_gain: IqGainOption = "",
    iq_phase: IqPhaseOption = "",
    dc: DcOption = "",
    invert: InvertOption = False,
    clip: ClipOption = None,
    dead: DeadOption = None,
    bits: BitsOption = None,
    backoff: BackoffOption = 18,
    lose: LoseOption = None,
    lose_random: LoseRandomOption = "",
    silent_loss: SilentLossOption = False,
    seed: SeedOption = 0,
    datatype: DatatypeOption = "ci16_le",
    collection: CollectionOption = False,
    truth: TruthOption = False,
    overwrite: OverwriteOption = False,
    as_json: AsJsonOption = False,
) -> None:
    """Simulate the recording of a link: frames, channel, offsets, noise, front end, converter.

    Example: spatiq simulate lab.link.toml --samples-per-symbol 4 --snr 20 --out captures/lab
    """
    from spatiq.link.loading import load_link
    from spatiq.transmit.simulation import simulate

    checked = load_link(link)
    fading = FadingOptions(
        channel,
        rician_k,
        arrival,
        departure,
        receive_correlation,
        transmit_correlation,
        constant,
        doppler,
        delay_spread,
    )
    front_end = FrontEndOptions(
        gain_step or (), frame_gain, iq_gain, iq_phase, dc, invert, clip, dead or ()
    )
    capture = simulate(
        checked,
        frames=frames,
        first_frame=first_frame,
        samples_per_symbol=samples_per_symbol,
        sample_rate=sample_rate,
        receive_channels=receive_channels,
        snr_db=snr,
        snr_reference=snr_reference.value,
        channels=channels(fading, matrices),
        spacing=parse_spacing(spacing),
        lead_in=lead_in,
        lead_out=lead_out,
        clock_ppm=clock_ppm,
        reference_ppm=reference_ppm,
        bits=bits,
        backoff_db=backoff,
        seed=seed,
        datatype=datatype,
        **time_choices(pause, other or ()),
        **path_choices(antenna_delay, receive_delay, receive_gain),
        **carrier_choices(cfo, cfo_drift, linewidth, phase_noise),
        **noise_choices(
            noise_power, noise_correlation, noise_taps, noise_feedback, interferer or ()
        ),
        **front_end_choices(front_end),
        **loss_choices(lose or (), lose_random, silent_loss),
    )
    written = _write(capture, out, collection, truth, overwrite)
    print_summary(_summary(capture, written), as_json)


def _write(
    capture: SimulatedCapture, out: Path, collection: bool, keep_truth: bool, overwrite: bool
) -> tuple[str, ...]:
    """Write recording and truth; the names of the files."""
    from spatiq.transmit.output import RecordingSet, staged, write_set
    from spatiq.transmit.truth_files import truth_names, write_truth

    recordings = RecordingSet(
        base=out,
        names=tuple(f"-rx{r}" for r in range(capture.receive_channels)) if collection else ("",),
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
        carrier_hz=capture.link.carrier_hz,
        description=f"simulated recording of link {capture.link.name}",
        overwrite=overwrite,
        captures=capture.captures(),
    )
    files = recordings.files()
    bases = [out.name, *(f"{out.name}-other{k}" for k in range(len(capture.others)))]
    truths = (capture.truth, *capture.others)
    if keep_truth:
        files = (*(name for base in bases for name in truth_names(base)), *files)
    with staged(out, files, overwrite) as folder:
        blocks = with_progress(capture.blocks(), capture.n_samples, "simulating")
        write_set(recordings, folder, blocks)
        if keep_truth:
            for truth, base in zip(truths, bases, strict=True):
                write_truth(truth, folder, base)
    return tuple(str(out.parent / name) for name in files)


def _summary(capture: SimulatedCapture, files: tuple[str, ...]) -> dict[str, Any]:
    """What was made, for people and programs."""
    import numpy as np

    truth = capture.truth
    finite = truth.N0 > 0
    return {
        "files": list(files),
        "frames": truth.frames,
        "samples_per_channel": capture.n_samples,
        "sample_rate_hz": capture.sample_rate,
        "samples_per_symbol": truth.samples_per_symbol,
        "duration_s": capture.n_samples / capture.sample_rate,
        "datatype": capture.datatype,
        "snr_db_lowest_frame": float(np.min(truth.snr_db)) if finite else None,
        "snr_db_highest_frame": float(np.max(truth.snr_db)) if finite else None,
        "cfo_hz_lowest": float(np.min(truth.cfo_hz)),
        "cfo_hz_highest": float(np.max(truth.cfo_hz)),
        "cfo_drift_hz_per_s": truth.drift_hz_per_s,
        "clock_ppm": truth.clock_ppm,
        "lost_samples": capture.n_clock - capture.n_samples,
        "clipped_samples": [int(n) for n in capture.clipped],
        "clipped_ahead_of_converter": [int(n) for n in capture.limited],
        "seed": truth.seed,
    }


def print_summary(summary: dict[str, Any], as_json: bool) -> None:
    """What was made, on standard output."""
    if as_json:
        typer.echo(json.dumps(summary, indent=2, allow_nan=False))
        return
    for key, value in summary.items():
        typer.echo(f"{key.replace('_', ' ')}: {_plain(value)}")


def _plain(value: Any) -> str:
    """A value of the summary as text."""
    if value is None:
        return "none"
    if isinstance(value, list):
        return ", ".join(_plain(item) for item in value)
    return f"{value:.10g}" if isinstance(value, float) else str(value)
