"""Blocks and payloads to start from: good ones, of which a test changes what it is about."""

import json

import cbor2
import pytest

from humbell.model import Block, Samples, SampleUnit
from humbell.wire import BlockError, decode

START_NS = 1_772_359_200_000_000_000  # 2026-03-01T10:00:00Z
TYPED_ARRAY, ROWS = 85, 40  # float32, little endian; multi-dimensional, row-major: RFC 8746

Fields = dict[str, object]


def block(samples: Samples, rate_hz: float = 4000.0) -> Block:
    """Return a block of *samples*."""
    return Block("src", "boot-1", 7, START_NS, rate_hz, SampleUnit.G, samples)


def typed(*shape: object, tag: int = TYPED_ARRAY, content: bytes = bytes(24)) -> cbor2.CBORTag:
    """Return samples as they stand under ``x``."""
    return cbor2.CBORTag(ROWS, [list(shape), cbor2.CBORTag(tag, content)])


def fields(**changes: object) -> Fields:
    """Return the map of a block with *changes*; ``...`` leaves a key out."""
    plain: Fields = {"v": 1, "seq": 7, "boot": "boot-1", "t": START_NS, "fs": 4000.0, "unit": "g", "x": typed(2, 3)}
    return {key: value for key, value in {**plain, **changes}.items() if value is not ...}


def small(**changes: object) -> bytes:
    """Return a block as a small device would send it."""
    return json.dumps(fields(**{"x": [[1, 2.5, -3], [4, 5, 6]], **changes})).encode()


def refusal(payload: bytes) -> str:
    """Return the reason for which *payload* is refused, in one short printable line."""
    with pytest.raises(BlockError) as caught:
        decode(payload, "src")
    assert str(caught.value).isprintable()
    assert len(str(caught.value)) < 300
    return caught.value.reason
