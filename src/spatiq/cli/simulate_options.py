"""The options of `spatiq simulate`, by the panel of the help in which they stand."""

from __future__ import annotations

from enum import StrEnum
from pathlib import Path
from typing import Annotated

import typer

RECORDING = "Recording"
FRAMES = "Frames in time"
CHANNEL = "Channel and delays"
CARRIER = "Carrier and clock"
NOISE = "Noise and interference"
FRONT_END = "Front end, in the order in which it acts"
LOSSES = "Lost samples"


class ChannelKind(StrEnum):
    """Channel models by name."""

    RAYLEIGH = "rayleigh"
    RICIAN = "rician"
    FIXED = "fixed"
    TDL_A = "tdl-a"
    TDL_C = "tdl-c"
    TDL_D = "tdl-d"


class SnrReference(StrEnum):
    """What the stated SNR refers to."""

    AVERAGE = "average"
    FRAME = "frame"


LinkArgument = Annotated[Path, typer.Argument(help="Link description (TOML).")]
OutOption = Annotated[
    Path, typer.Option(help="Folder and base name of the recording.", rich_help_panel=RECORDING)
]
FramesOption = Annotated[int, typer.Option(help="Number of frames.", rich_help_panel=FRAMES)]
FirstFrameOption = Annotated[
    int, typer.Option(help="Number of the first frame.", rich_help_panel=FRAMES)
]
SamplesPerSymbolOption = Annotated[
    float | None,
    typer.Option(
        help="Sample rate over symbol rate, any real number >= 1.", rich_help_panel=RECORDING
    ),
]
SampleRateOption = Annotated[
    float | None,
    typer.Option(
        help="Sample rate in Hz, instead of samples per symbol.", rich_help_panel=RECORDING
    ),
]
ReceiveChannelsOption = Annotated[
    int, typer.Option(help="Number of receive antennas.", rich_help_panel=CHANNEL)
]
SnrOption = Annotated[
    float,
    typer.Option(help="SNR in dB after the matched filter; inf: none.", rich_help_panel=NOISE),
]
SnrReferenceOption = Annotated[
    SnrReference,
    typer.Option(help="SNR of the average channel, or of each frame's own.", rich_help_panel=NOISE),
]
ChannelOption = Annotated[
    ChannelKind,
    typer.Option(
        help="Channel model; tdl-...: echoes by a delay profile of 3GPP TR 38.901.",
        rich_help_panel=CHANNEL,
    ),
]
DelaySpreadOption = Annotated[
    float | None,
    typer.Option(
        help="Echoes (tdl-...): rms delay spread in symbol periods.", rich_help_panel=CHANNEL
    ),
]
RicianKOption = Annotated[float, typer.Option(help="Rician K in dB.", rich_help_panel=CHANNEL)]
ArrivalOption = Annotated[
    float, typer.Option(help="Rician line of sight: degrees at receiver.", rich_help_panel=CHANNEL)
]
DepartureOption = Annotated[
    float,
    typer.Option(help="Rician line of sight: degrees at transmitter.", rich_help_panel=CHANNEL),
]
ReceiveCorrelationOption = Annotated[
    float | None,
    typer.Option(
        help="Exponential correlation coefficient at the receiver.", rich_help_panel=CHANNEL
    ),
]
TransmitCorrelationOption = Annotated[
    float | None,
    typer.Option(
        help="Exponential correlation coefficient at the transmitter.", rich_help_panel=CHANNEL
    ),
]
ConstantOption = Annotated[
    bool, typer.Option("--constant", help="One channel for all frames.", rich_help_panel=CHANNEL)
]
MatricesOption = Annotated[
    Path | None,
    typer.Option(
        help="Fixed channel: .npy file, complex (Nr, Nt) or (frames, Nr, Nt).",
        rich_help_panel=CHANNEL,
    ),
]
SpacingOption = Annotated[
    str,
    typer.Option(
        help="link, back-to-back, or silence in symbol periods: 12.5 or 10:40.",
        rich_help_panel=FRAMES,
    ),
]
LeadInOption = Annotated[
    float, typer.Option(help="Noise before, in symbol periods.", rich_help_panel=FRAMES)
]
LeadOutOption = Annotated[
    float, typer.Option(help="Noise after, in symbol periods.", rich_help_panel=FRAMES)
]
CfoOption = Annotated[
    str,
    typer.Option(
        help="Carrier offset in Hz; LOW:HIGH: drawn for each frame.", rich_help_panel=CARRIER
    ),
]
ClockPpmOption = Annotated[
    float, typer.Option(help="Symbol period longer by this, in ppm.", rich_help_panel=CARRIER)
]
ReferencePpmOption = Annotated[
    float | None,
    typer.Option(
        help="One reference for carrier and clock, fast by this.", rich_help_panel=CARRIER
    ),
]
BitsOption = Annotated[
    int | None,
    typer.Option(help="Converter resolution, if below the datatype's.", rich_help_panel=FRONT_END),
]
BackoffOption = Annotated[
    float, typer.Option(help="Full scale over rms of I or Q, dB.", rich_help_panel=FRONT_END)
]
SeedOption = Annotated[
    int, typer.Option(help="Seed of everything random.", rich_help_panel=RECORDING)
]
DatatypeOption = Annotated[
    str, typer.Option(help="SigMF sample format.", rich_help_panel=RECORDING)
]
CollectionOption = Annotated[
    bool,
    typer.Option(
        "--collection",
        help="One recording per channel, and a collection.",
        rich_help_panel=RECORDING,
    ),
]
TruthOption = Annotated[
    bool,
    typer.Option(
        "--truth", help="Keep channels, offsets and words beside it.", rich_help_panel=RECORDING
    ),
]
OverwriteOption = Annotated[
    bool, typer.Option("--overwrite", help="Replace files.", rich_help_panel=RECORDING)
]
AsJsonOption = Annotated[
    bool, typer.Option("--json", help="Summary as JSON.", rich_help_panel=RECORDING)
]
DopplerOption = Annotated[
    float | None,
    typer.Option(
        help="Channel moves within frames (Clarke): largest Doppler shift over symbol rate.",
        rich_help_panel=CHANNEL,
    ),
]
AntennaDelayOption = Annotated[
    str,
    typer.Option(
        help="Delay of each transmit antenna, symbol periods, -0.5 to 0.5: 0,0.25",
        rich_help_panel=CHANNEL,
    ),
]
ReceiveDelayOption = Annotated[
    str,
    typer.Option(
        help="Delay of each receive channel, samples, any fraction: 0,1.5",
        rich_help_panel=CHANNEL,
    ),
]
ReceiveGainOption = Annotated[
    str,
    typer.Option(
        help="Gain of each receive channel, dB or dB@degrees: 0,-3@45", rich_help_panel=CHANNEL
    ),
]
PauseOption = Annotated[
    str,
    typer.Option(
        help="EVERY:SILENCE, frames and symbol periods: further silence after so many frames.",
        rich_help_panel=FRAMES,
    ),
]
OtherOption = Annotated[
    list[str] | None,
    typer.Option(
        help="A second transmitter's frames: seed=2,delay=30.5,power=-3,cfo=100,clock-ppm=4,"
        "doppler=1e-4,spacing=20 (delay in symbol periods, power in dB). Repeatable.",
        rich_help_panel=FRAMES,
    ),
]
CfoDriftOption = Annotated[
    float, typer.Option(help="Growth of the carrier offset, Hz/s.", rich_help_panel=CARRIER)
]
LinewidthOption = Annotated[
    float,
    typer.Option(
        help="Wiener phase noise: full width of the line at half power, Hz.",
        rich_help_panel=CARRIER,
    ),
]
PhaseNoiseOption = Annotated[
    str,
    typer.Option(
        help="Phase-noise mask, offset in Hz:dBc/Hz: 1e3:-80,1e4:-100,1e6:-130",
        rich_help_panel=CARRIER,
    ),
]
NoisePowerOption = Annotated[
    str,
    typer.Option(
        help="Noise power of each receive channel over N0, dB: 0,3", rich_help_panel=NOISE
    ),
]
NoiseCorrelationOption = Annotated[
    float | None,
    typer.Option(
        help="Exponential correlation of the noise over receive channels.", rich_help_panel=NOISE
    ),
]
NoiseTapsOption = Annotated[
    str, typer.Option(help="Coloured noise, FIR taps: 1,0.5", rich_help_panel=NOISE)
]
NoiseFeedbackOption = Annotated[
    str,
    typer.Option(
        help="Coloured noise, all-pole 1/(1 + a1 z^-1 + ...): a1,a2", rich_help_panel=NOISE
    ),
]
InterfererOption = Annotated[
    list[str] | None,
    typer.Option(
        help="Tone: Hz:dB over payload, and if wanted :dB@degrees of each receive channel: "
        "1e5:-10:0@0,3@90. Narrow-band noise: Hz/bandwidth:dB, 1e5/2e4:0. Repeatable.",
        rich_help_panel=NOISE,
    ),
]
GainStepOption = Annotated[
    list[str] | None,
    typer.Option(
        help="FRAME:DB, the gain rises by DB: 3:-6 ahead of frame 3, 3.5:-6 amid it. Repeatable.",
        rich_help_panel=FRONT_END,
    ),
]
FrameGainOption = Annotated[
    float,
    typer.Option(
        help="Each frame's own gain, drawn within so many dB either way.",
        rich_help_panel=FRONT_END,
    ),
]
IqGainOption = Annotated[
    str,
    typer.Option(
        help="Gain of Q over I, dB; one, or one a receive channel.", rich_help_panel=FRONT_END
    ),
]
IqPhaseOption = Annotated[
    str,
    typer.Option(
        help="Departure from quadrature, degrees; one, or one a receive channel.",
        rich_help_panel=FRONT_END,
    ),
]
DcOption = Annotated[
    str,
    typer.Option(
        help="DC offset, dB over payload; one, or one a receive channel.",
        rich_help_panel=FRONT_END,
    ),
]
InvertOption = Annotated[
    bool, typer.Option("--invert", help="Invert the spectrum.", rich_help_panel=FRONT_END)
]
ClipOption = Annotated[
    float | None,
    typer.Option(help="Clip I and Q at so many dB over their rms.", rich_help_panel=FRONT_END),
]
DeadOption = Annotated[
    list[str] | None,
    typer.Option(
        help="CHANNEL or CHANNEL@SECONDS: a receive channel that gives zeros from then on. "
        "Repeatable.",
        rich_help_panel=FRONT_END,
    ),
]
LoseOption = Annotated[
    list[str] | None,
    typer.Option(help="SAMPLE:COUNT is not recorded. Repeatable.", rich_help_panel=LOSSES),
]
LoseRandomOption = Annotated[
    str,
    typer.Option(
        help="RUNS:COUNT or RUNS:LOW:HIGH: so many runs of samples at random places.",
        rich_help_panel=LOSSES,
    ),
]
SilentLossOption = Annotated[
    bool,
    typer.Option(
        "--silent-loss",
        help="Do not tell in the metadata (core:global_index) where samples are missing.",
        rich_help_panel=LOSSES,
    ),
]
