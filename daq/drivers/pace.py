"""How fast a source that is not live runs: real pace, a multiple of it, or as fast as it is read."""

from __future__ import annotations

from typing import Annotated

from pydantic import BeforeValidator

FAST = 0.0
"""Stands for "as fast as it is read"."""
MOST = 1000.0


def _number(value: object, *, fast: bool) -> float:
    words = {"real": 1.0} | ({"fast": FAST} if fast else {})
    if isinstance(value, str) and value in words:
        return words[value]
    number = isinstance(value, (int, float)) and not isinstance(value, bool)
    if not number or not 0 < float(value) <= MOST:  # type: ignore[arg-type]
        choices = " or ".join(f'"{word}"' for word in words)
        raise ValueError(f"must be {choices} or a number above 0 and up to {MOST:g}")
    return float(value)  # type: ignore[arg-type]


Pace = Annotated[float, BeforeValidator(lambda value: _number(value, fast=False))]
"""Source seconds per second; written "real" or as a number."""
PaceOrFast = Annotated[float, BeforeValidator(lambda value: _number(value, fast=True))]
"""The same, or "fast"."""
