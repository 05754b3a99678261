"""Sample blocks as bytes: CBOR (RFC 8949) with typed arrays (RFC 8746), and JSON for small senders."""

import io
import json
import sys
from collections.abc import Mapping
from typing import Any, NoReturn

import cbor2
import numpy as np
from numpy.typing import NDArray

from humbell.model import Block, Samples, SampleUnit

VERSION = 1
MAX_BYTES = 8 * 2**20
MAX_CHANNELS = 64
MIN_RATE_HZ, MAX_RATE_HZ = 1.0, 512_000.0
MAX_SECONDS = 10.0
# UTC ns of the year 2262, where signed 64-bit nanoseconds end; sequence numbers share the bound.
_MAX_INT = 2**63 - 1
_MAX_TEXT = 64
_MAX_FLOAT = sys.float_info.max
_MAX_ITEMS = 256  # a block has about 25, and 64 more with a bias voltage for each channel

_MULTI_DIMENSIONAL = 40  # row-major array, RFC 8746 section 3.1.1
# Little-endian typed arrays, RFC 8746 section 2.1.
_TYPES: dict[int, np.dtype[Any]] = {77: np.dtype("<i2"), 78: np.dtype("<i4"), 85: np.dtype("<f4"), 86: np.dtype("<f8")}
_TAGS = {dtype: tag for tag, dtype in _TYPES.items()}
# Every tag that cbor2 decodes by itself.
_BUILT_IN = (0, 1, 2, 3, 4, 5, 25, 28, 29, 30, 35, 36, 37, 52, 54, 100, 256, 258, 260, 261, 1004, 43000, 55799)

_KEYS = {"v", "seq", "boot", "t", "fs", "unit", "piece", "x", "aux"}
_REQUIRED = _KEYS - {"piece", "aux"}
_AUX = {"rpm", "running", "bias_V", "temp_C"}


class BlockError(ValueError):
    """
    The bytes are no block, or break one of its rules.

    Args:
        reason: a word to count by.

        text: what is wrong.
    """

    def __init__(self, reason: str, text: str) -> None:
        super().__init__(text)
        self.reason = reason


def encode(block: Block) -> bytes:
    """Return *block* as CBOR; integers of 16 and 32 bits and floats of 32 and 64 keep their type."""
    samples = np.ascontiguousarray(block.samples, dtype=block.samples.dtype.newbyteorder("<"))
    typed = cbor2.CBORTag(_TAGS[samples.dtype], samples.tobytes())
    fields: dict[str, Any] = {
        "v": VERSION,
        "seq": block.seq,
        "boot": block.boot,
        "t": block.start_ns,
        "fs": float(block.rate_hz),
        "unit": str(block.unit),
        "x": cbor2.CBORTag(_MULTI_DIMENSIONAL, [list(samples.shape), typed]),
    }
    if block.piece:
        fields["piece"] = True
    if block.aux:
        fields["aux"] = dict(block.aux)
    return cbor2.dumps(fields)


def decode(payload: bytes, source: str) -> Block:
    """
    Return the block in *payload*, which is CBOR or, beginning with ``{``, JSON.

    Args:
        payload: all of one message.

        source: id of the source whose topic it came on.

    Raises:
        BlockError: a rule is broken; the payload is refused whole.
    """
    if len(payload) > MAX_BYTES:
        raise BlockError("too_large", f"{len(payload)} bytes are more than {MAX_BYTES}")
    fields = _from_json(payload) if payload[:1] == b"{" else _from_cbor(payload)
    if not isinstance(fields, dict) or not all(isinstance(key, str) for key in fields):
        raise BlockError("no_map", "the payload is no map with text as keys")
    if unknown := fields.keys() - _KEYS:
        raise BlockError("unknown_key", f"unknown keys: {', '.join(sorted(map(repr, unknown)))[:100]}")
    if missing := _REQUIRED - fields.keys():
        raise BlockError("missing_key", f"missing keys: {', '.join(sorted(missing))}")
    if type(fields["v"]) is not int or fields["v"] != VERSION:
        raise BlockError("version", f"version {fields['v']!r:.20} is not {VERSION}")
    samples = _samples(fields["x"])
    rate_hz = _number(fields, "fs", MIN_RATE_HZ, MAX_RATE_HZ)
    if samples.shape[1] > MAX_SECONDS * rate_hz:
        raise BlockError("too_long", f"{samples.shape[1]} samples at {rate_hz:g} Hz are more than {MAX_SECONDS:g} s")
    piece = fields.get("piece", False)
    if not isinstance(piece, bool):
        raise BlockError("piece", "piece is neither true nor false")
    return Block(
        source=source,
        boot=_text(fields, "boot"),
        seq=_integer(fields, "seq"),
        start_ns=_integer(fields, "t"),
        rate_hz=rate_hz,
        unit=_unit(fields["unit"]),
        samples=samples,
        piece=piece,
        aux=_aux(fields.get("aux", {})),
    )


def _from_json(payload: bytes) -> object:
    try:
        return json.loads(payload, parse_constant=_refuse_constant, object_pairs_hook=_once)
    except (ValueError, RecursionError):
        raise BlockError("no_json", "the payload begins like JSON but is none") from None


def _once(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) != len(pairs):
        raise ValueError("a key comes twice")
    return found


def _refuse_constant(name: str) -> NoReturn:
    raise ValueError(name)


def _from_cbor(payload: bytes) -> object:
    _check_items(payload)
    stream = io.BytesIO(payload)
    try:
        decoded = cbor2.CBORDecoder(
            stream,
            tag_hook=_check_tag,
            semantic_decoders=dict.fromkeys(_BUILT_IN, _refuse_tag),
            max_depth=6,  # map, tag, array, tag: two more than a block needs
            allow_indefinite=False,
            allow_duplicate_keys=False,
        ).decode()
    except (cbor2.CBORError, ValueError, RecursionError, MemoryError, OverflowError, TypeError, EOFError) as error:
        raise BlockError("no_cbor", f"the payload is no CBOR of the known types: {error}"[:200]) from None
    if stream.read(1):
        raise BlockError("trailing", "bytes stand behind the end of the block")
    return decoded


def _check_items(payload: bytes) -> None:
    # The decoder builds all that is there before we see any of it, and a byte for an empty list becomes 64 in memory.
    position = 0
    for _ in range(_MAX_ITEMS):
        if position >= len(payload):
            return
        major, info = divmod(payload[position], 32)
        more = 1 << (info - 24) if 24 <= info <= 27 else 0  # noqa: PLR2004 - RFC 8949, section 3
        argument = int.from_bytes(payload[position + 1 : position + 1 + more], "big") if more else info
        position += 1 + more + (argument if major in (2, 3) else 0)
    raise BlockError("no_cbor", f"the payload has more than {_MAX_ITEMS} items")


def _check_tag(tag: cbor2.CBORTag, *_: object) -> cbor2.CBORTag:
    if tag.tag != _MULTI_DIMENSIONAL and tag.tag not in _TYPES:
        raise ValueError(f"tag {tag.tag} is not allowed")
    return tag


def _refuse_tag(*_: object) -> NoReturn:
    raise ValueError("a tag is not allowed")


def _samples(x: object) -> Samples:
    if isinstance(x, list):
        return _nested(x)
    if not (isinstance(x, cbor2.CBORTag) and x.tag == _MULTI_DIMENSIONAL):
        raise BlockError("samples", "x is no tag 40")
    value = x.value
    if not (isinstance(value, list | tuple) and len(value) == 2):  # noqa: PLR2004 - shape and array
        raise BlockError("samples", "x is no pair of shape and array")
    shape, typed = value
    if not (isinstance(typed, cbor2.CBORTag) and typed.tag in _TYPES and isinstance(typed.value, bytes)):
        raise BlockError("samples", "x holds no typed array of the known types")
    if not (isinstance(shape, list | tuple) and len(shape) == 2 and all(type(n) is int for n in shape)):  # noqa: PLR2004
        raise BlockError("shape", "the shape of x is no pair of whole numbers")
    channels, length = shape
    _check_shape(channels, length)
    dtype = _TYPES[typed.tag]
    if len(typed.value) != channels * length * dtype.itemsize:
        raise BlockError("shape", f"{channels} x {length} values do not fit {len(typed.value)} bytes")
    samples: NDArray[Any] = np.frombuffer(typed.value, dtype).reshape(channels, length)
    return samples


def _nested(x: list[Any]) -> Samples:
    _check_shape(len(x), len(x[0]) if x and isinstance(x[0], list) else 0)
    length = len(x[0])
    if not all(isinstance(row, list) and len(row) == length for row in x):
        raise BlockError("shape", "the rows of x differ in length")
    if not all(type(value) in (int, float) for row in x for value in row):
        raise BlockError("samples", "x holds something else than numbers")
    try:
        samples = np.asarray(x, dtype=np.float64)
    except OverflowError:
        raise BlockError("samples", "x holds a number that is too large") from None
    samples.flags.writeable = False
    return samples


def _check_shape(channels: int, length: int) -> None:
    if not (1 <= channels <= MAX_CHANNELS and length >= 1):
        raise BlockError("shape", f"{channels} channels of {length} samples (1 to {MAX_CHANNELS} channels are allowed)")


def _number(fields: Mapping[str, Any], key: str, low: float, high: float) -> float:
    value = fields[key]
    if type(value) not in (int, float) or not low <= value <= high:
        raise BlockError(key, f"{key} is no number from {low:g} to {high:g}")
    return float(value)


def _integer(fields: Mapping[str, Any], key: str) -> int:
    value = fields[key]
    if type(value) is not int or not 0 <= value <= _MAX_INT:
        raise BlockError(key, f"{key} is no whole number from 0 to {_MAX_INT}")
    return value


def _text(fields: Mapping[str, Any], key: str) -> str:
    value = fields[key]
    if not (isinstance(value, str) and 1 <= len(value) <= _MAX_TEXT and value.isprintable()):
        raise BlockError(key, f"{key} is no text of 1 to {_MAX_TEXT} printable characters")
    return value


def _unit(value: object) -> SampleUnit:
    try:
        return SampleUnit(str(value))
    except ValueError:
        raise BlockError("unit", f"unit is none of {', '.join(SampleUnit)}") from None


def _aux(value: object) -> dict[str, float]:
    if not isinstance(value, dict) or value.keys() - _AUX:
        raise BlockError("aux", f"aux is no map with keys of {', '.join(sorted(_AUX))}")
    found: dict[str, float] = {}
    for key, one in value.items():
        numbers = one if isinstance(one, list) and key == "bias_V" and len(one) <= MAX_CHANNELS else [one]
        for index, number in enumerate(numbers):
            # Compared, not converted: JSON knows integers that no float can hold.
            if type(number) not in (int, float, bool) or not -_MAX_FLOAT <= number <= _MAX_FLOAT:
                raise BlockError("aux", f"aux.{key} is no number")
            found[key if numbers == [one] else f"{key}/{index}"] = float(number)
    return found
