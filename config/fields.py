"""The kinds of field of a stand file: text with its unit in the file, a plain number in the base unit inside.

Drivers use them too for their own options, so that all of a stand file is typed in one way.
"""

from __future__ import annotations

import re
from collections.abc import Callable
from typing import Annotated, Any

from pydantic import AfterValidator, BaseModel, BeforeValidator, ConfigDict, StringConstraints, WithJsonSchema
from pydantic_core import PydanticCustomError

from config.errors import BadQuantity
from config.units import Measure, parse_display, parse_quantity


class Section(BaseModel):
    """A table of the stand file: unknown keys refused, nothing converted silently, a docstring per field."""

    model_config = ConfigDict(extra="forbid", strict=True, frozen=True, use_attribute_docstrings=True)


def wrong(sentence: str) -> PydanticCustomError:
    """A mistake as the reader of the file shall see it; raise it from a validator."""
    return PydanticCustomError("stand_file", "{sentence}", {"sentence": sentence})


def typed(text: str) -> Any:
    """A default written as in the file; the field's own validator reads it (``validate_default=True``)."""
    return text


def as_text(example: str) -> WithJsonSchema:
    """How such a field looks in the exported schema: text, with an example."""
    return WithJsonSchema({"type": "string", "examples": [example]})


def reading(parse: Callable[[str], Any], example: str) -> BeforeValidator:
    """A validator that parses text; a bare number is refused with an example instead of being guessed at."""

    def read(value: object) -> Any:
        if not isinstance(value, str):
            raise wrong(f'{value!r} has no unit: write it in quotes with one, for example "{example}".')
        try:
            return parse(value)
        except BadQuantity as error:
            raise wrong(str(error)) from error

    return BeforeValidator(read)


def quantity(
    measure: Measure, example: str, low: float | None = None, high: float | None = None
) -> BeforeValidator:
    """Text to the base unit of ``measure``, from ``low`` to ``high`` (base unit, both allowed)."""
    return reading(lambda text: parse_quantity(text, measure, minimum=low, maximum=high), example)


def parse_angle(text: str) -> float:
    """Degrees, 0 up to 360. Raises BadQuantity outside -360 to 360."""
    value = parse_quantity(text, "angle")
    if not -360 <= value <= 360:
        raise BadQuantity(f"The angle {text!r} is out of range.", "Write an angle from -360 deg to 360 deg.")
    return value % 360.0


def parse_auto_volts(text: str) -> float | None:
    """``auto`` as None, else volts within 1000 V either way."""
    if text.strip() == "auto":
        return None
    return parse_quantity(text, "voltage", minimum=-1000, maximum=1000)


_PERCENT = re.compile(r"\s*(\d+\.?\d*|\.\d+)\s*%\s*(/min)?\s*$")


def percent(example: str) -> BeforeValidator:
    """``0.5 %`` or ``0.1 %/min`` (as in the example) as a number above zero, up to 100."""
    unit = "%/min" if example.endswith("/min") else "%"

    def parse(text: str) -> float:
        found = _PERCENT.match(text)
        if not found or (found[2] is None) != (unit == "%"):
            raise BadQuantity(f"{text!r} is not a number with {unit}.", f'Write it as "{example}".')
        value = float(found[1])
        if not 0 < value <= 100:
            raise BadQuantity(f"{text!r} is out of range.", f"Write more than 0 and at most 100 {unit}.")
        return value

    return reading(parse, example)


def parse_amplitude(text: str, kind: str, example: str) -> float:
    """``1 um pp`` as 0-peak in the base unit of ``kind``. Raises BadQuantity."""
    number, _, shown = text.strip().partition(" ")
    try:
        value = float(number)
    except ValueError:
        value = -1.0
    if not 0 < value < 1e6:
        raise BadQuantity(f"{text!r} is not an amplitude above zero.", f'Write it as "{example}".')
    return value / parse_display(shown, kind).factor


def amplitude(kind: str, example: str) -> BeforeValidator:
    """``1 um pp`` as 0-peak in the base unit of ``kind``."""
    return reading(lambda text: parse_amplitude(text, kind, example), example)


def _printable(text: str) -> str:
    if not text.isprintable() or text != text.strip():
        raise wrong("must be printable, on one line, without blanks at its ends.")
    return text


Name = Annotated[str, StringConstraints(min_length=1, max_length=64), AfterValidator(_printable)]
AngleDeg = Annotated[float, reading(parse_angle, "0 deg"), as_text("0 deg")]
AutoVolts = Annotated[float | None, reading(parse_auto_volts, "auto"), as_text("auto")]
Volts = Annotated[float, quantity("voltage", "-10 V", -1000, 1000), as_text("-10 V")]
SpeedHz = Annotated[float, quantity("speed", "60 rpm", 0.01, 5000), as_text("60 rpm")]
Seconds = Annotated[float, quantity("time", "2 s", 0, 86400), as_text("2 s")]
Percent = Annotated[float, percent("0.5 %"), as_text("0.5 %")]
