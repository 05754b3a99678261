"""The settings of a node: what may stand in them, what they default to, and bearings against published figures."""

from datetime import date
from typing import Any, NamedTuple

import pytest
from pydantic import ValidationError

from humbell.config import Acceleration, Bearing, Machine, Point, Site, Speed, Velocity, parse
from humbell.measures import Band, Quantity
from humbell.model import ChannelId
from humbell.sources import Sensitivity

# A node with every setting of machines and points.
WHOLE = """\
site: tarnholm-water                # invented; all examples play in this invented water works
node: pumphouse-1                   # default: from the computer's serial number
sources:
  tape: {kind: replay}
machines:
  p-101:
    name: Raw water pump 1
    speed: {rpm: 1480}
    group: raw-water-pumps          # sister machines
    points:
      de-h:
        channel: tape/0
        sensitivity: {mV_per_g: 100.2, calibrated: 2026-01-14, serial: "A-1093"}
        mount: stud                 # stud, adhesive, magnet, hand; with the sensor it decides what may be compared
        bearing: {elements: 9, element_mm: 7.94, pitch_mm: 39.04, angle_deg: 0}
        velocity: {band_hz: [10, 1000], high: 4.5, high_high: 7.1, deadband: 0.3, on_delay_s: 10, off_delay_s: 30}
        acceleration: {band_hz: [500, 16000], high: 2.0, high_high: 4.0, deadband: 0.2, on_delay_s: 10, off_delay_s: 30}
      nde-h:
        channel: tape/1
        bearing: {bpfo: 3.585, bpfi: 5.415, bsf: 2.357, ftf: 0.398}
"""


class Published(NamedTuple):
    """One bearing as its source has it."""

    geometry: dict[str, float]  # inches and degrees
    shaft_hz: float
    events_hz: dict[str, float]
    digits: float  # of the least precise figure


# Geometry and figures: Case Western Reserve University, Bearing Data Center, "bearing information", in multiples of the
# shaft's speed, and for the rolling element 2 x BSF (4.7135, 3.9874). From memory, reproduced by calculation.
CWRU_6205 = Published(
    {"elements": 9, "ball_in": 0.3126, "pitch_in": 1.537, "angle_deg": 0},
    1.0,
    {"bpfi": 5.4152, "bpfo": 3.5848, "ftf": 0.39828, "bsf": 4.7135 / 2},
    1e-4,
)
CWRU_6203 = Published(
    {"elements": 8, "ball_in": 0.2656, "pitch_in": 1.122, "angle_deg": 0},
    1.0,
    {"bpfi": 4.9469, "bpfo": 3.0530, "ftf": 0.3817, "bsf": 3.9874 / 2},
    2e-4,
)
# Qiu, Lee, Lin, J. Sound Vib. 289 (2006) 1066-1090: Rexnord ZA-2115, double row, at 2000 r/min, in Hz; the set-up was
# read in secondary pages. From memory, reproduced by calculation.
ZA_2115 = Published(
    {"elements": 16, "ball_in": 0.331, "pitch_in": 2.815, "angle_deg": 15.17},
    2000 / 60,
    {"bpfo": 236.4, "bpfi": 297.0, "bsf": 140.0, "ftf": 14.8},
    0.1,
)


def point(**settings: object) -> Point:
    """Return a point with a channel and *settings*."""
    return Point.model_validate({"channel": "tape/0"} | settings)


def problems(model: type[Any], **settings: object) -> list[str]:
    """Return what is said against *settings*: key and text."""
    with pytest.raises(ValidationError) as caught:
        model.model_validate(settings)
    return [f"{'.'.join(map(str, one['loc']))}: {one['msg']}" for one in caught.value.errors()]


@pytest.mark.parametrize("bearing", [CWRU_6205, CWRU_6203, ZA_2115], ids=["6205", "6203", "ZA-2115"])
def test_the_multiples_of_a_bearing_are_the_published_ones(bearing: Published) -> None:
    """From number, diameters (inches, as published) and contact angle come the figures that the source prints."""
    geometry = bearing.geometry
    found = Bearing(
        elements=int(geometry["elements"]),
        element_mm=geometry["ball_in"] * 25.4,
        pitch_mm=geometry["pitch_in"] * 25.4,
        angle_deg=geometry["angle_deg"],
    ).multiples
    events_hz = {name: multiple * bearing.shaft_hz for name, multiple in found.items()}
    assert events_hz == pytest.approx(bearing.events_hz, abs=bearing.digits)


def test_multiples_that_are_given_are_taken_as_they_are() -> None:
    """A maker's own figures need no geometry."""
    given = {"bpfo": 3.585, "bpfi": 5.415, "bsf": 2.357, "ftf": 0.398}
    assert Bearing.model_validate(given).multiples == given


@pytest.mark.parametrize(
    "settings",
    [
        {},
        {"angle_deg": 10},
        {"elements": 9},
        {"elements": 9, "element_mm": 7.94},
        {"bpfo": 3.585, "bpfi": 5.415},
        {"elements": 9, "element_mm": 7.94, "pitch_mm": 39.04, "bpfo": 3.585},
        {"elements": 9, "element_mm": 7.94, "pitch_mm": 39.04, "bpfo": 3.6, "bpfi": 5.4, "bsf": 2.4, "ftf": 0.4},
    ],
)
def test_a_bearing_is_given_one_way_and_whole(settings: dict[str, float]) -> None:
    """Half a geometry, both ways at once, or nothing at all is told with what to give."""
    (said,) = problems(Bearing, **settings)
    assert "needs either elements, element_mm and pitch_mm, or bpfo, bpfi, bsf and ftf (give one set whole)" in said


@pytest.mark.parametrize(
    ("settings", "said"),
    [
        ({"elements": 9, "element_mm": 40, "pitch_mm": 39}, "element_mm=40 is not below pitch_mm=39 (check the two)"),
        ({"elements": 2, "element_mm": 7.94, "pitch_mm": 39.04}, "elements: "),
        ({"elements": 9, "element_mm": float("inf"), "pitch_mm": float("inf")}, "element_mm: "),
        ({"elements": 9, "element_mm": 7.94, "pitch_mm": 39.04, "angle_deg": 90}, "angle_deg: "),
        ({"bpfo": 3.6, "bpfi": 5.4, "bsf": float("inf"), "ftf": 0.4}, "bsf: "),
        ({"bpfo": 3.6, "bpfi": 5.4, "bsf": 2.4, "ftf": 1.0}, "ftf: "),
    ],
)
def test_a_bearing_that_cannot_be_is_refused(settings: dict[str, float], said: str) -> None:
    """Balls larger than the pitch circle, two of them, infinite ones, or a cage as fast as the shaft are slips."""
    assert said in problems(Bearing, **settings)[0]


def test_every_setting_of_a_machine_is_understood() -> None:
    """The example of section 8 gives each setting the meaning that it has there."""
    site = parse(WHOLE, "node.yaml")
    machine = site.machines["p-101"]
    assert (site.site, site.node, list(site.sources)) == ("tarnholm-water", "pumphouse-1", ["tape"])
    assert (machine.name, machine.speed, machine.group) == ("Raw water pump 1", Speed(rpm=1480), "raw-water-pumps")
    limits = {"on_delay_s": 10, "off_delay_s": 30}
    assert machine.points["de-h"] == Point(
        channel=ChannelId("tape", 0),
        sensitivity=Sensitivity(mV_per_g=100.2, calibrated=date(2026, 1, 14), serial="A-1093"),
        mount="stud",
        bearing=Bearing(elements=9, element_mm=7.94, pitch_mm=39.04, angle_deg=0),
        velocity=Velocity(band_hz=(10, 1000), high=4.5, high_high=7.1, deadband=0.3, **limits),
        acceleration=Acceleration(band_hz=(500, 16000), high=2.0, high_high=4.0, deadband=0.2, **limits),
    )
    assert machine.points["nde-h"].bearing == Bearing(bpfo=3.585, bpfi=5.415, bsf=2.357, ftf=0.398)


def test_a_point_needs_no_more_than_a_channel() -> None:
    """Both overalls are measured in their usual bands (10-1000 Hz, 500-16000 Hz); nothing is judged without a limit."""
    plain = point()
    assert plain.velocity is not None
    assert plain.acceleration is not None
    assert plain.velocity.band(Quantity.VELOCITY) == Band(Quantity.VELOCITY, 10, 1000)
    assert plain.acceleration.band(Quantity.ACCELERATION) == Band(Quantity.ACCELERATION, 500, 16000)
    assert (plain.velocity.high, plain.velocity.high_high, plain.acceleration.high) == (None, None, None)
    assert (plain.sensitivity, plain.mount, plain.bearing) == (None, None, None)


def test_an_overall_is_left_out_by_off() -> None:
    """YAML reads a bare `off` as false; both that and nothing at all leave the measure out."""
    for nothing in (False, None):
        assert point(velocity=nothing).velocity is None
        assert point(acceleration=nothing).acceleration is None
    assert problems(Point, channel="tape/0", velocity=True) != []


def test_a_point_that_measures_nothing_is_refused() -> None:
    """Its seconds would be in no category of the ledger."""
    with pytest.raises(ValidationError, match=r"nothing is measured \(leave one on, or take the point out\)"):
        Point.model_validate({"channel": "tape/0", "velocity": False, "acceleration": False})


@pytest.mark.parametrize(("rate_hz", "frame_s"), [((10, 1000), 1.0), ((2, 1000), 5.0), ((20, 1000), 1.0)])
def test_a_frame_holds_ten_periods_of_the_lower_edge(rate_hz: tuple[float, float], frame_s: float) -> None:
    """A second, or more where the band begins below 10 Hz: 5 s from 2 Hz on."""
    assert Velocity(band_hz=rate_hz).frame_in_force_s == frame_s


@pytest.mark.parametrize("channel", ["tape", "tape/", "/0", "tape/-1", "tape/one", "tape/²", "", 0, None])
def test_a_channel_is_a_source_and_a_number(channel: object) -> None:
    """Anything else is told with the form."""
    (said,) = problems(Point, channel=channel)
    assert "is no channel (give SOURCE/NUMBER, such as daq-a/0; numbers start at 0)" in said


@pytest.mark.parametrize("name", ["P-101", "p 101", "-p", "p-", "pümp", "", "p/1", "x" * 65])
def test_ids_are_lower_case_and_safe_everywhere(name: str) -> None:
    """An id stands in topics, file names and addresses: a-z, 0-9, '.', '_' and '-', a letter or digit at both ends."""
    machine = Machine(points={"de-h": point()})
    tape = {"tape": {"kind": "replay"}}
    assert problems(Site, site=name, sources=tape, machines={"p-101": machine}) != []
    assert problems(Site, site="s", node=name, sources=tape, machines={"p-101": machine}) != []
    assert problems(Site, site="s", sources={name: tape["tape"]}, machines={"p-101": machine}) != []
    assert problems(Site, site="s", sources=tape, machines={name: machine}) != []
    assert problems(Machine, points={name: point()}) != []


def test_a_node_without_machines_points_or_sources_is_refused() -> None:
    """Such a node would watch nothing, and look healthy."""
    sources, machines = {"tape": {"kind": "replay"}}, {"p-101": {"points": {"de-h": {"channel": "tape/0"}}}}
    assert problems(Site, site="s", sources={}, machines=machines)[0].startswith("sources: ")
    assert problems(Site, site="s", sources=sources, machines={})[0].startswith("machines: ")
    assert problems(Machine, points={})[0].startswith("points: ")
