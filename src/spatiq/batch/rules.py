"""Which link description, and which receiver options, go with which recording: the rule file.

    format = 1

    [[rule]]                        # the first rule that fits decides
    link = "yard.link.toml"         # beside the rule file, or a path from there
    folder = "yard/**"              # folder below the input; ** stands for any depth, none included
    file = "run-*"                  # base name of the recording
    field = {"core:hw" = "bench *", "captures[0].core:frequency" = {min = 2.4e9, max = 2.5e9}}
    options = {cfo_range = 0.05}    # as ReceiverOptions names them

    [[rule]]
    file = "calibration-*"
    leave_out = true                # not to be measured

All that a rule states must fit; a rule that states nothing fits everything. A field is looked for
in `global`, unless it begins with `global.`, `captures[n].`, `annotations[n].` or `collection.`;
`[*]` stands for any. A text is a pattern (`*`, `?`), a list holds alternatives, `{min, max}` is a
range, other values must be equal.
"""

from __future__ import annotations

import fnmatch
import re
import tomllib
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any, Literal

from pydantic import Field, ValidationError

from spatiq.batch.inputs import Item
from spatiq.errors import InputError
from spatiq.link.faults import input_error
from spatiq.link.values import Table
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording

_MAX_BYTES = 1 << 20
_TOPS = ("global", "captures", "annotations", "collection")
_STEP = re.compile(r"([^.\[\]]+)|\[(\d+|\*)\]")


class _RuleTable(Table):
    link: str | None = None
    folder: str | None = None
    file: str | None = None
    field: dict[str, Any] = Field(default_factory=dict)
    options: dict[str, Any] = Field(default_factory=dict)
    leave_out: bool = False


class _RuleFile(Table):
    format: Literal[1]
    rule: list[_RuleTable]


@dataclass(frozen=True)
class Choice:
    """What is to be done with a recording: measured on a link with options, or left out (None)."""

    link: Path | None
    options: ReceiverOptions


@dataclass(frozen=True)
class Rule:
    """One rule; see the module."""

    link: Path | None
    folder: str | None
    file: str | None
    field: Mapping[str, Any]
    options: ReceiverOptions

    def fits(self, item: Item, recording: Recording | None) -> bool:
        """Whether all that the rule states fits; fields fit nothing that could not be opened."""
        if self.folder is not None and not _folder_fits(self.folder, item.folder):
            return False
        if self.file is not None and not fnmatch.fnmatchcase(item.stem, self.file):
            return False
        if not self.field:
            return True
        if recording is None:
            return False
        document = {**recording.meta, **(recording.collection or {})}
        return all(
            any(_value_fits(value, wanted) for value in _values(document, path))
            for path, wanted in self.field.items()
        )


@dataclass(frozen=True)
class Rules:
    """Rules in order; `source` is what messages call them."""

    rules: tuple[Rule, ...]
    source: str

    def choice(self, item: Item, recording: Recording | None) -> Choice:
        """What the first rule that fits says.

        Raises:
            InputError: no rule fits.
        """
        for rule in self.rules:
            if rule.fits(item, recording):
                return Choice(rule.link, rule.options)
        raise InputError(item.label, "link", "no rule that fits", f"one in {self.source}")


def one_link(link: Path, options: ReceiverOptions) -> Rules:
    """All recordings on the same link."""
    return Rules((Rule(link.resolve(), None, None, {}, options),), str(link))


def load_rules(path: Path, options: ReceiverOptions) -> Rules:
    """Rules from their file; `options` hold where a rule states none.

    Raises:
        InputError: a file that cannot be read, or anything in it that is not as the module says.
    """
    try:
        data = path.read_bytes()
    except OSError as error:
        raise InputError(path, "", error.strerror or str(error), "a readable file") from error
    if len(data) > _MAX_BYTES:
        raise InputError(path, "", f"{len(data)} bytes", f"at most {_MAX_BYTES}")
    try:
        tables = tomllib.loads(data.decode("utf-8"))
        read = _RuleFile.model_validate(tables)
    except ValidationError as error:
        raise input_error(error, str(path)) from error
    except RecursionError as error:
        raise InputError(path, "", "tables nested too deeply", "TOML 1.0") from error
    except ValueError as error:  # no TOML, or not UTF-8
        raise InputError(path, "", str(error), "TOML 1.0 in UTF-8") from error
    rules = tuple(_rule(r, path, f"rule[{k}]", options) for k, r in enumerate(read.rule))
    return Rules(rules, str(path))


def _rule(read: _RuleTable, path: Path, place: str, options: ReceiverOptions) -> Rule:
    if read.leave_out == (read.link is not None):
        found = "both link and leave_out" if read.leave_out else "neither link nor leave_out"
        raise InputError(path, place, found, "one of them")
    link = None if read.link is None else (path.parent / read.link).resolve()
    if link is not None and not link.is_file():
        raise InputError(path, f"{place}.link", read.link, "a link description that is there")
    for field, wanted in read.field.items():
        _steps(field, path, place)
        if isinstance(wanted, dict) and not wanted.keys() <= {"min", "max"}:
            found = ", ".join(sorted(wanted.keys() - {"min", "max"}))
            raise InputError(path, f"{place}.field.{field}", found, "min and max alone")
    chosen = with_options(options, read.options, f"{path}: {place}.options")
    return Rule(link, read.folder, read.file, read.field, chosen)


def with_options(
    options: ReceiverOptions, chosen: Mapping[str, Any], source: str
) -> ReceiverOptions:
    """Options with some of them set by name.

    Raises:
        InputError: no such option, or a value of another kind or out of range.
    """
    values = options.as_dict()
    for name, value in chosen.items():
        if name not in values:
            raise InputError(source, name, "an unknown option", f"one of {', '.join(values)}")
        if values[name] is None:
            values[name] = value
            continue
        kind = type(values[name])
        accepted = (int, float) if kind is float else (kind,)
        if isinstance(value, bool) != (kind is bool) or not isinstance(value, accepted):
            raise InputError(source, name, value, f"a value of kind {kind.__name__}")
        values[name] = kind(value)
    names = {field.name for field in fields(ReceiverOptions)}
    return ReceiverOptions(**{k: v for k, v in values.items() if k in names})


def _folder_fits(pattern: str, folder: str) -> bool:
    """Patterns work step by step; "**" stands for any number of steps, none included."""
    return _steps_fit(pattern.strip("/").split("/"), [] if folder == "." else folder.split("/"))


def _steps_fit(pattern: list[str], steps: list[str]) -> bool:
    if not pattern or pattern == ["."]:
        return not steps
    if pattern[0] == "**":
        return any(_steps_fit(pattern[1:], steps[k:]) for k in range(len(steps) + 1))
    fits = bool(steps) and fnmatch.fnmatchcase(steps[0], pattern[0])
    return fits and _steps_fit(pattern[1:], steps[1:])


def _steps(field: str, path: Path, place: str) -> list[str | int]:
    """A field's path, step by step; -1 stands for any element.

    Raises:
        InputError: brackets that hold no number.
    """
    steps: list[str | int] = []
    at = 0
    while at < len(field):
        match = _STEP.match(field, at)
        if match is None:
            raise InputError(
                path, f"{place}.field", field, "names with '.', elements as [n] or [*]"
            )
        if match[1] is not None:
            steps.append(match[1])
        else:
            steps.append(-1 if match[2] == "*" else int(match[2]))
        at = match.end() + (field[match.end() : match.end() + 1] == ".")
    return steps if steps and steps[0] in _TOPS else ["global", *steps]


def _values(document: Any, path: str) -> Iterator[Any]:
    """All values that a field's path leads to."""
    found = [document]
    for step in _steps(path, Path(), ""):
        inner: list[Any] = []
        for value in found:
            if isinstance(step, str):
                inner += [value[step]] if isinstance(value, dict) and step in value else []
            elif isinstance(value, list):
                inner += value if step < 0 else value[step : step + 1]
        found = inner
    yield from found


def _value_fits(value: Any, wanted: Any) -> bool:
    if isinstance(wanted, list):
        return any(_value_fits(value, one) for one in wanted)
    if isinstance(wanted, dict):
        number = isinstance(value, int | float) and not isinstance(value, bool)
        low, high = wanted.get("min", -float("inf")), wanted.get("max", float("inf"))
        return number and bool(low <= value <= high)
    if isinstance(wanted, str):
        return isinstance(value, str) and fnmatch.fnmatchcase(value, wanted)
    return isinstance(value, bool) == isinstance(wanted, bool) and bool(value == wanted)
