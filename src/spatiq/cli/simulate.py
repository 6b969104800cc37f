"""`spatiq simulate`: a recording of a link, channel and front end simulated."""

from __future__ import annotations

import json
from enum import StrEnum
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, NamedTuple

import typer

from spatiq.cli.sample_progress import with_progress

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from spatiq.transmit.simulation import SimulatedCapture


class ChannelKind(StrEnum):
    """Channel models by name."""

    RAYLEIGH = "rayleigh"
    RICIAN = "rician"
    FIXED = "fixed"


class SnrReference(StrEnum):
    """What the stated SNR refers to."""

    AVERAGE = "average"
    FRAME = "frame"


LinkArgument = Annotated[Path, typer.Argument(help="Link description (TOML).")]
OutOption = Annotated[Path, typer.Option(help="Folder and base name of the recording.")]
FramesOption = Annotated[int, typer.Option(help="Number of frames.")]
FirstFrameOption = Annotated[int, typer.Option(help="Number of the first frame.")]
SamplesPerSymbolOption = Annotated[
    float | None, typer.Option(help="Sample rate over symbol rate, any real number >= 1.")
]
SampleRateOption = Annotated[
    float | None, typer.Option(help="Sample rate in Hz, instead of samples per symbol.")
]
ReceiveChannelsOption = Annotated[int, typer.Option(help="Number of receive antennas.")]
SnrOption = Annotated[float, typer.Option(help="SNR in dB after the matched filter; inf: none.")]
SnrReferenceOption = Annotated[
    SnrReference, typer.Option(help="SNR of the average channel, or of each frame's own.")
]
ChannelOption = Annotated[ChannelKind, typer.Option(help="Channel model.")]
RicianKOption = Annotated[float, typer.Option(help="Rician K in dB.")]
ArrivalOption = Annotated[float, typer.Option(help="Rician line of sight: degrees at receiver.")]
DepartureOption = Annotated[
    float, typer.Option(help="Rician line of sight: degrees at transmitter.")
]
ReceiveCorrelationOption = Annotated[
    float | None, typer.Option(help="Exponential correlation coefficient at the receiver.")
]
TransmitCorrelationOption = Annotated[
    float | None, typer.Option(help="Exponential correlation coefficient at the transmitter.")
]
ConstantOption = Annotated[bool, typer.Option("--constant", help="One channel for all frames.")]
MatricesOption = Annotated[
    Path | None,
    typer.Option(help="Fixed channel: .npy file, complex (Nr, Nt) or (frames, Nr, Nt)."),
]
SpacingOption = Annotated[
    str, typer.Option(help="link, back-to-back, or silence in symbol periods: 12.5 or 10:40.")
]
LeadInOption = Annotated[float, typer.Option(help="Noise before, in symbol periods.")]
LeadOutOption = Annotated[float, typer.Option(help="Noise after, in symbol periods.")]
CfoOption = Annotated[
    str, typer.Option(help="Carrier offset in Hz; LOW:HIGH: drawn for each frame.")
]
ClockPpmOption = Annotated[float, typer.Option(help="Symbol period longer by this, in ppm.")]
ReferencePpmOption = Annotated[
    float | None, typer.Option(help="One reference for carrier and clock, fast by this.")
]
BitsOption = Annotated[
    int | None, typer.Option(help="Converter resolution, if below the datatype's.")
]
BackoffOption = Annotated[float, typer.Option(help="Full scale over rms of I or Q, dB.")]
SeedOption = Annotated[int, typer.Option(help="Seed of everything random.")]
DatatypeOption = Annotated[str, typer.Option(help="SigMF sample format.")]
CollectionOption = Annotated[
    bool, typer.Option("--collection", help="One recording per channel, and a collection.")
]
TruthOption = Annotated[
    bool, typer.Option("--truth", help="Keep channels, offsets and words beside it.")
]
OverwriteOption = Annotated[bool, typer.Option("--overwrite", help="Replace files.")]
AsJsonOption = Annotated[bool, typer.Option("--json", help="Summary as JSON.")]


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
    spacing: SpacingOption = "link",
    lead_in: LeadInOption = 64,
    lead_out: LeadOutOption = 64,
    cfo: CfoOption = "0",
    clock_ppm: ClockPpmOption = 0,
    reference_ppm: ReferencePpmOption = None,
    bits: BitsOption = None,
    backoff: BackoffOption = 18,
    seed: SeedOption = 0,
    datatype: DatatypeOption = "ci16_le",
    collection: CollectionOption = False,
    truth: TruthOption = False,
    overwrite: OverwriteOption = False,
    as_json: AsJsonOption = False,
) -> None:
    """Simulate the recording of a link: frames, channel, offsets, noise, converter.

    Example: spatiq simulate lab.link.toml --samples-per-symbol 4 --snr 20 --out captures/lab
    """
    from spatiq.link.loading import load_link
    from spatiq.transmit.simulation import simulate

    checked = load_link(link)
    fading = _Fading(
        channel, rician_k, arrival, departure, receive_correlation, transmit_correlation, constant
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
        channels=_channels(fading, matrices),
        spacing=parse_spacing(spacing),
        lead_in=lead_in,
        lead_out=lead_out,
        cfo_hz=_number_or_range(cfo, "--cfo", "a number of Hz, or LOW:HIGH"),
        clock_ppm=clock_ppm,
        reference_ppm=reference_ppm,
        bits=bits,
        backoff_db=backoff,
        seed=seed,
        datatype=datatype,
    )
    written = _write(capture, out, collection, truth, overwrite)
    print_summary(_summary(capture, written), as_json)


class _Fading(NamedTuple):
    """The options that describe a channel model."""

    kind: ChannelKind
    rician_k: float
    arrival: float
    departure: float
    receive_correlation: float | None
    transmit_correlation: float | None
    constant: bool


def _channels(fading: _Fading, matrices: Path | None) -> Any:
    """The channel model, or array, that the options ask for."""
    from spatiq.errors import InputError
    from spatiq.transmit.channel import rayleigh, rician, steering_line_of_sight

    if (matrices is not None) != (fading.kind is ChannelKind.FIXED):
        found = f"--channel {fading.kind} and --matrices {matrices}"
        raise InputError("--matrices", "", found, "a file for --channel fixed, and only for it")
    if matrices is not None:
        return _matrices(matrices)
    correlations: dict[str, Any] = {
        "receive_correlation": fading.receive_correlation,
        "transmit_correlation": fading.transmit_correlation,
        "constant": fading.constant,
    }
    if fading.kind is ChannelKind.RAYLEIGH:
        return rayleigh(**correlations)
    direct = partial(
        steering_line_of_sight, arrival_deg=fading.arrival, departure_deg=fading.departure
    )
    return rician(fading.rician_k, line_of_sight=direct, **correlations)


def _matrices(path: Path) -> NDArray[np.complex128]:
    """Channel matrices from a .npy file."""
    import numpy as np

    from spatiq.errors import InputError

    expected = "a .npy file of complex numbers, shape (Nr, Nt) or (frames, Nr, Nt)"
    try:
        loaded = np.load(path, allow_pickle=False, mmap_mode="r")
    except (OSError, ValueError, EOFError) as error:
        raise InputError(path, "", error, expected) from error
    if not isinstance(loaded, np.ndarray) or loaded.dtype.kind not in "iufc":
        raise InputError(path, "", "something else than an array of numbers", expected)
    return np.array(loaded, np.complex128)


def _number_or_range(text: str, option: str, expected: str) -> float | tuple[float, float]:
    """ "x" -> x; "x:y" -> (x, y)."""
    from spatiq.errors import InputError

    try:
        values = [float(part) for part in text.split(":")]
    except ValueError as error:
        raise InputError(option, "", repr(text), expected) from error
    if len(values) > 2:
        raise InputError(option, "", repr(text), expected)
    return values[0] if len(values) == 1 else (values[0], values[1])


def parse_spacing(text: str) -> str | float | tuple[float, float]:
    """The --spacing option."""
    if text in ("link", "back-to-back"):
        return text
    expected = "link, back-to-back, a number of symbol periods, or LOW:HIGH"
    return _number_or_range(text, "--spacing", expected)


def _write(
    capture: SimulatedCapture, out: Path, collection: bool, keep_truth: bool, overwrite: bool
) -> tuple[str, ...]:
    """Write recording and truth; the names of the files."""
    from spatiq.transmit.output import RecordingSet, staged, write_set
    from spatiq.transmit.truth_files import truth_names, write_truth

    channels = range(capture.receive_channels)
    recordings = RecordingSet(
        base=out,
        names=tuple(f"-rx{r}" for r in channels) if collection else ("",),
        sample_rate=capture.sample_rate,
        datatype=capture.datatype,
        carrier_hz=capture.link.carrier_hz,
        description=f"simulated recording of link {capture.link.name}",
        overwrite=overwrite,
    )
    files = recordings.files()
    if keep_truth:
        files = (*truth_names(out.name), *files)
    with staged(out, files, overwrite) as folder:
        blocks = with_progress(capture.blocks(), capture.n_samples, "simulating")
        write_set(recordings, folder, blocks)
        if keep_truth:
            write_truth(capture.truth, folder, out.name)
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
        "clock_ppm": truth.clock_ppm,
        "clipped_samples": [int(n) for n in capture.clipped],
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
