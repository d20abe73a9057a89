"""What is wrong with a file, in sentences: pydantic's errors as (dotted key, sentence).

A key counts as people do: ``channel.2.angle`` is the angle of the second [[channel]].
"""

from __future__ import annotations

import difflib
from collections.abc import Iterator
from types import UnionType
from typing import Any, Literal, Union, get_args, get_origin

from pydantic import BaseModel, ValidationError, WithJsonSchema
from pydantic.fields import FieldInfo
from pydantic_core import ErrorDetails

Problem = tuple[str, str]
"""(dotted key, sentence)"""

_PLAIN = {
    "int_type": "must be a whole number, not {shown}.",
    "int_from_float": "must be a whole number, not {shown}.",
    "float_type": "must be a number, not {shown}.",
    "finite_number": "must be a finite number, not {shown}.",
    "bool_type": "must be true or false, not {shown}.",
    "string_type": "must be text in quotes, not {shown}.",
    "string_too_short": "must not be empty.",
    "string_too_long": "is too long: at most {max_length} characters.",
    "too_short": "needs at least {min_length}, has {actual_length}.",
    "too_long": "takes at most {max_length}, has {actual_length}.",
    "greater_than": "must be above {gt}, not {shown}.",
    "greater_than_equal": "must be at least {ge}, not {shown}.",
    "less_than": "must be below {lt}, not {shown}.",
    "less_than_equal": "must be at most {le}, not {shown}.",
    "literal_error": "must be {expected}, not {shown}.",
    "tuple_type": "must be a list in square brackets, not {shown}.",
    "list_type": "must be a list in square brackets, not {shown}.",
    "dict_type": "must be a table of keys and values, not {shown}.",
}


def sentences(error: ValidationError, model: type[BaseModel], prefix: str = "") -> list[Problem]:
    """Every mistake pydantic found in ``model``, with ``prefix`` before each dotted key."""
    found = []
    for item in error.errors(include_url=False):
        if item["type"] == "too_short" and len(item["input"]) >= item["ctx"]["min_length"]:
            continue  # pydantic counts sound items only; the unsound ones are listed by themselves
        loc = tuple(_as_typed(model, item["loc"]))
        key = ".".join(str(part + 1) if isinstance(part, int) else part for part in loc)
        found.append((".".join(filter(None, (prefix, key))) or "(file)", _sentence(item, model, loc)))
    return found


def _sentence(item: ErrorDetails, model: type[BaseModel], loc: tuple[int | str, ...]) -> str:
    kind = item["type"]
    owner, field = _find(model, loc)
    if kind == "missing":
        return _missing(field)
    if kind == "extra_forbidden":
        return _unknown(str(loc[-1]), owner, model)
    if kind in ("model_type", "model_attributes_type"):
        return f"must be a table: write its keys below a line [{loc[0]}]."
    if kind == "tuple_type" and isinstance(item["input"], dict):
        return f"must be a list of tables: write [[{loc[-1]}]] with double brackets."
    if kind in _PLAIN:
        return _PLAIN[kind].format(shown=_shown(item["input"]), **item.get("ctx", {}))
    text = item["msg"].removeprefix("Value error, ")
    return text if text.endswith((".", "?")) else text + "."


def _shown(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 40 else text[:37] + "..."


def _missing(field: FieldInfo | None) -> str:
    if field is None:
        return "is missing."
    about = " ".join((field.description or "").replace("``", "").split())
    return f"is missing. {about}{_example(field)}".rstrip()


def _example(field: FieldInfo) -> str:
    if get_origin(field.annotation) is Literal:
        return " One of " + ", ".join(f'"{choice}"' for choice in get_args(field.annotation)) + "."
    for hint in field.metadata:
        if isinstance(hint, WithJsonSchema) and hint.json_schema and hint.json_schema.get("examples"):
            return f' For example "{hint.json_schema["examples"][0]}".'
    return f" For example {_toml(field.examples[0])}." if field.examples else ""


def _toml(value: Any) -> str:
    if isinstance(value, list | tuple):
        return "[" + ", ".join(_toml(v) for v in value) + "]"
    return f'"{value}"' if isinstance(value, str) else str(value)


def _unknown(key: str, owner: type[BaseModel], root: type[BaseModel]) -> str:
    known = list(_fields(owner))
    near = difflib.get_close_matches(key.lower().replace("-", "_"), known, 1)
    if near:
        return f"is no key here; did you mean {near[0]}?"
    homes = [place for place, model in _sections(root) if key in _fields(model) and model is not owner]
    if len(homes) == 1:
        return f"is no key here; it belongs under {homes[0]}."
    return f"is no key here. Known keys: {', '.join(known)}."


# --- finding one's way in a model by the keys of the file ---------------------------------------------


def _fields(model: type[BaseModel]) -> dict[str, FieldInfo]:
    return {field.alias or name: field for name, field in model.model_fields.items()}


def _sections(root: type[BaseModel]) -> Iterator[tuple[str, type[BaseModel]]]:
    for key, field in _fields(root).items():
        inner = _model_in(field.annotation)
        if inner is not None:
            yield (f"[[{key}]]" if get_origin(field.annotation) is tuple else f"[{key}]"), inner


def _model_in(annotation: Any) -> type[BaseModel] | None:
    """The model inside ``X``, ``X | None``, ``tuple[X, ...]`` or ``list[X]``; None when there is none."""
    if isinstance(annotation, type) and issubclass(annotation, BaseModel):
        return annotation
    if get_origin(annotation) in (tuple, list, Union, UnionType):
        return next(filter(None, map(_model_in, get_args(annotation))), None)
    return None


def _as_typed(model: type[BaseModel], loc: tuple[int | str, ...]) -> Iterator[int | str]:
    """``loc`` with keys as typed: of a default that does not fit, pydantic gives the field's inner name."""
    for depth, part in enumerate(loc):
        owner, _ = _find(model, loc[: depth + 1])
        field = owner.model_fields.get(part) if isinstance(part, str) else None
        yield field.alias if field and field.alias else part


def _find(model: type[BaseModel], loc: tuple[int | str, ...]) -> tuple[type[BaseModel], FieldInfo | None]:
    """The model that owns the last key of ``loc``, and its field where it has one."""
    owner, field = model, None
    for part in loc:
        if isinstance(part, int):
            continue
        owner = (_model_in(field.annotation) if field else None) or owner
        field = _fields(owner).get(part)
    return owner, field
