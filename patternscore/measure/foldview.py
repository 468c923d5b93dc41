"""An edge of the picture as the rulers that run up to it show it, seen inwards."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.measure.foldband import Band
from patternscore.measure.ruler import Bars
from patternscore.measure.stepshape import StepShape
from patternscore.plan import Plan, Ruler, Side

Array = npt.NDArray[np.float64]
FAR = ("right", "bottom")
DEPTH = 0.46  # picture fraction that a fold of 2.5 us at 8 times scan speed can show, and some more
# Samples or lines by which an edge may leave the pace of its neighbours; lines are sampled without a filter.
PACE = {"h": 0.2, "v": 0.5}
NEIGHBOURS = 7  # bar edges that foretell the next one
LEAST = 0.2  # bars: shorter folds are not told from the edge of blanking


@dataclass(frozen=True, slots=True, eq=False)
class View:
    """An edge of the picture seen inwards: the bands that run up to it.

    Attributes
    ----------
    bands : tuple of Band
        The bands.
    start, bar : float
        Where the active line should start, and the length of a bar.
    certified, latest : float
        Where the forward code begins, and the last place where the scan may turn: there one more bar edge
        has been read, and two are not there by chance.
    blanked : bool
        Whether the step from blanking is seen through the spot, as it is along the line.
    """

    bands: tuple[Band, ...]
    start: float
    bar: float
    certified: float
    latest: float
    blanked: bool

    @property
    def black_until(self) -> float:
        """Where the step from blanking lies; far away where none is seen."""
        return self.start if self.blanked else -1e3


def view_edge(plan: Plan, bars: list[Bars], side: Side, start: float, late: float = 0.0, *, wary: bool = True) -> View:
    """Look at one edge of the picture.

    Parameters
    ----------
    plan : Plan
        The chart.
    bars : list of Bars
        Rulers along the axis that meets this edge.
    side : {"left", "right", "top", "bottom"}
        The edge.
    start : float
        Frame coordinate at which the active line (the picture lines) starts or ends there.
    late : float
        How much later than the scan's place rising edges come, and earlier falling ones.
    wary : bool
        Whether to leave out edges near the picture's edge that do not keep to the pace of the others.

    Raises
    ------
    Unreadable
        If the forward code is not found near this edge.
    """
    count = bars[0].strip.mean.size
    start = count - 1 - start if side in FAR else start
    bands, edges, length = [], [], 0.0
    for one in bars:
        found = _band(plan, one, side, start, late, wary)
        if found is not None:
            bands.append(found[0])
            edges.append(found[1])
            length = abs(float(found[0].slope(0.0))) / _bars_across(one.strip.ruler)
    if not any(band.walls[1] < max(0.05, float(band.position(start)) + 0.01) for band in bands):
        raise Unreadable(f"no ruler is seen near the {side} edge")
    return View(
        bands=tuple(bands),
        start=start,
        bar=length,
        certified=min(float(places[0]) for places in edges),
        latest=min(float(places[1]) for places in edges),
        blanked=bars[0].strip.axis == "h",
    )


def _bars_across(ruler: Ruler) -> float:
    return len(ruler.bits) / (ruler.boundaries[-1] - ruler.boundaries[0])


def _band(plan: Plan, bars: Bars, side: Side, start: float, late: float, wary: bool) -> tuple[Band, Array] | None:
    """One band seen from the edge, and where its certified bar edges lie; None where it cannot be used."""
    strip = bars.strip
    count, far = strip.mean.size, side in FAR
    edge_rows = strip.seen[-1 - np.arange(count // 6)] if far else strip.seen[: count // 6]
    if edge_rows.mean() < 0.95:
        return None
    at = 1.0 - bars.at[::-1] if far else bars.at
    place = count - 1 - bars.place[::-1] if far else bars.place
    sign = -bars.sign[::-1] if far else bars.sign
    good = bars.good[::-1] if far else bars.good
    doubt = bars.doubt[::-1] if far else bars.doubt
    near = np.flatnonzero(at < 0.5)
    wrong = np.flatnonzero(~good[near])
    use = near[int(wrong[-1]) + 1 if wrong.size else 0 :]
    if use.size < NEIGHBOURS + 6 or at[use[0]] > 0.16:
        return None
    bar = 1.0 / _bars_across(strip.ruler)
    steady = (place - late * sign)[use]
    first = _first_in_pace(at[use], steady, doubt[use], bar, PACE[strip.axis]) if wary else 0
    forward = _forward(at[use[first:]], steady[first:], doubt[use[first:]], bar, wary)
    use = use[first:]
    level = bars.level
    t = np.arange(count) + bars.lag * (np.arange(count) % 2)
    walls, content = _content(plan, strip.ruler, strip.covered, side)
    black = -float(bars.base[0]) / float(bars.swing[0])
    shape = bars.shape
    if far:
        t, level, shape = (count - 1 - t)[::-1], level[::-1], StepShape(1.0 - shape.table[::-1], shape.width)
    noise = float(np.sqrt(np.mean(strip.scatter**2))) / bars.contrast
    content = np.concatenate([[black], content])
    if walls[1] > 1.5 * bar:
        end = float(forward @ [1.0, walls[1], walls[1] ** 2])
        seen = _seen_corner(level, end, bar * float(forward[1]), start)
        content[1] = content[1] if seen is None else seen
    limits = (float(level.min()), float(level.max()))
    unread = np.zeros(walls.size, dtype=bool)
    reader = Band(t, level, walls, content, shape, forward, walls, unread, late, noise, limits)
    met = reader.reach(walls)
    nearest = use[np.argmin(np.abs(at[use][None, :] - walls[:, None]), axis=1)]
    read = np.abs(at[nearest] - walls) < 1e-6
    met = np.where(read, (place - late * sign)[nearest], met)
    return replace(reader, met=met, read=read), place[use]


def _first_in_pace(at: Array, place: Array, doubt: Array, bar: float, pace: float) -> int:
    """Index of the first edge from which on all keep the pace of the others.

    Each edge is foretold from the ``NEIGHBOURS`` next ones further in, by a cubic: folded bars may look like
    the code by chance, but they do not keep to its pace.
    """
    near = np.arange(min(at.size - NEIGHBOURS, 14))
    from_these = near[:, None] + 1 + np.arange(NEIGHBOURS)[None, :]
    away = (at[from_these] - at[near, None]) / bar
    powers = away[:, :, None] ** np.arange(4)
    weighted = powers / (doubt[from_these, None] + 0.02) ** 2
    # A tenth of a sample per bar squared and a thousandth per bar cubed are as much as a scan has.
    spread = np.linalg.inv(np.swapaxes(weighted, 1, 2) @ powers + np.diag([0.0, 0.0, 1e2, 1e6]))
    foretold = np.einsum("kj,knj,kn->k", spread[:, 0], weighted, place[from_these])
    doubtful = np.sqrt(doubt[near] ** 2 + spread[:, 0, 0])
    off = np.abs(place[near] - foretold) > pace + 2.0 * doubtful
    return int(near[off][-1]) + 1 if off.any() else 0


def _forward(at: Array, place: Array, doubt: Array, bar: float, wary: bool) -> Array:
    """Forward scan near the edge as a parabola: through edges clear of a turn, or mostly the nearest ones."""
    away = (at - at[0]) / bar
    clear = (away >= 1.5) & (away <= 16.0) if wary else away <= 16.0
    nearness = 1.0 if wary else np.exp(-away[clear, None] / 2.0)
    x = at[clear]
    powers = np.stack([np.ones_like(x), x, x * x], 1)
    weighted = nearness * powers / (doubt[clear, None] + 0.02) ** 2
    normal = weighted.T @ powers + np.diag([0.0, 0.0, 1e-4])
    return np.asarray(np.linalg.solve(normal, weighted.T @ place[clear]))


def _content(plan: Plan, ruler: Ruler, covered: tuple[float, float], side: Side) -> tuple[Array, Array]:
    """Walls and levels of a band from the edge inwards, runs of like bars joined."""
    walls = np.asarray(ruler.boundaries)
    bits = np.asarray(ruler.bits, dtype=np.float64)
    if side in FAR:
        walls, bits = 1.0 - walls[::-1], bits[::-1]
    if walls[0] > 1e-6:  # the corner belongs to the ruler that runs along this edge
        walls = np.concatenate([[0.0], walls])
        bits = np.concatenate([[corner_level(plan, covered, side)], bits])
    keep = np.concatenate([[True], bits[1:] != bits[:-1]]) & (walls[:-1] < DEPTH)
    return walls[:-1][keep], bits[keep]


def corner_level(plan: Plan, covered: tuple[float, float], side: Side) -> float:
    """Mean level, 0 to 1, of the crossing ruler's bars within what was taken of a band."""
    crossing = next((other for other in plan.rulers if other.side == side), None)
    if crossing is None:
        return 0.0
    low, high = covered
    walls = np.asarray(crossing.boundaries)
    inside = np.maximum(np.minimum(walls[1:], high) - np.maximum(walls[:-1], low), 0.0)
    total = float(inside.sum())
    return float(inside @ np.asarray(crossing.bits, dtype=np.float64)) / total if total > 0 else 0.0


def _seen_corner(level: Array, end: float, bar: float, start: float) -> float | None:
    """Level of a corner that belongs to another ruler, as seen just before this one begins."""
    low, high = math.ceil(max(end - 1.4 * bar, start + 2.0, 0.0)), int(end - 0.4 * bar)
    return float(np.mean(level[low:high])) if high - low >= 2 else None
