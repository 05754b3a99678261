"""The plan: what a configuration comes to, and what it leaves unwatched."""

import pytest

from humbell.app.plan import CAUTIONS, BandLine, Plan, plan
from humbell.config import parse
from humbell.measures import Quantity
from humbell.model import PointId

SITE = """\
site: tarnholm-water
sources:
  tape: {kind: replay, rate_hz: 51200}
  spare: {kind: replay}
machines:
  p-101:
    speed: {rpm: 1480}
    points:
      de-h:
        channel: tape/0
        mount: stud
        sensitivity: {mV_per_g: 100.2, calibrated: 2026-01-14, serial: A-1093}
        bearing: {bpfo: 3.585, bpfi: 5.415, bsf: 2.357, ftf: 0.398}
        velocity: {high: 4.5, high_high: 7.1}
        acceleration: {band_hz: [500, 10000], high: 2.0, deadband: 0.2, on_delay_s: 5, off_delay_s: 60}
  m-300:
    speed: {rpm: 420}
    points:
      de-h: {channel: tape/1, acceleration: off}
      de-v: {channel: tape/2, velocity: {band_hz: [2, 1000], high_high: 7.1}, mount: magnet}
"""
PLAN = plan(parse(SITE, "node.yaml"))


def planned(point: str) -> Plan:
    """Return the plan of one point with these settings on a machine of 1480 r/min."""
    text = f"site: s\nsources: {{tape: {{kind: replay}}}}\nmachines: {{p-1: {{points: {{de-h: {point}}}}}}}\n"
    return plan(parse(text, "node.yaml"))


def test_each_point_is_told_as_it_is_understood() -> None:
    """Channel, rate, sensitivity with its day and number, mount and bearing stand in the plan."""
    first, second, third = PLAN.points
    assert (first.name, first.channel, first.rate_hz, first.mount) == (
        PointId("p-101", "de-h"),
        "tape/0",
        51200,
        "stud",
    )
    assert first.sensitivity == "100.2 mV/g, calibrated 2026-01-14, serial number A-1093"
    assert first.bearing == {"bpfo": 3.585, "bpfi": 5.415, "bsf": 2.357, "ftf": 0.398}
    assert (second.sensitivity, second.mount, second.bearing) == ("none: blocks must carry g or m/s2", None, {})
    assert [band.quantity for band in second.bands] == [Quantity.VELOCITY]
    assert third.bands[0].frame_s == 5.0


def test_each_band_is_told_with_unit_limits_and_the_rate_it_needs() -> None:
    """Amplitudes carry RMS; defaults in force are told like what was set; 2.56 samples a period of the upper edge."""
    velocity, acceleration = PLAN.points[0].bands
    assert velocity == BandLine(
        quantity=Quantity.VELOCITY,
        band_hz=(10, 1000),
        frame_s=1.0,
        unit="mm/s RMS",
        limits={"high": 4.5, "high_high": 7.1},
        deadband=pytest.approx(0.45),  # type: ignore[arg-type]
        on_delay_s=10.0,
        off_delay_s=30.0,
        rate_needed_hz=2560.0,
    )
    assert (acceleration.unit, acceleration.limits, acceleration.deadband) == ("g RMS", {"high": 2.0}, 0.2)
    assert (acceleration.on_delay_s, acceleration.off_delay_s) == (5, 60)
    assert acceleration.rate_needed_hz == 25600.0
    assert PLAN.points[1].bands[0].deadband is None


def test_what_is_not_watched_is_told() -> None:
    """Measures without a limit, measures that are off, machines without a running state, sources without points."""
    assert PLAN.not_watched == (
        "m-300/de-h velocity: measured, but no limit judges it (give high)",
        "m-300/de-h acceleration: switched off, not measured",
        "m-300/de-v acceleration: measured, but no limit judges it (give high)",
        "p-101: its running state is unknown; limits judge it at standstill and run-up as well",
        "m-300: its running state is unknown; limits judge it at standstill and run-up as well",
        "source spare: no point has a channel of it",
    )
    assert (PLAN.judged, PLAN.measured) == (3, 5)


def test_a_slow_machine_with_a_fast_band_is_a_thing_to_think_about() -> None:
    """Below 600 r/min the band begins at 2 Hz (ISO 10816-3:2009, one source); where it does, nothing is said."""
    slow = [line for line in PLAN.proposals if " velocity: " in line]
    assert slow == [
        "m-300/de-h velocity: below 600 r/min the band begins at 2 Hz: band_hz: [2, 1000], which makes frames of 5 s"
    ]


@pytest.mark.parametrize(
    ("point", "how"),
    [
        ("{channel: tape/0, mount: magnet}", "the mount is magnet; up to 16000 Hz"),
        ("{channel: tape/0, mount: hand, acceleration: {band_hz: [500, 8000]}}", "the mount is hand; up to 8000 Hz"),
        ("{channel: tape/0}", "the mount is not given; up to 16000 Hz"),
    ],
)
def test_a_mount_that_takes_part_is_a_thing_to_think_about(point: str, how: str) -> None:
    """A resonance below five times the highest frequency takes part (ISO 5348): such a value is a trend."""
    (line,) = planned(point).proposals
    assert line.startswith(f"p-1/de-h acceleration: {how} the mount's own resonance")
    assert "five times the highest frequency (ISO 5348)" in line
    assert "read it as a trend, not as an absolute value" in line


@pytest.mark.parametrize("point", ["{channel: tape/0, mount: stud}", "{channel: tape/0, acceleration: off}"])
def test_a_stud_and_a_velocity_alone_need_no_thought(point: str) -> None:
    """A stud carries the band (common practice), and the velocity's upper edge is far below any mount's resonance."""
    assert planned(point).proposals == ()


@pytest.mark.parametrize(
    ("sensitivity", "said"),
    [
        ("{mV_per_g: 100}", "100 mV/g, day of calibration not given"),
        ("{mV_per_ms2: 10.2}", "10.2 mV/(m/s2), day of calibration not given"),
        ("{counts_per_g: 8388.6, serial: X1}", "8388.6 counts/g, day of calibration not given, serial number X1"),
    ],
)
def test_a_sensitivity_is_told_with_its_unit(sensitivity: str, said: str) -> None:
    """And a calibration that nobody noted is told as one."""
    assert planned(f"{{channel: tape/0, sensitivity: {sensitivity}}}").points[0].sensitivity == said


def test_the_cautions_say_what_humbell_is_not() -> None:
    """No protection system, no trip, no conformity; who decides on limits; how sensors are fitted."""
    text = " ".join(CAUTIONS)
    for words in (
        "no machine protection system",
        "no trip output",
        "no safety integrity level",
        "conformity to no standard",
        "general guidance",
        "Local codes and a qualified vibration analyst decide",
        "isolate and lock out",
        "guards",
        "hot surfaces",
        "clear of couplings",
    ):
        assert words in text
