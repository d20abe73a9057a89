"""Column types at the store's border: UUIDs as 16 bytes, finite numbers only, JSON without NaN.

SQLite would turn NaN into NULL and keep infinities; here both are refused with the column's name.
"""

# ruff: noqa: ARG002 - the dialect is part of the method's signature in SQLAlchemy

from __future__ import annotations

import json
import math
from typing import Any
from uuid import UUID

from sqlalchemy import Column, ForeignKey, Integer, LargeBinary, Text, types
from sqlalchemy.engine import Dialect

from config.errors import Refusal

MAX_INTEGER = 2**63 - 1


class Uuid16(types.TypeDecorator[UUID]):
    """A UUID as its 16 bytes: small, and sorted by time for version 7."""

    impl = LargeBinary
    cache_ok = True

    def process_bind_param(self, value: UUID | None, dialect: Dialect) -> bytes | None:
        return None if value is None else value.bytes

    def process_result_value(self, value: bytes | None, dialect: Dialect) -> UUID | None:
        return None if value is None else UUID(bytes=value)


class Real(types.TypeDecorator[float]):
    """A finite float; ``name`` is only for the refusal."""

    impl = types.REAL
    cache_ok = True

    def __init__(self, name: str) -> None:
        super().__init__()
        self.name = name

    def process_bind_param(self, value: float | None, dialect: Dialect) -> float | None:
        if value is None:
            return None
        if not math.isfinite(value):
            raise Refusal(f"{self.name} is {value}, which cannot be stored.", "Give a finite number.")
        return float(value)


class Whole(types.TypeDecorator[int]):
    """A 64-bit integer; larger ones are refused instead of overflowing in the driver."""

    impl = Integer
    cache_ok = True

    def __init__(self, name: str) -> None:
        super().__init__()
        self.name = name

    def process_bind_param(self, value: int | None, dialect: Dialect) -> int | None:
        if value is None:
            return None
        if not -MAX_INTEGER <= value <= MAX_INTEGER:
            raise Refusal(
                f"{self.name} is {value}, which is too large to be stored.", "Give a smaller number."
            )
        return int(value)


class Json(types.TypeDecorator[Any]):
    """JSON text; NaN and infinities are refused."""

    impl = Text
    cache_ok = True

    def __init__(self, name: str) -> None:
        super().__init__()
        self.name = name

    def process_bind_param(self, value: Any, dialect: Dialect) -> str:
        try:
            return json.dumps(value, allow_nan=False, separators=(",", ":"))
        except (TypeError, ValueError) as e:
            raise Refusal(
                f"{self.name} holds what cannot be stored ({e}).", "Give finite numbers and text."
            ) from e

    def process_result_value(self, value: str | None, dialect: Dialect) -> Any:
        return None if value is None else json.loads(value)


# --- column makers: NOT NULL unless said ---------------------------------------------------------------


def seq() -> Column[int]:
    """Order of entry. The rowid of an append-only table only rises, whatever the wall clock does."""
    return Column("seq", Integer, primary_key=True)


def key() -> Column[UUID]:
    return Column("id", Uuid16, nullable=False, unique=True)


def ref(name: str, target: str, *, optional: bool = False, primary: bool = False) -> Column[UUID]:
    return Column(name, Uuid16, ForeignKey(target), nullable=optional, primary_key=primary)


def text(name: str, *, optional: bool = False) -> Column[str]:
    return Column(name, Text, nullable=optional)


def real(name: str, *, optional: bool = False) -> Column[float]:
    return Column(name, Real(name), nullable=optional)


def whole(name: str, *, optional: bool = False, primary: bool = False) -> Column[int]:
    return Column(name, Whole(name), nullable=optional, primary_key=primary)


def json_text(name: str, *, optional: bool = False) -> Column[Any]:
    return Column(name, Json(name), nullable=optional)
