"""Optional parts of the program: said in one line when a library of theirs is missing."""

from __future__ import annotations

from importlib.util import find_spec

from spatiq.errors import InputError


def need(extra: str, *modules: str) -> None:
    """Refuse to go on without libraries that an extra installs.

    Raises:
        InputError: one of them is not installed.
    """
    for module in modules:
        if find_spec(module) is None:
            raise InputError(
                module, "", "not installed", f"the extra: pip install 'spatiq[{extra}]'"
            )
