"""RFC 9562: layout of version 7 (section 5.7) and its test vector (appendix A.6)."""

from __future__ import annotations

from uuid import UUID

from hypothesis import given
from hypothesis import strategies as st

from store.identity import Identities


def test_vector_of_the_rfc() -> None:
    # RFC 9562, appendix A.6: unix_ts_ms 0x017F22E279B0, rand_a 0xCC3, rand_b 0x18C4DC0C0C07398F
    random = 0xCC3 << 62 | 0x18C4DC0C0C07398F
    made = Identities(lambda: 0x017F22E279B0 * 1000, lambda bits: random).new()
    assert made == UUID("017F22E2-79B0-7CC3-98C4-DC0C0C07398F")


@given(st.lists(st.integers(0, 2**48 - 1), min_size=2, max_size=50))
def test_rises_whatever_the_clock_does(milliseconds: list[int]) -> None:
    times = iter(milliseconds)
    ids = Identities(lambda: next(times) * 1000)
    made = [ids.new() for _ in milliseconds]
    assert made == sorted(made)
    assert len(set(made)) == len(made)
    assert {(u.version, u.variant) for u in made} == {(7, "specified in RFC 4122")}


def test_same_millisecond_with_the_largest_random_part() -> None:
    ids = Identities(lambda: 1_700_000_000_000_000, lambda bits: 2**bits - 1)
    first, second = ids.new(), ids.new()
    assert first < second
