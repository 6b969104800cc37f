"""Options of `spatiq simulate` -> choices of a scenario."""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any, NamedTuple

from spatiq.cli.simulate_options import ChannelKind
from spatiq.cli.simulate_texts import (
    number_list,
    number_or_range,
    number_pair,
    parsed,
    phasors,
    settings,
    split_numbers,
    whole,
)
from spatiq.errors import InputError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from spatiq.transmit.front_end import Impairment
    from spatiq.transmit.second_transmitter import OtherTransmitter

OTHER_KEYS = ("seed", "delay", "power", "cfo", "clock-ppm", "doppler", "spacing", "frames")


class FadingOptions(NamedTuple):
    """The options that describe a channel model."""

    kind: ChannelKind
    rician_k: float
    arrival: float
    departure: float
    receive_correlation: float | None
    transmit_correlation: float | None
    constant: bool
    doppler: float | None
    delay_spread: float | None


def channels(fading: FadingOptions, matrices: Path | None) -> Any:
    """The channel model, or array, that the options ask for."""
    from spatiq.transmit.channel import Fading, rayleigh, rician, steering_line_of_sight
    from spatiq.transmit.delay_profiles import PROFILES
    from spatiq.transmit.moving_channel import Doppler
    from spatiq.transmit.tapped_delay_line import TappedDelayLine

    if (matrices is not None) != (fading.kind is ChannelKind.FIXED):
        found = f"--channel {fading.kind} and --matrices {matrices}"
        raise InputError("--matrices", "", found, "a file for --channel fixed, and only for it")
    if fading.doppler is not None and (fading.constant or matrices is not None):
        found = "beside a channel that stands still"
        raise InputError("--doppler", "", found, "no --channel fixed and no --constant")
    if matrices is not None:
        return _matrices(matrices)
    dispersive = fading.kind.value in PROFILES
    if (fading.delay_spread is not None) != dispersive:
        found = f"--channel {fading.kind} and --delay-spread {fading.delay_spread}"
        expected = f"symbol periods for --channel {', '.join(PROFILES)}, and only for these"
        raise InputError("--delay-spread", "", found, expected)
    correlations: dict[str, Any] = {
        "receive_correlation": fading.receive_correlation,
        "transmit_correlation": fading.transmit_correlation,
        "constant": fading.constant,
    }
    direct = partial(
        steering_line_of_sight, arrival_deg=fading.arrival, departure_deg=fading.departure
    )
    if fading.delay_spread is not None:
        each = Fading(line_of_sight=direct, **correlations)
        return TappedDelayLine(fading.kind.value, fading.delay_spread, each, fading.doppler or 0.0)
    if fading.kind is ChannelKind.RAYLEIGH:
        model = rayleigh(**correlations)
    else:
        model = rician(fading.rician_k, line_of_sight=direct, **correlations)
    return model if fading.doppler is None else Doppler(fading.doppler, model)


def _matrices(path: Path) -> NDArray[np.complex128]:
    """Channel matrices from a .npy file."""
    import numpy as np

    expected = "a .npy file of complex numbers, shape (Nr, Nt) or (frames, Nr, Nt)"
    try:
        loaded = np.load(path, allow_pickle=False, mmap_mode="r")
    except (OSError, ValueError, EOFError) as error:
        raise InputError(path, "", error, expected) from error
    if not isinstance(loaded, np.ndarray) or loaded.dtype.kind not in "iufc":
        raise InputError(path, "", "something else than an array of numbers", expected)
    return np.array(loaded, np.complex128)


def parse_spacing(text: str, option: str = "--spacing") -> str | float | tuple[float, float]:
    """The --spacing option."""
    if text in ("link", "back-to-back"):
        return text
    expected = "link, back-to-back, a number of symbol periods, or LOW:HIGH"
    return number_or_range(text, option, expected)


def time_choices(pause: str, others: Sequence[str]) -> dict[str, Any]:
    """Pauses and further transmitters."""
    choices: dict[str, Any] = {"others": [_other(text) for text in others]}
    if pause:
        expected = "EVERY:SILENCE, a number of frames and symbol periods"
        every, silence = number_pair(pause, "--pause", expected)
        choices["pause"] = (whole(every, pause, "--pause", expected), silence)
    return choices


def _other(text: str) -> OtherTransmitter:
    """One --other."""
    from spatiq.transmit.moving_channel import Doppler
    from spatiq.transmit.second_transmitter import OtherTransmitter

    given = settings(text, "--other", OTHER_KEYS)

    def number(key: str, default: float) -> float:
        return parsed(given[key], "--other", f"{key}=number", float) if key in given else default

    def count(key: str, default: int) -> int:
        return whole(number(key, default), text, "--other", f"{key}=whole number")

    return OtherTransmitter(
        seed=count("seed", 1),
        delay=number("delay", 0.0),
        power_db=number("power", 0.0),
        cfo_hz=number("cfo", 0.0),
        clock_ppm=number("clock-ppm", 0.0),
        channels=Doppler(number("doppler", 0.0)) if "doppler" in given else None,
        spacing=parse_spacing(given["spacing"], "--other") if "spacing" in given else None,
        frames=count("frames", 0) if "frames" in given else None,
    )


def path_choices(antenna_delay: str, receive_delay: str, receive_gain: str) -> dict[str, Any]:
    """Delays and gains of the antennas at either end."""
    expected = "numbers with commas between"
    return {
        "antenna_delays": number_list(antenna_delay, "--antenna-delay", expected),
        "receive_delays": number_list(receive_delay, "--receive-delay", expected),
        "receive_gains": phasors(receive_gain, "--receive-gain"),
    }


def carrier_choices(cfo: str, drift: float, linewidth: float, mask: str) -> dict[str, Any]:
    """Carrier offset, drift, phase noise."""
    from spatiq.transmit.phase_noise_mask import PhaseNoiseMask
    from spatiq.transmit.rotation import Rotation, WienerPhaseNoise

    phase_noise: list[Rotation] = []
    if linewidth:
        phase_noise.append(WienerPhaseNoise(linewidth))
    if mask:
        expected = "OFFSET_HZ:DBC_PER_HZ with commas between: 1e3:-80,1e5:-110"
        points = [number_pair(part, "--phase-noise", expected) for part in mask.split(",")]
        phase_noise.append(PhaseNoiseMask(tuple(points)))
    return {
        "cfo_hz": number_or_range(cfo, "--cfo", "a number of Hz, or LOW:HIGH"),
        "drift_hz_per_s": drift,
        "phase_noise": phase_noise,
    }


def noise_choices(
    power: str, correlation: float | None, taps: str, feedback: str, interferers: Sequence[str]
) -> dict[str, Any]:
    """Noise over the receive channels, its colour, interference."""
    from spatiq.transmit.noise_shape import NoiseShape

    expected = "numbers with commas between"
    numerator = number_list(taps, "--noise-taps", expected)
    denominator = number_list(feedback, "--noise-feedback", expected)
    shape = None
    if numerator is not None or denominator is not None:
        shape = NoiseShape(tuple(numerator or (1.0,)), tuple(denominator or ()))
    return {
        "noise_db": number_list(power, "--noise-power", expected),
        "noise_correlation": correlation,
        "noise_shape": shape,
        "arriving": [_interferer(text) for text in interferers],
    }


def _interferer(text: str) -> Impairment:
    """A tone, or where a width stands behind the frequency, noise of that bandwidth."""
    from spatiq.transmit.interferer import Interferer
    from spatiq.transmit.narrow_band import NarrowBandNoise

    place, _, rest = text.partition(":")
    level, _, heard = rest.partition(":")
    centre, slash, width = place.partition("/")
    form = "HZ:DB or HZ/WIDTH:DB, and if wanted :SIGNATURE, dB@degrees of each receive channel"
    hertz, decibels = number_pair(f"{centre}:{level}", "--interferer", form)
    signature = phasors(heard, "--interferer")
    if not slash:
        return Interferer(hertz, decibels, signature)
    bandwidth, _ = number_pair(f"{width}:0", "--interferer", form)
    return NarrowBandNoise(hertz, bandwidth, decibels, signature)


class FrontEndOptions(NamedTuple):
    """The options of the front end."""

    gain_steps: Sequence[str]
    frame_gain: float
    iq_gain: str
    iq_phase: str
    dc: str
    invert: bool
    clip: float | None
    dead: Sequence[str]


def front_end_choices(options: FrontEndOptions) -> dict[str, Any]:
    """Gain steps, then mixer and DC, inversion, clipping, dead channels."""
    from spatiq.transmit.clipping import Clipping
    from spatiq.transmit.dc_offset import DcOffset
    from spatiq.transmit.gain_steps import GainPlan
    from spatiq.transmit.inversion import SpectralInversion
    from spatiq.transmit.iq_imbalance import IqImbalance

    expected = "numbers with commas between"
    front_end: list[Impairment] = []
    if options.iq_gain or options.iq_phase:
        gain = number_list(options.iq_gain, "--iq-gain", expected)
        phase = number_list(options.iq_phase, "--iq-phase", expected)
        front_end.append(IqImbalance(gain or 0.0, phase or 0.0))
    if options.dc:
        front_end.append(DcOffset(number_list(options.dc, "--dc", expected) or 0.0))
    if options.invert:
        front_end.append(SpectralInversion())
    if options.clip is not None:
        front_end.append(Clipping(options.clip))
    front_end += [_dead(text) for text in options.dead]
    steps = [
        number_pair(text, "--gain-step", "FRAME:DB, the frame counted from 0")
        for text in options.gain_steps
    ]
    planned = steps or options.frame_gain
    plan = GainPlan(tuple(steps), options.frame_gain) if planned else None
    return {"impairments": front_end, "gains": plan}


def _dead(text: str) -> Any:
    """One --dead."""
    from spatiq.transmit.dead_channel import DeadChannels

    expected = "CHANNEL or CHANNEL@SECONDS"
    channel, at, seconds = text.partition("@")
    number = parsed(channel, "--dead", expected, int)
    return DeadChannels((number,), parsed(seconds, "--dead", expected, float) if at else 0.0)


def loss_choices(lose: Sequence[str], at_random: str, silent: bool) -> dict[str, Any]:
    """Samples that are not recorded."""
    from spatiq.transmit.losses import Losses

    if not lose and not at_random:
        if silent:
            expected = "--lose or --lose-random beside it"
            raise InputError("--silent-loss", "", "no lost samples", expected)
        return {"losses": None}
    expected = "SAMPLE:COUNT, whole numbers"
    runs = []
    for text in lose:
        first, count = number_pair(text, "--lose", expected)
        place = whole(first, text, "--lose", expected)
        runs.append((place, whole(count, text, "--lose", expected)))
    number, length = 0, [1.0]
    if at_random:
        form = "RUNS:COUNT or RUNS:LOW:HIGH, whole numbers"
        values = split_numbers(at_random, ":", "--lose-random", form)
        if len(values) not in (2, 3):
            raise InputError("--lose-random", "", repr(at_random), form)
        number, *rest = (whole(v, at_random, "--lose-random", form) for v in values)
        length = [rest[0], rest[-1]]
    span = (int(length[0]), int(length[-1]))
    return {"losses": Losses(tuple(runs), number, span, not silent)}
