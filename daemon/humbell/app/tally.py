"""Adds up, from readings, what the seconds of each point were."""

from collections import defaultdict
from collections.abc import Mapping

from humbell.app.wiring import JUDGED, bands_of, points_of
from humbell.config import Site
from humbell.model import Coverage, PointId, Reading, coverage_of


class Tally:
    """
    The coverage of all points, from the readings of the first band of each.

    A sensor's fault shows in both bands alike, and the velocity's frames settle later: the stricter of the two counts.

    Args:
        site: the configuration.
    """

    def __init__(self, site: Site) -> None:
        self._counted = {
            name: JUDGED[quantity] for name, point in points_of(site) for quantity, _ in list(bands_of(point))[:1]
        }
        self._seconds: dict[PointId, dict[Coverage, float]] = defaultdict(lambda: defaultdict(float))

    def feed(self, reading: Reading) -> None:
        """Count *reading*, if its measure is the one that counts at its point."""
        name = PointId(reading.machine, reading.point)
        if self._counted.get(name) is reading.measure:
            self._seconds[name][coverage_of(reading.quality, reading.cause)] += reading.span_s

    def seconds(self, point: PointId) -> Mapping[Coverage, float]:
        """Return the seconds of *point* by category, in the order of precedence, without empty ones."""
        found = self._seconds[point]
        return {category: found[category] for category in Coverage if found[category] > 0}
