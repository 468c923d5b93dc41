"""Reading a ruler: its band straightened into one line of bars, and the place of every bar edge.

The band is followed along the picture with the located warp and averaged across, so noise and line jitter
average out. The edges are then fitted together: the bars are a sum of steps of one common shape, so each
edge is freed from the tails of its neighbours.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Literal

import cv2
import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.measure.stepshape import StepShape, StepTrain, finer_shape, fit_shape, spot_width
from patternscore.plan import Ruler
from patternscore.warp import Warp

Array = npt.NDArray[np.float64]
Axis = Literal["h", "v"]
USED = 0.72  # part of the band's depth that is averaged; the rest is margin for tilt and for the spot
FEWEST = 4  # rows that a mean needs
MOST_TURNS = 6
SETTLED = 0.02  # samples: edges that move less than this need no further turn
CLEAR = 2.5  # samples between the edge of blanking and a bar edge that is not disturbed by it
READMITTED = 1.5  # samples by which an edge at the end of a ruler may leave the run of the warp's error
REACH = 5  # samples either side of its expected place within which an edge is sought


@dataclass(frozen=True, slots=True, eq=False)
class Strip:
    """A ruler's band, straightened; index n of every array along it is frame coordinate n.

    Attributes
    ----------
    axis : {"h", "v"}
        "h": along the line, in samples; "v": down the frame, in lines.
    across : float
        Middle of the band, picture fraction across the ruler's axis.
    covered : (float, float)
        Picture fractions across between which its rows were taken.
    tilt : float
        By how much the bars lean within the band, samples, or the band runs aslant.
    mean : (n,) float64
        Mean of the rows, IRE.
    scatter : (n,) float64
        Half the difference of the means of two halves of the rows: what noise does to ``mean``.
    seen : (n,) bool
        Where enough rows lie in the frame.
    expected : (boundaries,) float64
        Where the warp puts the ruler's boundaries.
    """

    ruler: Ruler
    axis: Axis
    across: float
    covered: tuple[float, float]
    tilt: float
    mean: Array
    scatter: Array
    seen: npt.NDArray[np.bool_]
    expected: Array


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
        count = self.strip.mean.size
        powers = np.polynomial.polynomial.polyvander(np.arange(count) * (2.0 / count) - 1.0, 2)
        lifted = self.strip.mean - powers @ self.base - self.lift * (np.arange(count) % 2)
        return np.asarray(lifted / (powers @ self.swing))

    @property
    def contrast(self) -> float:
        """Light less dark in the middle, IRE."""
        return float(self.swing[0])


def axis_of(ruler: Ruler) -> Axis:
    """Which way a ruler runs."""
    return "h" if ruler.side in ("top", "bottom") else "v"


@dataclass(frozen=True, slots=True)
class Bend:
    """A folded stretch: from ``turning`` to the near or far end of the frame the scan runs back.

    ``ratio`` is the backward over the forward speed; 0 leaves it open and takes the band at its turning point.
    """

    turning: float
    ratio: float
    far: bool

    def forward(self, index: Array) -> tuple[Array, Array]:
        """Forward coordinate that shows the same place, and the backward slowness (0 where forward)."""
        back = index > self.turning if self.far else index < self.turning
        shown = np.where(back, self.turning - self.ratio * (index - self.turning), index)
        return shown, np.where(back, -1.0 / self.ratio if self.ratio > 0 else 0.0, 1.0)


def straighten(frame: Frame, warp: Warp, ruler: Ruler, bend: Bend | None = None) -> Strip:
    """Follow a ruler's band through the frame and lay it straight.

    Parameters
    ----------
    frame : Frame
        The frame.
    warp : Warp
        Picture fractions to frame coordinates, good to a sample or so.
    ruler : Ruler
        The ruler.
    bend : Bend, optional
        A fold, where the band leans and bows the other way.

    Raises
    ------
    Unreadable
        If the band lies outside the frame.
    """
    axis = axis_of(ruler)
    along, count = (0, frame.samples) if axis == "h" else (1, frame.rows)
    limit = (frame.rows if axis == "h" else frame.samples) - 1
    middle = (ruler.band[0] + ruler.band[1]) / 2
    fractions = np.concatenate([np.linspace(-0.04, 1.04, 28), ruler.boundaries])
    points = np.full((fractions.size, 2), middle)
    points[:, along] = fractions
    found, slopes = warp.to_frame(points), warp.slopes(points)
    shear = slopes[:, along, 1 - along] / slopes[:, 1 - along, 1 - along]
    index = np.arange(count, dtype=np.float64)
    guide = found[:28, along]
    if np.any(np.diff(guide) <= 0):
        raise Unreadable(f"the {ruler.side} ruler could not be followed")
    followed, slow = bend.forward(index) if bend is not None else (index, np.ones(1))
    centre = np.interp(followed, guide, found[:28, 1 - along])
    lean = np.interp(followed, guide, shear[:28]) * slow
    depth = abs(ruler.band[1] - ruler.band[0]) * float(np.mean(slopes[:28, 1 - along, 1 - along]))
    half = max(int(depth * USED / 2), 2)
    steps = np.arange(-half, half + 1, dtype=np.float64)[:, None]
    # Whole rows are taken: what lies between two would share their noise.
    across_map = np.rint(centre[None, :] + steps).astype(np.float32)
    along_map = (index[None, :] + lean[None, :] * (across_map - centre[None, :])).astype(np.float32)
    maps = (along_map, across_map) if axis == "h" else (across_map, along_map)
    rows = cv2.remap(frame.luma, maps[0], maps[1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    inside = (across_map >= 0) & (across_map <= limit)
    used = _alike(rows, inside)
    mean, scatter, seen = _means(rows, used)
    if seen.sum() < 0.5 * count:
        raise Unreadable(f"the {ruler.side} ruler lies outside the frame")
    taken = steps[used.mean(1) > 0.5, 0] if used.any() else steps[:, 0]
    wide = (ruler.band[1] - ruler.band[0]) / depth
    covered = (middle + (taken.min() - 0.5) * wide, middle + (taken.max() + 0.5) * wide) if taken.size else ruler.band
    tilt = max(half * float(np.abs(lean).max()), 0.02 * float(np.ptp(centre)))
    return Strip(ruler, axis, middle, covered, tilt, mean, scatter, seen, found[28:, along])


def _alike(rows: npt.NDArray[np.float32], inside: npt.NDArray[np.bool_]) -> npt.NDArray[np.bool_]:
    """Where rows lie in the frame, less whole rows that do not show the bars: a fold may reach into the band."""
    usual_row = rows.mean(0) - rows.mean()
    centred = rows - rows.mean(1)[:, None]
    if inside.all():
        gain = centred @ usual_row / max(float(usual_row @ usual_row), 1e-3)
    else:
        shown = inside.astype(np.float32)
        gain = (centred * shown) @ usual_row / np.maximum(shown @ usual_row**2, 1e-3)
    usual = np.median(gain[inside.any(1)]) if inside.any() else 0.0
    alike = np.abs(gain - usual) < 0.35 * abs(usual)
    return inside if alike.all() else inside & alike[:, None]


def _means(rows: npt.NDArray[np.float32], inside: npt.NDArray[np.bool_]) -> tuple[Array, Array, npt.NDArray[np.bool_]]:
    """Mean of the rows, the scatter of the mean, and where there were rows enough.

    The halves are made of pairs of neighbouring rows, so that both hold as much of either field.
    """
    first = (np.arange(rows.shape[0]) // 2 % 2 == 0).astype(np.float32)
    split = np.stack([first, 1 - first])
    if inside.all():
        sums, counts = split @ rows, split.sum(1)[:, None] * np.ones((1, rows.shape[1]), dtype=np.float32)
    else:
        sums, counts = split @ (rows * inside), split @ inside.astype(np.float32)
    total = counts.sum(0)
    mean = sums.sum(0) / np.maximum(total, 1)
    each = sums / np.maximum(counts, 1)
    return mean.astype(np.float64), ((each[0] - each[1]) / 2).astype(np.float64), total >= FEWEST


@lru_cache(maxsize=32)
def transitions(ruler: Ruler) -> tuple[Array, Array]:
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
    base, swing = _levels(strip)
    u = _u(count)
    height = np.polynomial.polynomial.polyval(u, swing)
    flat = (strip.mean - np.polynomial.polynomial.polyval(u, base)) / height
    place, found = _crossings(flat, expected, sign)
    place, found = _agree(at, place, found, expected)
    if found.sum() < 12:
        raise Unreadable(f"the bars of the {strip.ruler.side} ruler do not stand in their order")
    return _refine(strip, at, sign, place, found, base, swing)


def _u(count: int) -> Array:
    return np.arange(count) * (2.0 / count) - 1.0


def _levels(strip: Strip) -> tuple[Array, Array]:
    """Levels of dark and light bars along the strip, from the middles of the bars."""
    middles = (strip.expected[1:] + strip.expected[:-1]) / 2
    count = strip.mean.size
    bits = np.asarray(strip.ruler.bits)
    use = (middles > 1) & (middles < count - 2) & strip.seen[np.clip(middles, 0, count - 1).astype(int)]
    # The outermost bars may be folded over; levels are taken from the others.
    use &= (np.arange(bits.size) >= 4) & (np.arange(bits.size) < bits.size - 4)
    values = np.interp(middles, np.arange(count), strip.mean)
    u = middles * (2.0 / count) - 1.0
    if (use & bits).sum() < 6 or (use & ~bits).sum() < 6:
        raise Unreadable(f"too little of the {strip.ruler.side} ruler lies in the frame")
    light = _parabola(u[use & bits], values[use & bits])
    dark = _parabola(u[use & ~bits], values[use & ~bits])
    swing = light - dark
    low = np.polynomial.polynomial.polyval(np.linspace(-1, 1, 9), swing).min()
    noise = float(np.sqrt(np.mean(strip.scatter**2)))
    if low < max(4.0, 4 * noise):
        raise Unreadable(f"the bars of the {strip.ruler.side} ruler cannot be told from its ground")
    return dark, swing


def _parabola(u: Array, values: Array) -> Array:
    """Least-squares parabola, lowest power first, with the curve held back where the reach is short."""
    design = np.stack([np.ones_like(u), u, u * u], 1)
    normal = design.T @ design + np.diag([0.0, 0.1, 1.0])
    return np.asarray(np.linalg.solve(normal, design.T @ values))


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
    design = np.polynomial.polynomial.polyvander(u, 3)
    off = place - expected
    good = found.copy()
    for limit in (3.0, 1.8, 1.2):
        if good.sum() < 8:
            return place, good
        curve = design @ np.linalg.lstsq(design[good], off[good], rcond=None)[0]
        good = found & (np.abs(off - curve) < limit)
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
    u = _u(strip.mean.size)
    powers = np.stack([np.ones_like(u), u, u * u], 1)
    fields = strip.axis == "v"
    width = lag = 0.0
    for turn in range(MOST_TURNS):
        run = np.flatnonzero(good)
        first, last = place[run[0]] - 3.0, place[run[-1]] + 3.0
        low, high = max(math.ceil(first), 0), min(math.floor(last), strip.mean.size - 1)
        part, inner = slice(low, high + 1), slice(run[0], run[-1] + 1)
        scale = (powers @ swing)[part]
        mean = strip.mean[part]
        train = StepTrain(low, high, place[inner], sign[inner], lag)
        if turn == 0:
            width = spot_width((mean - (powers @ base)[part]) / scale, train)
        fitted = fit_shape(mean, powers[part], scale, train, width, fields=fields)
        width, base, swing = fitted.width, fitted.base, fitted.swing
        scale = (powers @ swing)[part]
        whole = StepTrain(low, high, place, sign, lag)
        shifts = fitted.shape.shifts(fitted.left / scale, whole)
        lag = fitted.lag
        place = np.where(good, place + np.clip(shifts.move, -0.7, 0.7), place)
        good = good & (np.abs(shifts.move) < 1.5) & (shifts.rest < 0.25)
        if good.sum() < 10:
            raise Unreadable(f"the bars of the {strip.ruler.side} ruler do not stand in their order")
        if turn > 0 and np.abs(shifts.move[good]).max() < SETTLED:
            break
    noise = fitted.shape.shifts(strip.scatter[part] / scale, whole).move
    return Bars(strip, at, sign, place, good, noise, shifts.doubt, fitted.shape, base, swing, lag, fitted.lift)


def sharpen(bars: list[Bars]) -> list[Bars]:
    """Give the rulers of one direction the step shape they share, finer than the first fit has it."""
    lefts = []
    for one in bars:
        run = np.flatnonzero(one.good)
        inner = slice(run[0], run[-1] + 1)
        low = max(math.ceil(one.place[run[0]] - 3.0), 0)
        high = min(math.floor(one.place[run[-1]] + 3.0), one.strip.mean.size - 1)
        train = StepTrain(low, high, one.place[inner], one.sign[inner], one.lag)
        lefts.append((one.level[low : high + 1] - bars[0].shape.wave(train), train))
    shape = finer_shape(bars[0].shape, lefts)
    return [replace(one, shape=shape) for one in bars]
