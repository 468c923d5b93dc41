"""A glance at the edges of the picture: whether all that stands there is the forward code and black.

Most frames do not fold; a glance settles that, and only what it leaves open is looked at closely.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import numpy.typing as npt

from patternscore.measure.foldview import FAR, corner_level
from patternscore.measure.ruler import Bars, transitions
from patternscore.measure.scanmap import ScanMap
from patternscore.plan import Plan, Ruler, Side

Array = npt.NDArray[np.float64]
NEAR = 0.11  # picture fraction from the edge that is glanced at
SURE_EDGES = 4  # next to the edge, that must have been read
SOFTEST = 1.6  # samples: a wider spot could smear a short fold away
CALM = 0.2  # of the bars' contrast: ringing beside the picture's edge that is let pass
TOLERANCE = 0.06  # of the bars' contrast


@lru_cache(maxsize=32)
def _expected(ruler: Ruler, side: Side) -> tuple[Array, Array]:
    """Picture fractions of a ruler's walls near an edge, the picture's edge first, and levels after the first."""
    far = side in FAR
    index, sign = transitions(ruler)
    at = np.asarray(ruler.boundaries)[index]
    edge = 1.0 if far else 0.0
    near = np.abs(at - edge) < NEAR
    at, sign = (at[near][::-1], -sign[near][::-1]) if far else (at[near], sign[near])
    own = ruler.boundaries[-1] if far else ruler.boundaries[0]
    first = float(ruler.bits[-1] if far else ruler.bits[0])
    levels = first + np.concatenate([[0.0], np.cumsum(sign)])
    if abs(own - edge) > 1e-6:
        return np.concatenate([[edge, own], at]), np.concatenate([[np.nan], levels])
    return np.concatenate([[edge], at]), levels


def nothing_there(plan: Plan, bars: list[Bars], scan: ScanMap, side: Side, start: float) -> bool:
    """Whether the bands show the forward code up to the picture's edge, and black before it.

    Parameters
    ----------
    plan : Plan
        The chart.
    bars : list of Bars
        Both rulers along the axis that meets this edge; with one alone a glance settles nothing.
    scan : ScanMap
        The scan through them.
    side : {"left", "right", "top", "bottom"}
        The edge.
    start : float
        Frame coordinate at which the active line (the picture lines) starts or ends there.
    """
    return len(bars) > 1 and all(_plain(plan, one, scan, side, start) for one in bars)


def _plain(plan: Plan, bars: Bars, scan: ScanMap, side: Side, start: float) -> bool:
    strip, far = bars.strip, side in FAR
    ends = slice(-SURE_EDGES, None) if far else slice(0, SURE_EDGES)
    if bars.shape.width > SOFTEST or not bars.good[ends].all():
        return False
    at, levels = _expected(strip.ruler, side)
    if np.isnan(levels[0]):
        levels = np.concatenate([[corner_level(plan, strip.covered, side)], levels[1:]])
    places = scan.places(at, float(np.sign(strip.across - 0.5)))
    edge = places[0]
    inner = int(places[-1])
    count = strip.mean.size
    blanked = strip.axis == "h"
    if blanked:
        places = np.minimum(places, start) if far else np.maximum(places, start)
    low, high = (inner + 1, count) if far else (0, inner)
    if high - low < 8:
        return False
    index = np.arange(low, high)
    black = -float(bars.base[0]) / float(bars.swing[0])
    steps = np.diff(np.concatenate([[black], levels]))
    taken = index + bars.lag * (index % 2)
    reached = bars.shape.at(taken[None, :] - places[:, None])
    left = bars.level_of(low, high) - (black + steps @ (1.0 - reached if far else reached))
    clear = 1.0 + bars.shape.width
    counted = np.abs(index - edge) > clear
    if blanked:
        counted &= np.abs(index - start) > clear
    if not _calm(bars.level_of(low, high)[~counted], black, float(levels[0])):
        return False
    noise = float(np.sqrt(np.mean(strip.scatter[low:high] ** 2))) / bars.contrast
    return bool(np.abs(left[counted]).max(initial=0.0) < max(TOLERANCE, 6.0 * noise))


def _calm(level: Array, black: float, outermost: float) -> bool:
    """Whether samples about the picture's edge lie between black and its outermost level, or nearly so."""
    low, high = min(black, outermost) - CALM, max(black, outermost) + CALM
    return bool(np.all((level > low) & (level < high)))
