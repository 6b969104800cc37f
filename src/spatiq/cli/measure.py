"""`spatiq measure`: from a recording and a link description to results."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Annotated

import typer

from spatiq.receiver.options import ReceiverOptions

_DEFAULTS = ReceiverOptions()

_Recording = Annotated[
    Path, typer.Argument(help="SigMF recording, collection or archive; any of its files.")
]
_Link = Annotated[Path, typer.Argument(help="Link description (*.link.toml).")]
_Out = Annotated[
    Path | None,
    typer.Option(help="Results file.", show_default="RECORDING.spatiq.h5 in this folder"),
]
_Csv = Annotated[bool, typer.Option("--csv", help="Also write frame table and summary as CSV.")]
_FramesJson = Annotated[
    bool, typer.Option("--frames-json", help="Also write the frame table as JSON.")
]
_Annotations = Annotated[
    bool,
    typer.Option("--annotations", help="Also mark the frames in a copy of the SigMF metadata."),
]
_Json = Annotated[
    bool, typer.Option("--json", help="Print the summary as JSON instead of the tables.")
]
_Symbols = Annotated[
    bool, typer.Option("--symbols", help="Keep received symbols and words in the results.")
]
_Llr = Annotated[
    str,
    typer.Option(
        metavar="exact|max-log",
        help="Keep log-likelihood ratios of all bits; positive: 0 likelier.",
    ),
]
_CfoRange = Annotated[
    float, typer.Option(help="Carrier offsets searched, +- this share of the symbol rate.")
]
_FalseAlarm = Annotated[
    float, typer.Option(help="Chance of noise passing as a frame, per lag and carrier bin.")
]
_Detector = Annotated[
    str, typer.Option(metavar="NAME", help="Detector, or module:function of your own.")
]
_Confidence = Annotated[float, typer.Option(help="Level of all intervals.")]
_Clock = Annotated[float, typer.Option(help="Symbol clock offsets expected, +- ppm.")]
_PhaseNoise = Annotated[float, typer.Option(help="Linewidth of phase noise to track, Hz.")]
_Spectrum = Annotated[
    str,
    typer.Option(
        metavar="auto|normal|inverted",
        help="Whether samples are conjugated; auto: when the frames say so.",
    ),
]
_NarrowBand = Annotated[
    bool,
    typer.Option("--narrow-band", help="Look for narrow-band noise in the band and take it out."),
]
_TwoStep = Annotated[
    bool, typer.Option("--two-step/--no-two-step", help="Compare with the two-step detector.")
]
_Channel = Annotated[
    str,
    typer.Option(
        metavar="flat|dispersive", help="Whether echoes reach into the symbols that follow."
    ),
]
_Memory = Annotated[
    int | None,
    typer.Option(
        help="Dispersive: earlier symbols that count.", show_default="chosen for each frame"
    ),
]
_Equaliser = Annotated[
    str,
    typer.Option(
        metavar="auto|sequence|mmse",
        help="Dispersive: decide whole sequences, or equalise linearly.",
    ),
]
_Survivors = Annotated[int, typer.Option(help="Dispersive: sequences kept by the search.")]
_Name = Annotated[
    str | None, typer.Option("--recording", metavar="NAME", help="Which one, out of an archive.")
]
_FullScale = Annotated[
    float | None,
    typer.Option(help="Sample value that is full scale.", show_default="from the sample type"),
]
_Rows = Annotated[int, typer.Option(min=0, help="Frames listed; 0 for none.")]
_Overwrite = Annotated[bool, typer.Option("--overwrite", help="Replace results already there.")]


@dataclass(frozen=True)
class MeasureRequest:
    """What `spatiq measure` was asked for."""

    recording: Path
    link: Path
    options: ReceiverOptions
    out: Path | None = None
    csv: bool = False
    frames_json: bool = False
    annotations: bool = False
    as_json: bool = False
    name: str | None = None
    full_scale: float | None = None
    rows: int = 20
    overwrite: bool = False


def measure_command(
    recording: _Recording,
    link: _Link,
    out: _Out = None,
    csv: _Csv = False,
    frames_json: _FramesJson = False,
    annotations: _Annotations = False,
    as_json: _Json = False,
    symbols: _Symbols = False,
    llr: _Llr = _DEFAULTS.soft_output,
    cfo_range: _CfoRange = _DEFAULTS.cfo_range,
    false_alarm: _FalseAlarm = _DEFAULTS.false_alarm,
    detector: _Detector = _DEFAULTS.detector,
    confidence: _Confidence = _DEFAULTS.confidence,
    max_clock_ppm: _Clock = _DEFAULTS.max_clock_ppm,
    phase_noise_hz: _PhaseNoise = _DEFAULTS.phase_noise_hz,
    spectrum: _Spectrum = _DEFAULTS.spectrum,
    narrow_band: _NarrowBand = _DEFAULTS.narrow_band,
    two_step: _TwoStep = _DEFAULTS.compare_two_step,
    channel: _Channel = _DEFAULTS.channel,
    memory: _Memory = _DEFAULTS.memory,
    equaliser: _Equaliser = _DEFAULTS.equaliser,
    survivors: _Survivors = _DEFAULTS.survivors,
    name: _Name = None,
    full_scale: _FullScale = None,
    rows: _Rows = 20,
    overwrite: _Overwrite = False,
) -> int:
    """Find every frame of a recording, decide it, and say how good the link was.

    Figures are engineering measurements, not a certificate of conformity.

    Example: spatiq measure run-07.sigmf-meta prototype.link.toml --csv
    """
    options = ReceiverOptions(
        cfo_range=cfo_range,
        false_alarm=false_alarm,
        detector=detector,
        confidence=confidence,
        compare_two_step=two_step,
        keep_symbols=symbols,
        soft_output=llr,
        max_clock_ppm=max_clock_ppm,
        phase_noise_hz=phase_noise_hz,
        narrow_band=narrow_band,
        channel=channel,
        memory=memory,
        equaliser=equaliser,
        survivors=survivors,
        spectrum=spectrum,
    )
    request = MeasureRequest(
        recording=recording,
        link=link,
        options=options,
        out=out,
        csv=csv,
        frames_json=frames_json,
        annotations=annotations,
        as_json=as_json,
        name=name,
        full_scale=full_scale,
        rows=rows,
        overwrite=overwrite,
    )
    from spatiq.cli.measuring import run_measure

    return run_measure(request)
