"""A sender whose machines vibrate as a test wants: blocks with numbers and times of its own, over a real broker."""

import time

import numpy as np

from humbell.model import Block, SampleUnit
from system.feeding import Sender

RATE_HZ = 512.0
BLOCK_S = 0.25
LENGTH = 128
_TONE_HZ = 40.0  # ten periods a block, so that every block goes on where the last one ended
_NOISE = np.random.default_rng(5).normal(0, 0.01, (16, 8, LENGTH))  # m/s²; without any a sensor is none

# The narrow band lets the rate be low, and so the test quick.
_POINT = "      de-h: {{channel: works/{channel}, velocity: {velocity}, acceleration: off}}\n"
_VELOCITY = "{band_hz: [10, 200], high: 4.5, on_delay_s: 4, off_delay_s: 4}"


def site(port: int, points: int, more: str = "") -> str:
    """Return a configuration with *points* machines of one point each, p-0 and on, fed over the broker at *port*."""
    machines = "".join(
        f"  p-{channel}:\n    points:\n" + _POINT.format(channel=channel, velocity=_VELOCITY)
        for channel in range(points)
    )
    return (
        "site: tarnholm-water\nnode: pumphouse-1\n"
        f"brokers:\n  local: {{host: 127.0.0.1, port: {port}}}\n"
        f"sources:\n  works: {{kind: mqtt, broker: local, max_age_s: 0}}\n{more}"
        f"machines:\n{machines}"
    )


class Feed:
    """
    Blocks of one source, due at a pace of its own.

    Args:
        sender: takes them to the broker.

        channels: how many, 8 at most.

        start_ns: UTC of the first sample, ns since 1970.

        pace: seconds of signal a second.
    """

    def __init__(self, sender: Sender, channels: int, start_ns: int, pace: float) -> None:
        self._sender = sender
        self.levels = [1.0] * channels  # mm/s RMS
        self.start_ns = start_ns
        self._pace = pace
        self._began_s = time.monotonic()
        self.seq = 0
        time_s = np.arange(LENGTH) / RATE_HZ
        self._wave = np.sqrt(2) / 1000 * 2 * np.pi * _TONE_HZ * np.cos(2 * np.pi * _TONE_HZ * time_s)

    @property
    def seconds(self) -> float:
        """Signal so far."""
        return self.seq * BLOCK_S

    @property
    def end_ns(self) -> int:
        """UTC of the end of the signal so far."""
        return self.start_ns + round(self.seconds * 1e9)

    def make(self) -> Block:
        """Return the next block, which the caller may send, or lose."""
        samples = np.asarray(self.levels)[:, None] * self._wave + _NOISE[self.seq % 16, : len(self.levels)]
        block = Block(
            *("works", "boot-1", self.seq, self.end_ns, RATE_HZ, SampleUnit.METRES_PER_SECOND_SQUARED),
            samples=samples.astype(np.float32),
        )
        self.seq += 1
        return block

    def send(self, seconds: float) -> None:
        """Send so many seconds of signal at once."""
        self._sender.send(*(self.make() for _ in range(round(seconds / BLOCK_S))))

    def lose(self, blocks: int) -> None:
        """Make blocks that nobody gets."""
        for _ in range(blocks):
            self.make()

    def flush(self) -> None:
        """Wait until the broker has all that was sent."""
        self._sender.flush()

    def pump(self) -> None:
        """Send what is due by now."""
        while self.seconds + BLOCK_S <= (time.monotonic() - self._began_s) * self._pace:
            self._sender.send(self.make())
