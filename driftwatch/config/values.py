"""Kinds of values that a configuration holds, and how a value is refused.

A validator refuses with `refusal`, which keeps what was expected and what to do apart, so that the loader can put
them after the key and the value that came.
"""

from __future__ import annotations

import itertools
import math
import re
import unicodedata
from typing import Annotated, Any, Literal, NamedTuple

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, Field
from pydantic_core import PydanticCustomError

Quantity = Literal["acceleration", "velocity", "displacement", "force", "pressure", "voltage"]
"""What a sensor senses."""

UNIT_OF: dict[Quantity, str] = {
    "acceleration": "m/s2",
    "velocity": "m/s",
    "displacement": "m",
    "force": "N",
    "pressure": "Pa",
    "voltage": "V",
}
"""Unit taken for granted where a scale is given and no unit."""

FULL_SCALE_UNIT = "FS"
"""Unit of a channel with neither scale nor unit: fractions of digital full scale."""

LONGEST_S = 86_400.0
"""No window, delay or interval may be longer than a day."""

Profile = tuple[tuple[float, float], ...]
"""Corner points (seconds since the start, value) of a piecewise linear course; constant before and after."""


class Table(BaseModel):
    """A table of the file: frozen, and no key but the known ones."""

    model_config = ConfigDict(frozen=True, extra="forbid")


def refusal(expected: str, remedy: str, came: str | None = None) -> PydanticCustomError:
    """Return the exception with which a validator refuses a value.

    Parameters
    ----------
    expected
        What would have been right, such as ``a number over 0``.
    remedy
        What to do.
    came
        What came; the value itself where it is left out.
    """
    context: dict[str, Any] = {"expected": expected, "remedy": remedy, "came": came}
    return PydanticCustomError("refused", "expected {expected}; {remedy}", context)


# ---------------------------------------------------------------------------------------------- plain values

Number = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Positive = Annotated[Number, Field(gt=0)]
NotNegative = Annotated[Number, Field(ge=0)]
Seconds = Annotated[Number, Field(gt=0, le=LONGEST_S)]
Delay = Annotated[Number, Field(ge=0, le=LONGEST_S)]
RateHz = Annotated[int, Field(strict=True, ge=1, le=10_000_000)]
Count = Annotated[int, Field(strict=True, ge=1, le=256)]
Text = Annotated[str, Field(strict=True, min_length=1, max_length=200)]
Flag = Annotated[bool, Field(strict=True)]

_NAME = re.compile(r"(?:[^\W_]|[ .-]){1,64}")


def composed(text: str) -> str:
    """Return a text in its composed form, so that equal looks are equal names."""
    return unicodedata.normalize("NFC", text)


def _name(text: str) -> str:
    name = composed(text)
    if _NAME.fullmatch(name) is None or name != name.strip():
        raise refusal(
            "1 to 64 letters, digits, spaces, . or -, not beginning or ending with a space", "choose another name"
        )
    return name


Name = Annotated[str, Field(strict=True), AfterValidator(_name)]


# ---------------------------------------------------------------------------------------------- spans


class Span(NamedTuple):
    """A range of frequencies."""

    low: float  # Hz
    high: float  # Hz

    @property
    def width(self) -> float:
        """Width in Hz."""
        return self.high - self.low


def _span(value: Any) -> Span:
    if isinstance(value, list | tuple) and len(value) == 2 and all(is_number(part) for part in value):
        low, high = float(value[0]), float(value[1])
        if 0 < low < high:
            return Span(low, high)
    raise refusal("two frequencies in Hz, both over 0, the lower one first", "write it as [lowest, highest]")


SpanHz = Annotated[Span, BeforeValidator(_span)]


def is_number(value: Any) -> bool:
    """Say whether a value from the file is a finite number (true and false are none)."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return False
    try:
        return math.isfinite(value)
    except OverflowError:
        return False


def check_limits(low: float | None, high: float | None, low_key: str, high_key: str) -> None:
    """Refuse two limits that limit nothing or contradict each other."""
    if low is None and high is None:
        raise refusal(f"{low_key}, {high_key} or both", "give at least one limit", came="neither limit")
    if low is not None and high is not None and low >= high:
        came = f"{low_key} = {low:g} and {high_key} = {high:g}"
        raise refusal(f"{low_key} less than {high_key}", "swap them or correct one", came=came)


# ---------------------------------------------------------------------------------------------- profiles

_PROFILE = "a number, or corner points [[seconds, value], ...] with rising seconds from 0 on"


def _profile(value: Any) -> Profile:
    """Return the corner points of a number or of a list of corner points."""
    if is_number(value):
        return ((0.0, float(value)),)
    if not isinstance(value, list | tuple) or not value or not all(_is_corner(point) for point in value):
        raise refusal(_PROFILE, "write one number where it does not change")
    points = tuple((float(point[0]), float(point[1])) for point in value)
    if points[0][0] < 0 or any(later[0] <= earlier[0] for earlier, later in itertools.pairwise(points)):
        raise refusal(_PROFILE, "put the corner points in the order of their seconds")
    return points


def _is_corner(point: Any) -> bool:
    return isinstance(point, list | tuple) and len(point) == 2 and all(is_number(part) for part in point)


def _over(bound: float, what: str) -> AfterValidator:
    """Return the validator that keeps every value of a profile over `bound`."""

    def check(profile: Profile) -> Profile:
        if any(value <= bound for _, value in profile):
            raise refusal(f"values over {bound:g}", what)
        return profile

    return AfterValidator(check)


def _not_negative(profile: Profile) -> Profile:
    if any(value < 0 for _, value in profile):
        raise refusal("values of 0 or more", "a level is an rms value; 0 means none")
    return profile


FrequencyProfile = Annotated[Profile, BeforeValidator(_profile), _over(0.0, "give the frequency in Hz")]
QProfile = Annotated[Profile, BeforeValidator(_profile), _over(0.5, "Q is 1/(2 zeta), and only zeta < 1 resonates")]
LevelProfile = Annotated[Profile, BeforeValidator(_profile), AfterValidator(_not_negative)]
