"""Where in a link description something stands, and how a fault there is reported."""

from __future__ import annotations

import difflib
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass

from spatiq.errors import InputError

SHOWN_CHARACTERS = 60


def shown(value: object) -> str:
    """A value found, short enough for a line of text."""
    text = repr(value)
    if len(text) > SHOWN_CHARACTERS:
        text = text[: SHOWN_CHARACTERS - 3] + "..."
    return text


def one_of(accepted: Iterable[str], found: object = None) -> str:
    """List of accepted names, the one nearest to what was found pointed out."""
    names = list(accepted)
    text = ("one of " if len(names) > 1 else "") + ", ".join(names)
    if isinstance(found, str):
        near = difflib.get_close_matches(found, names, n=1, cutoff=0.6)
        if not near:
            near = [n for n in names if n.lower() == found.lower()]
        if near:
            text += f" (nearest: {near[0]})"
    return text


@dataclass(frozen=True)
class Place:
    """A key path in a file, such as frame.section[2].sequence.

    Attributes:
        source: file name, for people.
        path: dotted path with indices; empty for the whole file.
    """

    source: str
    path: str = ""

    def __truediv__(self, step: str | int) -> Place:
        """One step further in: a key, or an index of a list."""
        if isinstance(step, int):
            return Place(self.source, f"{self.path}[{step}]")
        if not step:
            return self
        return Place(self.source, f"{self.path}.{step}" if self.path else step)

    def fault(self, found: object, expected: str) -> InputError:
        """The error to raise about what stands here."""
        return InputError(self.source, self.path, found, expected)

    @contextmanager
    def reporting(self) -> Iterator[None]:
        """Report faults that the signal layer finds as faults of this place."""
        try:
            yield
        except InputError as fault:
            raise (self / fault.field).fault(fault.found, fault.expected) from fault
