"""The one family of exceptions: what was given, what was found, what is accepted."""

from __future__ import annotations


class SpatiqError(Exception):
    """Anything this program refuses to do; the command line maps it to exit code 2."""


class InputError(SpatiqError):
    """A file, option or argument that cannot be used as it is.

    Args:
        source: file name or option concerned.
        field: key path or field inside it; empty when the whole is meant.
        found: what was found there.
        expected: what is accepted.
    """

    def __init__(self, source: object, field: str, found: object, expected: str) -> None:
        self.source = str(source)
        self.field = field
        self.found = str(found)
        self.expected = expected
        place = f"{self.source}: {field}" if field else self.source
        text = f"{place}: found {self.found}; expected {expected}"
        super().__init__(" ".join(text.split()))

    def __reduce__(self) -> tuple[type[InputError], tuple[str, str, str, str]]:
        """What it is made anew from, so that a worker process can hand it on."""
        return type(self), (self.source, self.field, self.found, self.expected)
