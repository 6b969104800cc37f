"""Kinds of value in a link description: each checks itself and says what it accepts."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any, ClassVar

from pydantic import BaseModel, ConfigDict, Discriminator, GetCoreSchemaHandler, model_validator
from pydantic.annotated_handlers import GetJsonSchemaHandler
from pydantic_core import CoreSchema, PydanticCustomError, core_schema

from spatiq.link.places import one_of

# Types of error that `spatiq.link.faults` turns into one line.
UNKNOWN_KEY = "unknown_key"
MISSING_KEY = "missing_key"
NOT_ACCEPTED = "not_accepted"
UNKNOWN_VARIANT = "unknown_variant"

LARGEST_COMPONENT = 1e6
# An error's context holds names as one text.
NAMES_APART = ", "


def _saying(schema: CoreSchema, expected: str) -> CoreSchema:
    """The same check; a fault says what is accepted."""
    return core_schema.custom_error_schema(
        schema,
        custom_error_type=NOT_ACCEPTED,
        custom_error_message="expected {expected}",
        custom_error_context={"expected": expected},
    )


@dataclass(frozen=True)
class Whole:
    """A whole number from low to high."""

    low: int
    high: int

    @property
    def expected(self) -> str:
        """What is accepted."""
        return f"a whole number, {self.low} to {self.high}"

    def __get_pydantic_core_schema__(self, _: Any, __: GetCoreSchemaHandler) -> CoreSchema:
        """Strict integer within the bounds."""
        return _saying(
            core_schema.int_schema(strict=True, ge=self.low, le=self.high), self.expected
        )


@dataclass(frozen=True)
class Number:
    """A finite number from low to high; `above` leaves low itself out."""

    low: float
    high: float
    above: bool = False

    @property
    def expected(self) -> str:
        """What is accepted."""
        if self.above:
            return f"a number above {self.low:g}, at most {self.high:g}"
        return f"a number, {self.low:g} to {self.high:g}"

    def __get_pydantic_core_schema__(self, _: Any, __: GetCoreSchemaHandler) -> CoreSchema:
        """Strict float (or integer) within the bounds."""
        inner = core_schema.float_schema(
            strict=True,
            allow_inf_nan=False,
            gt=self.low if self.above else None,
            ge=None if self.above else self.low,
            le=self.high,
        )
        return _saying(inner, self.expected)


@dataclass(frozen=True)
class Text:
    """A string that matches a pattern, described in words."""

    pattern: str
    expected: str

    def __get_pydantic_core_schema__(self, _: Any, __: GetCoreSchemaHandler) -> CoreSchema:
        """Strict string of that pattern."""
        return _saying(core_schema.str_schema(strict=True, pattern=self.pattern), self.expected)


class OneOf:
    """One of some names; a fault points out the nearest.

    Args:
        names: what is accepted.
        otherwise: what is accepted instead of a name, for people.
    """

    def __init__(self, *names: str, otherwise: str = "") -> None:
        self.names = names
        self.otherwise = f", or {otherwise}" if otherwise else ""

    @property
    def expected(self) -> str:
        """What is accepted."""
        return one_of(self.names) + self.otherwise

    def _check(self, value: Any) -> str:
        if isinstance(value, str) and value in self.names:
            return value
        raise PydanticCustomError(
            NOT_ACCEPTED,
            "expected {expected}",
            {"expected": one_of(self.names, value) + self.otherwise},
        )

    def __get_pydantic_core_schema__(self, _: Any, __: GetCoreSchemaHandler) -> CoreSchema:
        """One of the names."""
        return core_schema.no_info_before_validator_function(
            self._check, core_schema.literal_schema(list(self.names))
        )


class ComplexNumber:
    """A complex number written [real, imaginary], or a real number written alone."""

    expected: ClassVar[str] = (
        f"[real, imaginary] or a real number, finite, components within +-{LARGEST_COMPONENT:g}"
    )

    @staticmethod
    def _is_component(part: Any) -> bool:
        # Compared before conversion: a huge whole number does not fit a float.
        number = isinstance(part, int | float) and not isinstance(part, bool)
        return number and -LARGEST_COMPONENT <= part <= LARGEST_COMPONENT

    def _check(self, value: Any) -> complex:
        parts = value if isinstance(value, list) else [value, 0.0]
        if len(parts) == 2 and all(self._is_component(p) for p in parts):
            return complex(float(parts[0]), float(parts[1]))
        raise PydanticCustomError(NOT_ACCEPTED, "expected {expected}", {"expected": self.expected})

    def __get_pydantic_core_schema__(self, _: Any, __: GetCoreSchemaHandler) -> CoreSchema:
        """Own check; pydantic's complex type knows no pairs."""
        return core_schema.no_info_plain_validator_function(self._check)

    def __get_pydantic_json_schema__(
        self, _: CoreSchema, __: GetJsonSchemaHandler
    ) -> dict[str, Any]:
        """Pair of numbers, or a number."""
        pair = {"type": "array", "items": {"type": "number"}, "minItems": 2, "maxItems": 2}
        return {"anyOf": [pair, {"type": "number"}]}


class Table(BaseModel):
    """A table of the file: no keys but its own, every value of its own type, unchangeable."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, allow_inf_nan=False)

    @model_validator(mode="before")
    @classmethod
    def _keys(cls, data: Any) -> Any:
        """Look at the keys first: a misspelt one explains whatever else is wrong."""
        if not isinstance(data, dict):
            raise PydanticCustomError(
                NOT_ACCEPTED, "expected {expected}", {"expected": "a table of keys and values"}
            )
        for key in data:
            if key not in cls.model_fields:
                raise PydanticCustomError(
                    UNKNOWN_KEY,
                    "expected {expected}",
                    {"key": str(key), "expected": one_of(cls.model_fields, key)},
                )
        for name, info in cls.model_fields.items():
            if info.is_required() and name not in data:
                says = (getattr(m, "expected", None) for m in info.metadata)
                expected = next((s for s in says if s), info.description or "a value")
                raise PydanticCustomError(
                    MISSING_KEY, "expected {expected}", {"key": name, "expected": expected}
                )
        return data


def tag(name: str) -> str:
    """Name of a variant in pydantic's error locations; `spatiq.link.faults` leaves it out again."""
    return f"<{name}>"


class Variants(Discriminator):
    """A discriminator that can stand in an optional type: those are hashed."""

    def __hash__(self) -> int:
        """By identity: the error context, a dict, cannot be hashed."""
        return id(self)


def _variants(pick: Callable[[Any], str], key: str, names: tuple[str, ...]) -> Variants:
    return Variants(
        pick,
        custom_error_type=UNKNOWN_VARIANT,
        custom_error_message="expected one of {names}",
        custom_error_context={"key": key, "names": NAMES_APART.join(names)},
    )


def by_key(key: str, *names: str) -> Variants:
    """Tables told apart by the value of one key."""

    def pick(data: Any) -> str:
        value = data.get(key) if isinstance(data, dict) else getattr(data, key, None)
        return tag(value) if isinstance(value, str) else tag("")

    return _variants(pick, key, names)


def by_presence(key: str, present: str, absent: str) -> Variants:
    """Two kinds of table told apart by whether they have a key."""

    def pick(data: Any) -> str:
        has = key in data if isinstance(data, dict) else hasattr(data, key)
        return tag(present) if has else tag(absent)

    return _variants(pick, "", (present, absent))


def text_or_else(other: str) -> Variants:
    """A string, or something else (a list, a number)."""

    def pick(data: Any) -> str:
        return tag("text") if isinstance(data, str) else tag(other)

    return _variants(pick, "", ("text", other))
