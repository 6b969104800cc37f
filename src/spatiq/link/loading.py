"""Link description: TOML text -> checked and built `Link`. manual.md documents the format."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from spatiq.errors import InputError
from spatiq.link.description import Link
from spatiq.link.faults import input_error
from spatiq.link.frame_building import check_period, frame_layout, period_symbols
from spatiq.link.layout import words_in
from spatiq.link.modulation_building import codebook
from spatiq.link.payload_building import payload_format
from spatiq.link.places import Place
from spatiq.link.pulse_building import pulse
from spatiq.link.schema import LinkSpec

MAX_BYTES = 16 << 20
# Endings left out of a link's name.
ENDINGS = (".toml", ".link")


def _tables(text: str, source: str) -> dict[str, Any]:
    """TOML text as tables.

    Raises:
        InputError: text that is no TOML.
    """
    try:
        return tomllib.loads(text)
    except RecursionError as fault:
        raise InputError(source, "", "tables nested too deeply", "TOML 1.0") from fault
    # TOMLDecodeError is a ValueError; so is a whole number with thousands of digits.
    except ValueError as fault:
        raise InputError(source, "", str(fault), "TOML 1.0") from fault


def parse_link(text: str, source: str = "<text>", folder: Path | None = None) -> Link:
    """A link from the text of its description.

    Args:
        text: TOML.
        source: what errors call it.
        folder: where files that it names lie; None: it may name none.

    Raises:
        InputError: anything that is not as manual.md says.
    """
    return _build(text, source, folder, None)


def load_link(path: str | Path) -> Link:
    """A link from its file.

    Raises:
        InputError: a file that cannot be read, or anything in it that is not as manual.md says.
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
    return _build(text, str(file), file.parent, file)


def _name(spec: LinkSpec, path: Path | None) -> str:
    if spec.name is not None:
        return spec.name
    if path is None:
        return "unnamed"
    name = path.name
    for ending in ENDINGS:
        name = name.removesuffix(ending) or name
    return name


def _build(text: str, source: str, folder: Path | None, path: Path | None) -> Link:
    try:
        spec = LinkSpec.model_validate(_tables(text, source))
    except ValidationError as fault:
        raise input_error(fault, source) from fault
    top = Place(source)
    air = spec.air
    book = codebook(spec.modulation, air.antennas, top / "modulation")
    shape = pulse(spec.pulse, top / "pulse")
    period = period_symbols(spec.frame, air.symbol_rate_hz, top / "frame")
    layout = frame_layout(spec.frame, air.antennas, top / "frame", book.block)
    check_period(period, layout.length, spec.frame, top / "frame")
    n_bits = words_in(layout, book) * book.bits
    payload = payload_format(spec.payload, n_bits, folder, top / "payload")
    return Link(
        name=_name(spec, path),
        path=path,
        text=text,
        antennas=air.antennas,
        symbol_rate_hz=air.symbol_rate_hz,
        carrier_hz=air.carrier_hz,
        clock=air.clock,
        codebook=book,
        pulse=shape,
        layout=layout,
        payload=payload,
        period_symbols=period,
        spec=spec,
    )


__all__ = ["Link", "load_link", "parse_link"]
