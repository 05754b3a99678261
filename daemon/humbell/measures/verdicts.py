"""From what was measured and found in a frame to readings with their quality and cause."""

import math
from collections.abc import Iterator

import numpy as np
from numpy.typing import NDArray

from humbell.measures.base import PointPlan
from humbell.measures.overall import MEASURES
from humbell.measures.response import Quantity
from humbell.measures.sensor_check import Findings
from humbell.model import GOOD, MAY_RAISE, Cause, Quality, Reading, Verdict

# Up to this share of clipped samples the RMS is still near; the peak never is.
_CLIPPED_SHARE = 1e-4
LOST = Verdict(Quality.BAD, Cause.NO_SAMPLES)
CUT_SHORT = Verdict(Quality.BAD, Cause.INCOMPLETE, "the signal ended before the frame was whole")

# A crest factor without signal, or a peak of a record that ends before it has settled.
_NO_VALUE = Verdict(Quality.BAD, Cause.SHORT_PIECE)
# One sentence on what the share says, for whoever reads the value.
_CLIPPED_DETAIL = "{count} of {samples} samples at the converter's rail: the true value is higher"


def verdict(found: Findings, channel: int, samples: int, *, settling: bool, step: float) -> Verdict:
    """
    Return the verdict on one channel's frame; the first cause that applies is named.

    Args:
        found: by the sensor check, in that frame.

        channel: which.

        samples: in the frame.

        settling: the filter's state had not died away yet.

        step: of the mean, which has moved the value, m/s²; 0 for none.
    """
    if found.non_finite[channel]:
        return Verdict(Quality.BAD, Cause.NON_FINITE)
    if found.flat[channel]:
        return Verdict(Quality.BAD, Cause.FLAT)
    if step:
        return Verdict(Quality.BAD, Cause.DC_STEP, f"the mean moved by {step:.3g} m/s2")
    if settling:
        return Verdict(Quality.UNCERTAIN, Cause.SETTLING)
    count = int(found.clipped[channel])
    if count:
        quality = Quality.UNCERTAIN if count < _CLIPPED_SHARE * samples else Quality.BAD
        return Verdict(quality, Cause.CLIPPED, _CLIPPED_DETAIL.format(count=count, samples=samples))
    return GOOD


def read(
    point: PointPlan,
    quantity: Quantity,
    values: NDArray[np.float64],
    judged: Verdict,
    *,
    end_ns: int,
    span_s: float,
    piece: bool = False,
) -> Iterator[Reading]:
    """
    Return the readings of one band of one point.

    A bad value is not shown, for somebody would believe it; but a lower bound is worth knowing.

    Args:
        point: whose.

        quantity: which band.

        values: (measures,) in the order and units of `MEASURES`.

        judged: how far to trust all of them.

        end_ns: UTC of the end of the frame, ns since 1970.

        span_s: seconds of signal behind each value.

        piece: the values come from a separate short record.
    """
    shown = judged.quality is not Quality.BAD or judged.cause in MAY_RAISE
    for measure, value in zip(MEASURES[quantity], values.tolist(), strict=True):
        final = judged if math.isfinite(value) or judged.quality is Quality.BAD else _NO_VALUE
        yield Reading(
            time_ns=end_ns,
            machine=point.id.machine,
            point=point.id.point,
            measure=measure,
            value=value if shown else math.nan,
            span_s=span_s,
            quality=final.quality,
            cause=final.cause,
            detail=final.detail,
            piece=piece,
        )
