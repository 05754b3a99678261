"""Hostile blocks: good ones, changed at random in structure and in bytes, the same ones every time."""

import json
import random
import time
from collections import Counter
from collections.abc import Callable

import cbor2
import pytest

from humbell.wire import BlockError, decode

# What is looked into only after the payload has been read as CBOR has one of the other reasons.
NOT_READ = {"no_cbor", "no_json", "too_large", "trailing"}
KEYS = ("v", "seq", "boot", "t", "fs", "unit", "piece", "x", "aux")
NAMES = {cbor2.dumps(key): key for key in KEYS}
TYPES = {77: 2, 78: 4, 85: 4, 86: 8}  # RFC 8746 tags of the allowed types, and bytes a sample

Entry = tuple[bytes, bytes]


def typed(shape: object, tag: int, content: object) -> bytes:
    return cbor2.dumps(cbor2.CBORTag(40, [shape, cbor2.CBORTag(tag, content)]))


NAN, INFINITY = float("nan"), float("inf")
INTEGERS: list[object] = [
    0,
    1,
    23,
    24,
    2**31,
    2**32,
    2**63 - 1,
    2**63,
    2**64 - 1,
    -1,
    -(2**63),
    -(2**64),
    2**64,
    2**200,
]
FLOATS: list[object] = [0.0, -0.0, 0.5, 1e-310, 1e308, NAN, INFINITY, -INFINITY]
OTHERS: list[object] = [True, False, None, "", "g", "x" * 65, "\x00", "é", b"", b"g", [], {}, [[]], [[1.5]], [[1], 2]]
AUX: list[object] = [{"rpm": 1}, {"rpm": [1]}, {"bias_V": [1, 2]}, {"bias_V": [[]]}, {"rpm": NAN}, {"x": {}}]
TAGGED: list[object] = [1, "1", b"\x01", [1, 2]]
SHAPES: list[object] = [[2, 2], [1, 4], [4, 1], [2, 3], [0, 0], [2**63, 2], [-1, -4], [[], {}], [4], 4, [1.0, 4]]
CONTENTS: list[object] = ["text", [1], None, 1.5, bytes(7), bytes(9)]
MALFORMED = [
    *(bytes([one]) for one in (0x1C, 0x3F, 0x5F, 0x7F, 0x9F, 0xBF, 0xDF, 0xFC, 0xFF)),
    *(head + b"\xff" * 8 for head in (b"\x1b", b"\x3b", b"\x5b", b"\x7b", b"\x9b", b"\xbb", b"\xdb", b"\xfb")),
    *(opening * 40 + b"\x01" for opening in (b"\x81", b"\xa1\x61v", b"\xd8\x28")),
    *(b"\xf7", b"\xf9\x7e\x00", b"\xfa\x7f\x80\x00\x00", b"\xf8\x10", b"\x62\xff\xff", b"\x63\xed\xa0\x80"),
]
STRANGE = [
    *map(cbor2.dumps, [*INTEGERS, *FLOATS, *OTHERS, *AUX]),
    *(cbor2.dumps(cbor2.CBORTag(tag, one)) for tag in range(110) for one in TAGGED),
    *(typed(shape, 85, bytes(16)) for shape in SHAPES),
    *(typed([2, 2], tag, bytes(8)) for tag in range(64, 88)),
    *(typed([2, 2], 77, content) for content in CONTENTS),
    *MALFORMED,
]
STRANGE_KEYS = [*map(cbor2.dumps, ["y", "V", "", "seq"]), b"\x01", b"\x41v", b"\xf6", b"\x81\x01"]
GOOD_JSON = {
    "v": 1,
    "seq": 1,
    "boot": "b",
    "t": 1,
    "fs": 100.0,
    "unit": "g",
    "x": [[1, 2.5], [3, -4]],
    "aux": {"rpm": 9},
}
STRANGE_JSON: list[object] = [2**64, 1e308, NAN, *OTHERS[:8], *OTHERS[10:], *AUX]


class Mutator:
    """
    Makes hostile payloads.

    Args:
        seed: the same seed makes the same payloads.
    """

    def __init__(self, seed: int) -> None:
        self._random = random.Random(seed)  # noqa: S311 - no secret
        self._changes: list[Callable[[list[Entry]], None]] = [
            *[self._vary] * 4,
            *[self._estrange] * 3,
            self._drop,
            self._repeat,
            self._rename,
            self._shuffle,
        ]

    def payload(self) -> bytes:
        """Return the next one."""
        draw = self._random
        if draw.random() < 0.1:
            return self._scratch(self._json())
        entries = [
            (cbor2.dumps(key), self._good(key)) for key in KEYS if key not in {"piece", "aux"} or draw.random() < 0.5
        ]
        for _ in range(draw.choice((1, 1, 1, 2, 3))):
            draw.choice(self._changes)(entries)
        payload = bytes([0xA0 + min(len(entries), 23)]) + b"".join(key + value for key, value in entries)
        return self._scratch(payload) if draw.random() < 0.35 else payload

    def _good(self, key: str) -> bytes:
        draw = self._random
        if key == "x":
            tag, channels, length = draw.choice(tuple(TYPES)), draw.randrange(1, 4), draw.randrange(1, 5)
            return typed([channels, length], tag, draw.randbytes(channels * length * TYPES[tag]))
        values: dict[str, object] = {
            "v": 1,
            "seq": draw.getrandbits(draw.randrange(64)),
            "boot": f"boot-{draw.randrange(1000)}",
            "t": draw.getrandbits(63),
            "fs": draw.uniform(1.0, 512_000.0),
            "unit": draw.choice(("g", "m/s2", "V", "counts")),
            "piece": draw.random() < 0.5,
            "aux": {draw.choice(("rpm", "running", "temp_C", "bias_V")): draw.uniform(-1e3, 1e3)},
        }
        return cbor2.dumps(values[key])

    def _json(self) -> bytes:
        draw = self._random
        return json.dumps({**GOOD_JSON, draw.choice(KEYS): draw.choice(STRANGE_JSON)}).encode()

    def _vary(self, entries: list[Entry]) -> None:
        place = self._random.randrange(len(entries))
        key = entries[place][0]
        entries[place] = (key, self._good(NAMES[key]) if key in NAMES else b"\x01")

    def _estrange(self, entries: list[Entry]) -> None:
        place = self._random.randrange(len(entries))
        entries[place] = (entries[place][0], self._random.choice(STRANGE))

    def _drop(self, entries: list[Entry]) -> None:
        if len(entries) > 1:
            del entries[self._random.randrange(len(entries))]

    def _repeat(self, entries: list[Entry]) -> None:
        entries.append(self._random.choice(entries))

    def _rename(self, entries: list[Entry]) -> None:
        place = self._random.randrange(len(entries))
        entries[place] = (self._random.choice(STRANGE_KEYS), entries[place][1])

    def _shuffle(self, entries: list[Entry]) -> None:
        self._random.shuffle(entries)

    def _scratch(self, payload: bytes) -> bytes:
        draw, changed = self._random, bytearray(payload)
        for _ in range(draw.choice((0, 1, 1, 2, 4))):
            place = draw.randrange(len(changed) + 1)
            match draw.randrange(6):
                case 0 if place < len(changed):
                    changed[place] ^= 1 << draw.randrange(8)
                case 1 if place < len(changed):
                    changed[place] = draw.randrange(256)
                case 2:
                    changed[place:place] = draw.randbytes(draw.randrange(1, 5))
                case 3:
                    del changed[place : place + draw.randrange(1, 5)]
                case 4:
                    del changed[place:]
                case _:
                    changed[place:place] = changed[: draw.randrange(20)]
        return bytes(changed)


def attack(seed: int, number: int) -> tuple[Counter[str], float]:
    """Return how often each outcome came of *number* payloads, and the seconds that decoding the slowest took."""
    mutator, outcomes, slowest_s = Mutator(seed), Counter[str](), 0.0
    for _ in range(number):
        payload = mutator.payload()
        began_s = time.perf_counter()
        try:
            block = decode(payload, "src")
        except BlockError as error:
            outcomes[error.reason] += 1
        else:
            outcomes["accepted"] += 1
            assert block.samples.ndim == 2
            assert block.samples.size
        slowest_s = max(slowest_s, time.perf_counter() - began_s)
    return outcomes, slowest_s


def check(seed: int, number: int, figure: Callable[[str, str], None]) -> None:
    outcomes, slowest_s = attack(seed, number)
    read = sum(count for reason, count in outcomes.items() if reason not in NOT_READ) / number
    accepted = outcomes["accepted"] / number
    figure(
        f"hostile blocks, {number:,}",
        f"0 crashes; {read:.0%} read as CBOR, {accepted:.1%} accepted, refused for {len(outcomes) - 1} reasons; "
        f"the slowest took {slowest_s * 1e3:.1f} ms",
    )
    assert outcomes.total() == number
    assert read >= 0.30
    assert accepted >= 0.01


def test_the_same_seed_makes_the_same_payloads() -> None:
    """A payload that broke something can be made again."""
    one, other = Mutator(1), Mutator(1)
    assert [one.payload() for _ in range(200)] == [other.payload() for _ in range(200)]


@pytest.mark.slow
def test_a_hundred_thousand_hostile_blocks_are_refused_or_right(figure: Callable[[str, str], None]) -> None:
    """Nothing comes out of them but a block or the error that is counted; enough of them get past the first checks."""
    check(28, 100_000, figure)


@pytest.mark.long
def test_a_million_hostile_blocks_are_refused_or_right(figure: Callable[[str, str], None]) -> None:
    """The same with other payloads, ten times as many."""
    check(1_000_028, 1_000_000, figure)
