"""Counts come back bit for bit; damage and unknown codecs are told."""

from __future__ import annotations

import zlib
from dataclasses import replace

import numpy as np
import pytest
import zstandard
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from config.errors import StoreError
from store.rawcodec import Counts, decode, encode

ANY = st.sampled_from([np.int16, np.int32]).flatmap(
    lambda kind: hnp.arrays(kind, hnp.array_shapes(min_dims=2, max_dims=2, min_side=0, max_side=40))
)


@given(ANY)
def test_round_trip(counts: Counts) -> None:
    back = decode(encode(counts))
    assert back.dtype == counts.dtype
    assert back.shape == counts.shape
    assert (back == counts).all()


@pytest.mark.parametrize("kind", [np.int16, np.int32])
def test_extreme_steps_wrap(kind: type[np.int16] | type[np.int32]) -> None:
    low, high = np.iinfo(kind).min, np.iinfo(kind).max
    counts = np.array([[low, high], [high, low], [low, 0], [-1, high]], dtype=kind)
    assert decode(encode(counts)).tolist() == [[low, high], [high, low], [low, 0], [-1, high]]


def test_format_by_hand() -> None:
    """Channel-major, differences, byte planes, zstd: written out for two frames of two channels."""
    packed = encode(np.array([[1, 256], [3, 255]], dtype=np.int16))
    # channel 0: 1, then +2; channel 1: 256, then -1 (0xFFFF). Low bytes first, then high bytes.
    plain = bytes([0x01, 0x02, 0x00, 0xFF, 0x00, 0x00, 0x01, 0xFF])
    assert zstandard.ZstdDecompressor().decompress(packed.samples) == plain
    # checksum of the counts themselves, channel-major, little endian
    assert packed.crc32 == zlib.crc32(bytes([1, 0, 3, 0, 0, 1, 255, 0]))
    assert (packed.codec, packed.version, packed.frames, packed.channels, packed.dtype) == (
        "delta-shuffle-zstd",
        1,
        2,
        2,
        "int16",
    )


def test_transposed_and_big_endian_counts() -> None:
    counts = np.arange(12, dtype=">i2").reshape(3, 4).T
    assert decode(encode(counts)).tolist() == [[0, 4, 8], [1, 5, 9], [2, 6, 10], [3, 7, 11]]


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"crc32": 1}, "fail their checksum"),
        ({"samples": b"\x00\x01"}, "cannot be unpacked"),
        ({"frames": 2}, "cannot be unpacked|instead of|checksum"),
        ({"frames": 4}, "instead of 16"),
        ({"version": 2}, "is not known"),
        ({"dtype": "float64"}, "is not known"),
    ],
)
def test_damage_is_told(change: dict[str, object], says: str) -> None:
    packed = encode(np.array([[1, 2], [3, 4], [5, 6]], dtype=np.int16))
    with pytest.raises(StoreError, match=says) as caught:
        decode(replace(packed, **change))
    assert caught.value.kind == "corrupt"


@pytest.mark.parametrize("counts", [np.zeros(3, np.int16), np.zeros((2, 2)), np.zeros((2, 2), np.int64)])
def test_only_integer_frames(counts: Counts) -> None:
    with pytest.raises(ValueError, match="int16 or int32"):
        encode(counts)
