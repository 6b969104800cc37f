"""Limits file (*.limits.toml): bounds on figures. limits.md documents the format."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, ValidationError

from spatiq.acceptance.figure_kinds import BY_NAME, Figure
from spatiq.errors import InputError
from spatiq.link.faults import input_error
from spatiq.link.places import Place
from spatiq.link.values import Number, OneOf, Table, Text, Whole

MAX_BYTES = 1 << 20
_LARGEST = 1e15

_Line = Annotated[str, Text(r"^[^\x00-\x1f\x7f]{1,200}$", "one line of 1 to 200 characters")]
_Bound = Annotated[float, Number(-_LARGEST, _LARGEST)]
_Frequency = Annotated[float, Number(-_LARGEST, _LARGEST)]
_Antenna = Annotated[int, Whole(0, 63)]


class AdjacentChannel(Table):
    """A channel beside the one in use.

    Attributes:
        name: what limits and figures call it.
        offset_hz: its centre, from the carrier.
        bandwidth_hz: its width; the channel in use is as wide.
    """

    name: Annotated[str, Text(r"^[A-Za-z0-9+_.-]{1,30}$", "1 to 30 letters, digits, +-_.")]
    offset_hz: _Frequency
    bandwidth_hz: Annotated[float, Number(0.0, _LARGEST, above=True)]


class Limit(Table):
    """A bound on one figure.

    Attributes:
        figure: name of a `Kind`.
        antenna: the antenna it is for; "each": every one on its own; None: the figure over all.
        channel: adjacent channel it is for, by name.
        lower, upper: bounds, in the figure's unit; at least one.
        source: where the bound comes from, for the report.
    """

    figure: Annotated[str, OneOf(*BY_NAME)]
    antenna: Annotated[_Antenna | Literal["each"], Field(union_mode="left_to_right")] | None = None
    channel: _Line | None = None
    lower: _Bound | None = None
    upper: _Bound | None = None
    source: _Line | None = None

    def covers(self, figure: Figure) -> bool:
        """Whether a figure is held against this bound."""
        if figure.kind.name != self.figure:
            return False
        scope = figure.kind.scope
        if scope == "antenna":
            if self.antenna == "each":
                return figure.subject != ""
            return figure.subject == ("" if self.antenna is None else str(self.antenna))
        if scope == "channel":
            return self.channel is None or figure.subject == self.channel
        return True


class Limits(Table):
    """A limits file.

    Attributes:
        format: 1.
        name: for the report.
        confidence: level at which a verdict is given.
        snr_db: SNR at which `predicted_ber_at_snr` is predicted.
        adjacent: adjacent channels.
        limit: the bounds.
    """

    format: Annotated[int, Whole(1, 1)]
    name: _Line | None = None
    confidence: Annotated[float, Number(0.5, 0.9999)] = 0.95
    snr_db: Annotated[float, Number(-50.0, 100.0)] | None = None
    adjacent: Annotated[tuple[AdjacentChannel, ...], Field(max_length=16, strict=False)] = ()
    limit: Annotated[list[Limit], Field(min_length=1, max_length=1000)]


def parse_limits(text: str, source: str = "<text>") -> Limits:
    """Limits from the text of their file.

    Raises:
        InputError: anything that is not as limits.md says.
    """
    try:
        tables = tomllib.loads(text)
    except (ValueError, RecursionError) as fault:
        raise InputError(source, "", str(fault), "TOML 1.0") from fault
    try:
        limits = Limits.model_validate(tables)
    except ValidationError as fault:
        raise input_error(fault, source) from fault
    _check(limits, Place(source))
    return limits


def load_limits(path: str | Path) -> Limits:
    """Limits from their file.

    Raises:
        InputError: a file that cannot be read, or anything in it that is not as limits.md says.
    """
    file = Path(path)
    try:
        size = file.stat().st_size
        if size > MAX_BYTES:
            raise InputError(file, "", f"{size} bytes", f"a text of at most {MAX_BYTES} bytes")
        text = file.read_bytes().decode("utf-8")
    except OSError as fault:
        raise InputError(file, "", fault.strerror or str(fault), "a readable file") from fault
    except UnicodeDecodeError as fault:
        raise InputError(file, "", f"byte {fault.start} is not UTF-8", "UTF-8 text") from fault
    return parse_limits(text, str(file))


def _check(limits: Limits, top: Place) -> None:
    """What the tables on their own cannot say."""
    names = [channel.name for channel in limits.adjacent]
    for i, name in enumerate(names):
        if name in names[:i]:
            raise (top / "adjacent" / i / "name").fault(name, "a name for each channel")
    for i, limit in enumerate(limits.limit):
        place = top / "limit" / i
        if limit.lower is None and limit.upper is None:
            raise place.fault("no bound", "lower, upper or both")
        if limit.lower is not None and limit.upper is not None and limit.lower > limit.upper:
            raise (place / "lower").fault(limit.lower, f"at most upper, {limit.upper:g}")
        scope = BY_NAME[limit.figure].scope
        if limit.antenna is not None and scope != "antenna":
            raise (place / "antenna").fault(
                limit.antenna, f"nothing: {limit.figure} has no antenna"
            )
        if limit.channel is not None and scope != "channel":
            raise (place / "channel").fault(
                limit.channel, f"nothing: {limit.figure} has no channel"
            )
        if limit.channel is not None and limit.channel not in names:
            raise (place / "channel").fault(limit.channel, "the name of an adjacent channel")
        if scope == "channel" and not names:
            raise place.fault(limit.figure, "an [[adjacent]] channel to measure it in")
        if limit.figure == "predicted_ber_at_snr" and limits.snr_db is None:
            raise (top / "snr_db").fault("nothing", "the SNR at which BER is to be predicted")
