"""The one family of errors: each says what happened, to what, and what to do next.

``cause`` is one sentence of what happened and to which channel, machine or file; ``remedy`` is one
sentence of what to do next. At every border (library, operating system, network) a foreign exception
becomes one of these, with the original kept as ``__cause__``.
"""

from __future__ import annotations

from typing import Any, Literal

DriverTrouble = Literal["lost_data", "gone", "config", "busy", "no_driver", "timeout", "protocol"]
StoreTrouble = Literal[
    "missing", "newer", "older", "full", "locked", "corrupt", "read_only", "network", "refused", "io"
]


class RevmarkError(Exception):
    """Base of all expected failures. ``str()`` gives cause and remedy in two sentences."""

    def __init__(self, cause: str, remedy: str = "") -> None:
        super().__init__(cause, remedy)
        self.cause = cause
        self.remedy = remedy

    def __str__(self) -> str:
        return f"{self.cause} {self.remedy}".strip()

    def as_dict(self) -> dict[str, Any]:
        """The error as it crosses the control channel."""
        return {"cause": self.cause, "remedy": self.remedy}


class Refusal(RevmarkError):
    """What was asked cannot be done as things stand (a weight while turning, no O run, no such hole)."""


class NeedsAnswer(Refusal):
    """A refusal that one of ``options`` answers (``--locked-out``; ``--last`` or ``--next``).

    On a terminal the command asks it; anywhere else it stays a refusal that names the options.
    """

    def __init__(self, cause: str, remedy: str = "", *, options: tuple[str, ...]) -> None:
        super().__init__(cause, remedy)
        self.options = options

    def as_dict(self) -> dict[str, Any]:
        return {**super().as_dict(), "options": list(self.options)}


class BadQuantity(RevmarkError):
    """A number without its unit, with the wrong unit, or out of range (``3.0`` where ``3.0g`` is meant)."""


class StandFileError(RevmarkError):
    """A stand file that cannot be used; ``problems`` holds every mistake found, as (key, sentence)."""

    def __init__(self, cause: str, remedy: str = "", problems: tuple[tuple[str, str], ...] = ()) -> None:
        super().__init__(cause, remedy)
        self.problems = problems

    def __str__(self) -> str:
        lines = [f"  {key}: {text}" for key, text in self.problems]
        return "\n".join([super().__str__(), *lines])

    def as_dict(self) -> dict[str, Any]:
        return {**super().as_dict(), "problems": [list(p) for p in self.problems]}


class DriverError(RevmarkError):
    """A source failed. ``kind`` says how; ``retryable`` whether opening it again may help."""

    def __init__(self, cause: str, remedy: str = "", *, kind: DriverTrouble, retryable: bool = True) -> None:
        super().__init__(cause, remedy)
        self.kind = kind
        self.retryable = retryable


class StoreError(RevmarkError):
    """The store cannot be opened, read or written. ``kind`` says why (full, newer, corrupt, ...)."""

    def __init__(self, cause: str, remedy: str = "", *, kind: StoreTrouble) -> None:
        super().__init__(cause, remedy)
        self.kind = kind


class DaemonError(RevmarkError):
    """The daemon does not run, does not answer in time, or speaks another protocol."""
