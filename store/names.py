"""What people type, checked where it enters the record: names, free text, numbers."""

from __future__ import annotations

import math

from config.errors import Refusal

NAME_LENGTH = 64
TEXT_LENGTH = 500


def check_name(what: str, name: str) -> str:
    """A name of a machine, model, job, stand end: printable, 1 to 64 characters, no blank at its ends."""
    if not 1 <= len(name) <= NAME_LENGTH or not name.isprintable() or name != name.strip():
        raise Refusal(
            f"{what} {name!r} cannot be used.",
            f"Use 1 to {NAME_LENGTH} printable characters, without control characters or blanks at the ends.",
        )
    return name


def check_text(what: str, text: str, limit: int = TEXT_LENGTH) -> str:
    """Free text of one line; may be empty."""
    if len(text) > limit or not text.isprintable():
        raise Refusal(
            f"{what} {text[:40]!r} cannot be stored.",
            f"Use up to {limit} printable characters, without control characters or line ends.",
        )
    return text


def check_positive(what: str, value: float) -> float:
    """A finite number above zero."""
    if not math.isfinite(value) or value <= 0:
        raise Refusal(f"{what} is {value:g}.", "Give a finite number above zero.")
    return value


def check_finite(what: str, value: float) -> float:
    if not math.isfinite(value):
        raise Refusal(f"{what} is {value}.", "Give a finite number.")
    return value
