"""Linear algebra on one thread: on more it adds up in another order, and the last bits of vectors differ."""

from __future__ import annotations

import os

_THREADS = "OPENBLAS_NUM_THREADS"


def one_thread() -> None:
    """Ask for it. To be called before numpy is imported; whoever makes or repeats a stored vector does."""
    os.environ[_THREADS] = "1"


def is_one_thread() -> bool:
    """Whether it was asked for."""
    return os.environ.get(_THREADS) == "1"
