import tracemalloc

import cbor2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from humbell.wire import decode, encode
from unit.wire.blocks import ROWS, block, fields, refusal


@pytest.mark.parametrize("more", [b"\x00", b"\xf6", b"\xff", bytes(10_000), cbor2.dumps(fields())])
def test_bytes_behind_the_block_are_refused(more: bytes) -> None:
    """A block is all of one message."""
    assert refusal(cbor2.dumps(fields()) + more) in {"trailing", "no_cbor"}


@pytest.mark.parametrize("tag", [*range(24), *range(25, 40), *range(41, 77), *range(79, 85), 87, 100, 256, 258, 55799])
def test_no_other_tag_is_decoded(tag: int) -> None:
    """Dates, big numbers, expressions, references, other typed arrays: none is looked into, wherever it stands."""
    tagged = cbor2.CBORTag(tag, b"\x01\x02\x03\x04")
    for changes in ({"seq": tagged}, {"aux": {"rpm": tagged}}, {"x": cbor2.CBORTag(ROWS, [[1, 1], tagged])}):
        assert refusal(cbor2.dumps(fields(**changes))) == "no_cbor"
    assert refusal(cbor2.dumps(cbor2.CBORTag(tag, fields()))) == "no_cbor"


def test_depth_is_bounded() -> None:
    """Nothing is followed deeper than a block goes; a hundred thousand levels are refused as quickly as seven."""
    for opening in (b"\x81", b"\xa1\x61v", b"\xd8\x28", b"\x82\x01"):
        assert refusal(b"\xa1\x61x" + opening * 100_000 + b"\x01") == "no_cbor"


def test_a_key_twice_is_refused() -> None:
    """Two values for one key: nobody knows which was meant."""
    twice = b"\xa8" + cbor2.dumps(fields())[1:] + b"\x63seq\x08"
    assert refusal(twice) == "no_cbor"


@pytest.mark.parametrize(
    "payload",
    [
        b"\xbf\x61v\x01\xff",
        b"\xa1\x61x\x9f\x01\xff",
        b"\xa1\x61x\x5f\x41\x00\xff",
        b"\xa1\x64boot\x7f\x61a\xff",
    ],
)
def test_indefinite_lengths_are_refused(payload: bytes) -> None:
    """A sender knows how many samples it has."""
    assert refusal(payload) == "no_cbor"


@pytest.mark.parametrize(
    "head", [b"\x5b", b"\x7b", b"\x9b", b"\xbb", b"\xa1\x61x\x5b", b"\xa1\x61x\x9b", b"\xa1\x61x\xbb"]
)
@pytest.mark.parametrize("length", [2**24, 2**31, 2**40, 2**63, 2**64 - 1])
def test_a_length_that_is_only_claimed_reserves_no_memory(head: bytes, length: int) -> None:
    """Nine bytes that promise an exabyte are refused for the price of nine bytes."""
    payload = head + length.to_bytes(8, "big") + bytes(10)
    tracemalloc.start()
    try:
        assert refusal(payload) in {"no_cbor", "no_json"}
        assert tracemalloc.get_traced_memory()[1] < 2**20
    finally:
        tracemalloc.stop()


def test_small_values_without_end_do_not_fill_the_memory() -> None:
    """A byte for an empty list becomes 64 in memory; 8 MiB of them would be half of a small computer's."""
    payload = b"\xa1\x61x\x9a" + (2**18).to_bytes(4, "big") + b"\x80" * 2**18
    tracemalloc.start()
    try:
        assert refusal(payload)
        assert tracemalloc.get_traced_memory()[1] < 4 * 2**20
    finally:
        tracemalloc.stop()


@pytest.mark.parametrize(
    "payload", [b"", b"\x01", b"\x80", b"\xf6", b"\x63abc", b"\xa0", b"\xa1\x01\x02", b"\xa1\x81\x01\x01"]
)
def test_what_is_no_map_of_fields_is_refused(payload: bytes) -> None:
    """Well-formed or not: only a map with text as keys is looked into."""
    assert refusal(payload) in {"no_cbor", "no_map", "missing_key"}


def test_the_size_is_bounded() -> None:
    """8 MiB pass, one byte more does not, however it is written."""
    spare = 8 * 2**20 - len(encode(block(np.zeros((1, 1), np.int16)))) - 20
    large = encode(block(np.zeros((1, spare // 2), np.int16), rate_hz=512_000.0))
    assert 8 * 2**20 - 20 < len(large) <= 8 * 2**20
    assert decode(large, "src").length == spare // 2
    assert refusal(large + bytes(8 * 2**20 + 1 - len(large))) == "too_large"
    assert refusal(b"{" + b" " * 8 * 2**20) == "too_large"


@given(st.binary(max_size=200))
def test_any_bytes_are_a_block_or_refused(payload: bytes) -> None:
    """Nothing else comes out of them than the error that is counted."""
    for more in (payload, b"{" + payload, b"\xa7" + payload):
        assert refusal(more)
