import dataclasses
import json
from typing import Any

import cbor2
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray

from humbell.model import Block, SampleUnit
from humbell.wire import decode, encode
from unit.wire.blocks import ROWS, TYPED_ARRAY, Fields, block, fields, refusal, small, typed

TYPES = [np.dtype(one) for one in ("<i2", "<i4", "<f4", "<f8")]


def same(one: Block, other: Block) -> bool:
    plain = dataclasses.replace(other, samples=one.samples)
    equal = all(getattr(one, f.name) == getattr(plain, f.name) for f in dataclasses.fields(one) if f.name != "samples")
    return equal and one.samples.dtype == other.samples.dtype and one.samples.tobytes() == other.samples.tobytes()


@st.composite
def blocks(draw: st.DrawFn) -> Block:
    dtype, channels, length = draw(st.sampled_from(TYPES)), draw(st.integers(1, 64)), draw(st.integers(1, 20))
    content = draw(st.binary(min_size=8, max_size=64))
    samples: NDArray[Any] = np.resize(np.frombuffer(content[: len(content) // 8 * 8], dtype), (channels, length))
    number = st.floats(allow_nan=False, allow_infinity=False)
    return dataclasses.replace(
        block(samples),
        seq=draw(st.integers(0, 2**63 - 1)),
        start_ns=draw(st.integers(0, 2**63 - 1)),
        boot=draw(st.text(st.characters(exclude_categories=("C", "Z")), min_size=1, max_size=64)),
        rate_hz=draw(st.floats(20.0, 512_000.0)),
        unit=draw(st.sampled_from(SampleUnit)),
        piece=draw(st.booleans()),
        aux=draw(st.dictionaries(st.sampled_from(["rpm", "running", "temp_C", "bias_V"]), number)),
    )


@given(blocks())
def test_every_block_comes_back_as_it_was(sent: Block) -> None:
    """Types, shapes, NaN, infinities, times and side values pass unchanged, to the last bit."""
    assert same(decode(encode(sent), "src"), sent)


@given(blocks())
def test_the_same_block_as_json_is_the_same_block(sent: Block) -> None:
    """JSON has no types: numbers come in as float64, with the same values."""
    # Random bits hold signalling NaNs too, of which a conversion warns.
    with np.errstate(invalid="ignore"):
        finite = np.nan_to_num(sent.samples.astype(np.float64))
    text = json.dumps(
        fields(
            seq=sent.seq,
            boot=sent.boot,
            t=sent.start_ns,
            fs=sent.rate_hz,
            unit=sent.unit,
            piece=sent.piece,
            aux=sent.aux,
            x=finite.tolist(),
        )
    )
    assert same(decode(text.encode(), "src"), dataclasses.replace(sent, samples=finite))


@pytest.mark.parametrize("dtype", TYPES, ids=str)
def test_samples_keep_their_type_and_are_read_only(dtype: np.dtype[Any]) -> None:
    """The four types of RFC 8746 that are allowed; other byte orders and memory layouts of an array are sent alike."""
    samples = np.arange(12).reshape(3, 4).astype(dtype)
    for layout in (samples, np.asfortranarray(samples), samples.astype(dtype.newbyteorder(">"))):
        found = decode(encode(block(layout)), "src").samples
        assert found.dtype == dtype
        assert found.dtype.isnative
        assert not found.flags.writeable
        np.testing.assert_array_equal(found, samples)


def test_json_samples_are_read_only_numbers() -> None:
    """Lists of numbers become float64 of shape (channels, n)."""
    found = decode(small(), "src")
    np.testing.assert_array_equal(found.samples, [[1, 2.5, -3], [4, 5, 6]])
    assert found.samples.dtype == np.float64
    assert not found.samples.flags.writeable
    assert found.aux == {}
    assert found.piece is False


def test_side_values_are_numbers_by_name() -> None:
    """Bias voltages may come one for each channel, and the running state as a truth value."""
    aux = {"rpm": 1480, "running": True, "temp_C": 41.5, "bias_V": [11.9, 12.1]}
    expected = {"rpm": 1480.0, "running": 1.0, "temp_C": 41.5, "bias_V/0": 11.9, "bias_V/1": 12.1}
    assert decode(cbor2.dumps(fields(aux=aux)), "src").aux == expected
    assert decode(small(aux=aux), "src").aux == expected


@pytest.mark.parametrize(
    "changes",
    [
        {"fs": 1, "x": typed(1, 6)},
        {"fs": 512_000},
        {"fs": 1.0, "x": typed(1, 10, content=bytes(40))},
        {"x": typed(64, 1, content=bytes(256))},
        {"seq": 0, "t": 0},
        {"seq": 2**63 - 1, "t": 2**63 - 1},
        {"boot": "x" * 64},
        {"piece": False},
        {"aux": {}},
        {"x": typed(2, 3, content=np.array([np.nan, np.inf, -np.inf] * 2, "<f4").tobytes())},
    ],
    ids=str,
)
def test_the_limits_themselves_are_allowed(changes: Fields) -> None:
    """1 Hz, 512 kHz, 10 s, 64 channels; NaN and infinity as samples (a sensor's fault is for the sensor check)."""
    decode(cbor2.dumps(fields(**changes)), "src")


NAN, INFINITY = float("nan"), float("inf")
# Reason, key, and values of that key for which the block is refused.
BROKEN: list[tuple[str, str, list[object]]] = [
    ("version", "v", [0, 2, -1, True, "1", None, [1]]),
    ("seq", "seq", [-1, 2**63, 1.0, True, "1", None, []]),
    ("t", "t", [-1, 2**63, 1.5e18, False, "now", None]),
    ("boot", "boot", ["", "x" * 65, "a\nb", "a\x00", 1, None, b"b", ["b"]]),
    ("fs", "fs", [0, 0.99, 512_000.5, -4000, NAN, INFINITY, True, "4000", None]),
    ("unit", "unit", ["", "G", "mm/s", "g ", 1, None, b"g", ["g"]]),
    ("piece", "piece", [0, 1, "true", None, []]),
    ("aux", "aux", [None, [], 1, "rpm", {"x": 1}, {1: 1}]),
    ("aux", "aux", [{"rpm": "1"}, {"rpm": None}, {"rpm": NAN}, {"rpm": [1]}, {"rpm": {}}, {"temp_C": INFINITY}]),
    ("aux", "aux", [{"bias_V": [1] * 65}, {"bias_V": [[1]]}, {"bias_V": ["1"]}, {"bias_V": [NAN]}, {"bias_V": None}]),
    ("samples", "x", [None, 1, "x", b"", {}, [[1, None]], cbor2.CBORTag(TYPED_ARRAY, bytes(4))]),
    (
        "samples",
        "x",
        [cbor2.CBORTag(ROWS, 1), *(cbor2.CBORTag(ROWS, [[1, 1], *one]) for one in ([], [b"1234"], [[1.0]]))],
    ),
    ("samples", "x", [typed(1, 1, tag=ROWS), cbor2.CBORTag(ROWS, [[1, 1], cbor2.CBORTag(TYPED_ARRAY, "1234")])]),
    (
        "shape",
        "x",
        [typed(), typed(6), typed(1, 2, 3), typed(2, 4), typed(2, 2), typed(0, 6), typed(6, 0), typed(-2, -3)],
    ),
    ("shape", "x", [typed(2.0, 3), typed("2", 3), typed(*(True, 6)), typed(None, 6), typed([2], 3)]),
    ("shape", "x", [typed(*one) for one in ((65, 1), (1, 2**62), (64, 2**63), (2**32, 2**32), (2**64 - 1, 1))]),
    ("shape", "x", [typed(2, 3, tag=77), [[1], [1, 2]]]),
]


@pytest.mark.parametrize(("reason", "key", "value"), [(one, key, value) for one, key, all_ in BROKEN for value in all_])
def test_what_breaks_a_rule_is_refused_with_its_reason(reason: str, key: str, value: object) -> None:
    """Each rule of a block on the wire, by itself; the text is one short printable line."""
    assert refusal(cbor2.dumps(fields(**{key: value}))) == reason


@pytest.mark.parametrize("key", ["v", "seq", "boot", "t", "fs", "unit", "x"])
def test_a_block_without_one_of_its_keys_is_refused(key: str) -> None:
    """Seven keys are required, in CBOR and in JSON."""
    assert refusal(cbor2.dumps(fields(**{key: ...}))) == "missing_key"
    assert refusal(small(**{key: ...})) == "missing_key"


@pytest.mark.parametrize("key", ["", "V", "y" * 1000, "\x00", "\n", "x "])
def test_a_block_with_a_key_of_no_meaning_is_refused(key: str) -> None:
    """A mistyped key would otherwise be taken for one left out."""
    assert refusal(cbor2.dumps(fields(**{key: 1}))) == "unknown_key"
    assert refusal(small(**{key: 1})) == "unknown_key"


@pytest.mark.parametrize(("rate_hz", "length"), [(1.0, 11), (1.99, 20), (4000.0, 40_001)])
def test_more_than_ten_seconds_are_refused(rate_hz: float, length: int) -> None:
    """What lasts longer would come too late to be of use."""
    assert refusal(encode(block(np.zeros((1, length), np.int16), rate_hz))) == "too_long"


NO_SAMPLES: list[object] = [[[1, "2"]], [[True]], [[None]], [[[1]]], [[10**400]], None, 5, "x"]
NO_SHAPE: list[object] = [[], [[]], [1, 2], [[1], [1, 2]], [[1], 2], [[1]] * 65, [{}]]


@pytest.mark.parametrize(
    ("reason", "payload"),
    [
        *(("samples", small(x=one)) for one in NO_SAMPLES),
        *(("shape", small(x=one)) for one in NO_SHAPE),
        *(("no_json", small()[:-1] + tail) for tail in (b"", b",}", b"}}", b"} {", b"\xff}")),
        *(("no_json", b'{"x":' + constant + b"}") for constant in (b"NaN", b"Infinity", b"-Infinity")),
        ("no_json", b'{"v":' + b"[" * 100_000),
        ("no_json", b'{"v":' + b"1" * 5000 + b"}"),
        ("fs", small().replace(b"4000.0", b"1e999")),
        ("boot", small(boot="\ud800")),
        ("missing_key", b"{}"),
    ],
)
def test_json_is_refused_by_the_same_rules(reason: str, payload: bytes) -> None:
    """Small senders make other mistakes, not others that pass."""
    assert refusal(payload) == reason


def test_json_with_a_key_twice_is_refused() -> None:
    """Two values for one key: nobody knows which was meant."""
    assert refusal(small()[:-1] + b', "seq": 8}') == "no_json"


def test_a_side_value_too_large_for_a_float_is_refused() -> None:
    """JSON knows integers of any length."""
    assert refusal(small(aux={"rpm": 10**400})) == "aux"


def test_a_version_that_is_no_whole_number_is_refused() -> None:
    """The version is an unsigned integer."""
    assert refusal(cbor2.dumps(fields(v=1.0))) == "version"
