"""UUID version 7 (RFC 9562, section 5.7): 48 bit milliseconds, version, variant, 74 random bits."""

from __future__ import annotations

import secrets
import threading
from collections.abc import Callable
from uuid import UUID

_RANDOM_BITS = 74


class Identities:
    """Makes ids that only rise within this object, also when the wall clock is set back.

    RFC 9562 section 6.2, method 2: in the same millisecond (or an earlier one) the last value is
    raised by a random step instead of drawn anew.
    """

    def __init__(
        self, now_us: Callable[[], int], random_bits: Callable[[int], int] = secrets.randbits
    ) -> None:
        self._now_us = now_us
        self._random_bits = random_bits
        self._last = 0
        self._lock = threading.Lock()

    def new(self) -> UUID:
        """The next id. Safe from several threads."""
        with self._lock:
            fresh = (self._now_us() // 1000) << _RANDOM_BITS | self._random_bits(_RANDOM_BITS)
            rises = fresh >> _RANDOM_BITS > self._last >> _RANDOM_BITS
            self._last = fresh if rises else self._last + 1 + self._random_bits(32)
            return _as_uuid7(self._last)


def _as_uuid7(value: int) -> UUID:
    """Spread the 122 bits (48 ms, 12, 62) around the version (7) and the variant (binary 10)."""
    milliseconds, rand_a, rand_b = value >> 74, value >> 62 & 0xFFF, value & (1 << 62) - 1
    return UUID(int=milliseconds << 80 | 7 << 76 | rand_a << 64 | 2 << 62 | rand_b)
