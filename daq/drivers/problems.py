"""Mistakes in options and arguments, as key and sentence."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

from pydantic import ValidationError


def sentences(error: ValidationError, known: Iterable[str] = ()) -> list[tuple[str, str]]:
    """(dotted key, sentence) for each mistake; ``known`` keys are offered for a misspelt one."""
    keys = tuple(known)
    return [(_key(item["loc"]), _sentence(item, keys)) for item in error.errors(include_url=False)]


def did_you_mean(word: str, known: Iterable[str]) -> str:
    """`` Did you mean 'x'?`` or nothing."""
    close = difflib.get_close_matches(word, tuple(known), n=1)
    return f" Did you mean {close[0]!r}?" if close else ""


def _key(loc: tuple[int | str, ...]) -> str:
    return ".".join(str(part) for part in loc)


def _sentence(item: object, known: tuple[str, ...]) -> str:
    detail: dict[str, object] = dict(item)  # type: ignore[call-overload]
    loc = detail["loc"]
    name = str(loc[-1]) if isinstance(loc, tuple) and loc else "value"
    if detail["type"] == "extra_forbidden":
        return f"{name!r} is not known.{did_you_mean(name, known)}"
    if detail["type"] == "missing":
        return f"{name!r} is missing."
    text = str(detail["msg"]).removeprefix("Value error, ").rstrip(".")
    return f"{text[:1].upper()}{text[1:]}, not {detail['input']!r}."
