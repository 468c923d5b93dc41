"""Reading a ruler: the place of every bar edge of its straightened band.

The edges are fitted together: the bars are a sum of steps of one common shape, so each edge is freed from the
tails of its neighbours.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.measure.rulerband import Strip
from patternscore.measure.stepshape import StepShape, StepTrain, finer_shape, fit_shape, spot_width
from patternscore.plan import Ruler

Array = npt.NDArray[np.float64]
MOST_TURNS = 6
REFITTED = 0.1  # samples: after larger moves the shape of the step is fitted anew
SETTLED = 0.02  # samples: edges that move less than this need no further turn
INNER = 0.12  # picture fraction at either end whose bars may be folded over
CLEAR = 2.5  # samples between the edge of blanking and a bar edge that is not disturbed by it
READMITTED = 1.5  # samples by which an edge at the end of a ruler may leave the run of the warp's error
REACH = 5  # samples either side of its expected place within which an edge is sought


@dataclass(frozen=True, slots=True, eq=False)
class Bars:
    """Bar edges of one ruler.

    Attributes
    ----------
    at : (k,) float64
        Picture fraction of each edge between unlike bars.
    sign : (k,) float64
        +1 where light follows dark.
    place : (k,) float64
        Frame coordinate along the ruler.
    good : (k,) bool
        Edges read in forward order where the code has them.
    noise : (k,) float64
        A draw of the error that noise causes in each ``place``.
    doubt : (k,) float64
        How far each ``place`` is left open even without noise.
    shape : StepShape
        The common step, 0 to 1.
    base, swing : (3,) float64
        Level of dark bars, and of light bars above dark: polynomials in 2 s / n - 1, lowest power first.
    lag, lift : float
        By how much odd lines lie lower in the picture than their number says, lines, and lighter, IRE.
    """

    strip: Strip
    at: Array
    sign: Array
    place: Array
    good: npt.NDArray[np.bool_]
    noise: Array
    doubt: Array
    shape: StepShape
    base: Array
    swing: Array
    lag: float
    lift: float

    @property
    def level(self) -> Array:
        """Levels along the strip: 0 for dark bars, 1 for light ones, the fields made alike."""
        return self.level_of(0, self.strip.mean.size)

    def level_of(self, low: int, high: int) -> Array:
        """Levels from index ``low`` up to but not including ``high``."""
        powers = _powers(self.strip.mean.size)[low:high]
        lifted = self.strip.mean[low:high] - powers @ self.base
        if self.lift:
            lifted -= self.lift * (np.arange(low, high) % 2)
        return np.asarray(lifted / (powers @ self.swing))

    @property
    def contrast(self) -> float:
        """Light less dark in the middle, IRE."""
        return float(self.swing[0])


@lru_cache(maxsize=32)
def transitions(ruler: Ruler) -> tuple[npt.NDArray[np.intp], Array]:
    """Edges between unlike bars: indices of the boundaries, and +1 where light follows."""
    bits = np.asarray(ruler.bits)
    index = np.flatnonzero(bits[1:] != bits[:-1]) + 1
    return index, np.where(bits[index], 1.0, -1.0)


def read_bars(strip: Strip, shown: tuple[float, float] = (-math.inf, math.inf)) -> Bars:
    """Find every bar edge of a straightened ruler.

    Parameters
    ----------
    strip : Strip
        The ruler's band.
    shown : (float, float)
        Frame coordinates between which the picture can be shown: where blanking ends and starts again. Bar
        edges close to these are not read.

    Raises
    ------
    Unreadable
        If too few edges stand where the code has them.
    """
    index, sign = transitions(strip.ruler)
    at = np.asarray(strip.ruler.boundaries)[index]
    count = strip.mean.size
    expected = strip.expected[index]
    inside = (expected > max(0.6, shown[0] + CLEAR)) & (expected < min(count - 1.6, shown[1] - CLEAR))
    inside &= strip.seen[np.clip(np.rint(expected), 0, count - 1).astype(int)]
    at, sign, expected = at[inside], sign[inside], expected[inside]
    if at.size < 12:
        raise Unreadable(f"too little of the {strip.ruler.side} ruler lies in the frame")
    powers = _powers(count)
    base, swing = _levels(strip, powers)
    flat = (strip.mean - powers @ base) / (powers @ swing)
    place, found = _crossings(flat, expected, sign)
    place, found = _agree(at, place, found, expected)
    if found.sum() < 12:
        raise Unreadable(f"the bars of the {strip.ruler.side} ruler do not stand in their order")
    return _refine(strip, at, sign, place, found, base, swing)


@lru_cache(maxsize=8)
def _powers(count: int) -> Array:
    """Powers 0 to 2 of -1 to 1 along a strip, (count, 3)."""
    u = np.arange(count) * (2.0 / count) - 1.0
    return np.stack([np.ones_like(u), u, u * u], 1)


def _levels(strip: Strip, powers: Array) -> tuple[Array, Array]:
    """Levels of dark bars and of light above dark along the strip, from the middles of the bars."""
    middles = (strip.expected[1:] + strip.expected[:-1]) / 2
    count = strip.mean.size
    bits = np.asarray(strip.ruler.bits)
    nearest = np.minimum(np.maximum(middles + 0.5, 0), count - 1).astype(np.intp)
    use = (middles > 1) & (middles < count - 2) & strip.seen[nearest]
    # The outermost bars may be folded over; levels are taken from the others.
    use[:4] = use[-4:] = False
    lit = int(np.count_nonzero(use & bits))
    if lit < 6 or np.count_nonzero(use) - lit < 6:
        raise Unreadable(f"too little of the {strip.ruler.side} ruler lies in the frame")
    chosen = nearest[use]
    design = np.concatenate([powers[chosen], powers[chosen] * bits[use, None]], axis=1)
    # Curves are held back where the reach is short.
    normal = design.T @ design + np.diag([0.0, 0.1, 1.0, 0.0, 0.1, 1.0])
    found = np.linalg.solve(normal, design.T @ strip.mean[chosen])
    low = float((powers[:: max(count // 8, 1)] @ found[3:]).min())
    noise = float(np.sqrt(np.mean(strip.scatter**2)))
    if low < max(4.0, 4 * noise):
        raise Unreadable(f"the bars of the {strip.ruler.side} ruler cannot be told from its ground")
    return found[:3], found[3:]


def _crossings(flat: Array, expected: Array, sign: Array) -> tuple[Array, npt.NDArray[np.bool_]]:
    """Crossing of half level, of the right sign, nearest to each expected place."""
    start = np.floor(expected).astype(int) - REACH
    window = np.clip(start[:, None] + np.arange(2 * REACH + 2)[None, :], 0, flat.size - 1)
    height = (flat[window] - 0.5) * sign[:, None]
    crosses = (height[:, :-1] < 0) & (height[:, 1:] >= 0)
    rise = np.where(crosses, height[:, 1:] - height[:, :-1], 1.0)
    place = window[:, :-1] - height[:, :-1] / rise
    far = np.where(crosses, np.abs(place - expected[:, None]), np.inf)
    best = np.argmin(far, axis=1)
    each = np.arange(expected.size)
    found = crosses[each, best]
    return np.where(found, place[each, best], expected), found


def _agree(
    at: Array, place: Array, found: npt.NDArray[np.bool_], expected: Array
) -> tuple[Array, npt.NDArray[np.bool_]]:
    """Keep edges whose departure from the warp runs smoothly along the ruler."""
    u = 2.0 * at - 1.0
    design = np.stack([np.ones_like(u), u, u * u, u**3], 1)
    off = place - expected
    good = found.copy()
    for limit in (3.0, 1.8, 1.2):
        if good.sum() < 8:
            return place, good
        fitted = design[good]
        normal = fitted.T @ fitted + 1e-9 * np.eye(4)
        curve = design @ np.linalg.solve(normal, fitted.T @ off[good])
        away = np.abs(off - curve)
        good = found & (away < limit)
        if good.all() and away.max() < 1.2:
            return place, good
    for order in (np.arange(at.size), np.arange(at.size)[::-1]):
        _readmit(at, off, found, good, order)
    return np.where(good, place, expected + curve), good


def _readmit(
    at: Array, off: Array, found: npt.NDArray[np.bool_], good: npt.NDArray[np.bool_], order: npt.NDArray[np.int64]
) -> None:
    """Take edges at the end of a ruler back where the warp goes astray ever more from edge to edge.

    A scan that settles late does that; ``good`` is changed in place.
    """
    first = int(np.argmax(good[order]))
    for position in range(first - 1, max(first - 5, -1), -1):
        edge, one, two = order[position], order[position + 1], order[position + 2]
        foretold = off[one] + (off[one] - off[two]) * (at[edge] - at[one]) / (at[one] - at[two])
        if not (found[edge] and good[one] and good[two] and abs(off[edge] - foretold) < READMITTED):
            return
        good[edge] = True


def _refine(
    strip: Strip,
    at: Array,
    sign: Array,
    place: Array,
    found: npt.NDArray[np.bool_],
    base: Array,
    swing: Array,
) -> Bars:
    """Fit step shape, levels and edge places in turn."""
    good = found
    powers = _powers(strip.mean.size)
    fields = strip.axis == "v"
    width = lag = 0.0
    moved = math.inf
    for turn in range(MOST_TURNS):
        run = np.flatnonzero(good)
        first, last = place[run[0]] - 3.0, place[run[-1]] + 3.0
        low, high = max(math.ceil(first), 0), min(math.floor(last), strip.mean.size - 1)
        part, inner = slice(low, high + 1), slice(run[0], run[-1] + 1)
        mean, scale = strip.mean[part], powers[part] @ swing
        train = StepTrain(low, high, place[inner], sign[inner], lag)
        if turn == 0:
            width = spot_width((mean - powers[part] @ base) / scale, train)
        if moved > REFITTED:
            fitted = fit_shape(mean, powers[part], scale, train, width, fields=fields)
            # A width that was far off calls for another fit as much as a lag does.
            moved = max(abs(fitted.lag - lag), 0.4 * abs(fitted.width / width - 1.0))
            width, lag, base, swing, left = fitted.width, fitted.lag, fitted.base, fitted.swing, fitted.left
            scale = powers[part] @ swing
        else:
            left = mean - powers[part] @ base - scale * fitted.shape.wave(train)
            left -= fitted.lift * (np.arange(low, high + 1) % 2)
            moved = 0.0
        whole = StepTrain(low, high, place, sign, train.lag)
        shifts = fitted.shape.shifts(left / scale, whole)
        place = np.where(good, place + np.minimum(np.maximum(shifts.move, -0.7), 0.7), place)
        good = good & (np.abs(shifts.move) < 1.5) & (shifts.rest < 0.25)
        if np.count_nonzero(good) < 10:
            raise Unreadable(f"the bars of the {strip.ruler.side} ruler do not stand in their order")
        moved = max(moved, float(np.abs(shifts.move[good]).max()))
        if turn > 0 and moved < SETTLED:
            break
    noise = fitted.shape.shifts(strip.scatter[part] / scale, whole).move
    return Bars(strip, at, sign, place, good, noise, shifts.doubt, fitted.shape, base, swing, lag, fitted.lift)


def sharpen(bars: list[Bars]) -> list[Bars]:
    """Make the most of the rulers of one direction before a look at a fold.

    They are given the step shape they share, finer than the first fit has it, and levels that only bars well
    inside the picture have a say in.
    """
    lefts, levelled = [], []
    for one in bars:
        steady = np.flatnonzero(one.good & (one.at > INNER) & (one.at < 1.0 - INNER))
        if steady.size < 10:
            raise Unreadable(f"too little of the {one.strip.ruler.side} ruler was read to look for a fold")
        inner = slice(steady[0], steady[-1] + 1)
        low, high = math.ceil(one.place[steady[0]] - 3.0), math.floor(one.place[steady[-1]] + 3.0)
        train = StepTrain(low, high, one.place[inner], one.sign[inner], one.lag)
        wave = one.shape.wave(train)
        relevelled = _relevel(one, low, high, wave)
        levelled.append(relevelled)
        lefts.append((relevelled.level_of(low, high + 1) - wave, train))
    shape = finer_shape(bars[0].shape, lefts)
    return [replace(one, shape=shape) for one in levelled]


def _relevel(bars: Bars, low: int, high: int, wave: Array) -> Bars:
    """Levels along the strip from the samples ``low`` to ``high``; along the line they change evenly."""
    count = 2 if bars.strip.axis == "h" else 3
    powers = _powers(bars.strip.mean.size)[low : high + 1, :count]
    design = np.concatenate([powers, powers * wave[:, None]], axis=1)
    lifted = bars.strip.mean[low : high + 1] - bars.lift * (np.arange(low, high + 1) % 2)
    found = np.linalg.lstsq(design, lifted, rcond=None)[0]
    rest = np.zeros(3 - count)
    return replace(bars, base=np.concatenate([found[:count], rest]), swing=np.concatenate([found[count:], rest]))
