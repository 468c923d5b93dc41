"""The scan as a function of time: a smooth curve through the bar edges of the rulers of one direction.

Both rulers of a direction see one sweep, but at opposite sides of the picture. The place of a bar edge is
T(x) plus, with opposite signs on the two sides, a cubic in x for whatever turns, leans or widens the picture
from one side to the other. T is a cubic spline, and its inverse is the scan position p(t).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.located import Crossings
from patternscore.measure.ruler import Bars
from patternscore.measure.rulerband import Axis, middle
from patternscore.reading import Estimate

Array = npt.NDArray[np.float64]
PIECES = {"h": 20, "v": 15}  # spline pieces across the picture
CELLS = {"h": 16, "v": 12}  # what "local" means for linearity
ASTRAY = 0.6  # samples or lines: no edge nearer to the curve than this is left out
SIDE_TERMS = 4
LINE_DOUBT = 0.2  # lines: doubt of a thin line sampled without a filter
# Samples or lines: what third and fourth differences of the spline may come to, and what they usually do: the
# latter is called for where edges are known to a part of a line only.
BENDS = ((3, 1.0), (4, 0.1))
USUAL_BENDS = ((3, 0.25), (4, 0.02))
VAGUE = 0.1  # samples or lines: doubt of most edges from which on that is so
CLEAN = 0.005  # samples or lines: error of a bar edge that even a clean picture has
MARGIN = 0.08  # picture fraction beyond the edges that the curve may be asked for


@dataclass(frozen=True, slots=True, eq=False)
class ScanMap:
    """Scan of one direction, mean of the two sides of the picture.

    Attributes
    ----------
    axis : {"h", "v"}
        Along the line (frame coordinate in samples) or down the frame (in lines).
    coefficients : (m,) float64
        Of the spline, then of the cubic between the sides.
    late : float
        How much later than falling edges rising ones cross half level, halved: clipping and gamma move them
        apart.
    covariance : (m, m) float64
        Of the coefficients, per unit variance of a bar edge.
    edge_sigma : float
        Standard deviation of one bar edge, samples or lines.
    common_sigma : float
        Standard deviation of a shift of all bar edges, as line jitter gives it.
    at, place, left : (k,) float64
        Bar edges used: picture fraction, frame coordinate, and departure from the curve.
    first, last : float
        Picture fractions of the first and the last certified bar edge.
    """

    axis: Axis
    coefficients: Array
    late: float
    covariance: Array
    edge_sigma: float
    common_sigma: float
    at: Array
    place: Array
    left: Array
    first: float
    last: float

    def time(self, x: npt.ArrayLike, side: float = 0.0) -> Array:
        """Frame coordinate at which the scan reaches picture fractions.

        ``side`` is 0 for the mean of the picture, -1 and +1 for the first and second ruler.
        """
        fractions = np.atleast_1d(np.asarray(x, dtype=np.float64))
        return np.asarray(_design(fractions, np.full(fractions.size, side), self.axis) @ self.coefficients)

    def places(self, x: Array, side: float) -> Array:
        """As ``time``, quick for fractions that are asked for again and again."""
        return np.asarray(_of_edges(x.tobytes(), side, self.axis) @ self.coefficients)

    def linear(self, x: tuple[float, ...], weights: tuple[float, ...]) -> Estimate:
        """Weighted sum of frame coordinates, with its standard deviation."""
        row = np.asarray(weights) @ _fixed(x, self.axis)
        spread = self.edge_sigma * float(np.sqrt(np.clip(row @ self.covariance @ row, 0.0, None)))
        return Estimate(float(row @ self.coefficients), spread)

    def speeds(self) -> tuple[Array, Array]:
        """Scan speed of each cell over the mean, and its standard deviation."""
        count = CELLS[self.axis]
        across = np.diff(_fixed(tuple(wall / count for wall in range(count + 1)), self.axis), axis=0)
        taken = across @ self.coefficients
        spread = self.edge_sigma * np.sqrt(np.sum(across @ self.covariance * across, axis=1))
        speed = 1.0 / taken
        mean = speed.mean()
        return speed / mean, spread / taken * speed / mean


def _spline(x: Array, pieces: int) -> Array:
    """Uniform cubic B-splines at fractions; beyond the ends the last cubic runs on: (n, pieces + 3)."""
    where = x * pieces
    cell = np.clip(np.floor(where), 0, pieces - 1).astype(np.int64)
    u = where - cell
    rest = 1.0 - u
    weights = np.stack([rest**3, 3 * u**3 - 6 * u**2 + 4, 3 * rest**3 - 6 * rest**2 + 4, u**3], axis=1) / 6.0
    basis = np.zeros((x.size, pieces + 3))
    np.put_along_axis(basis, cell[:, None] + np.arange(4)[None, :], weights, axis=1)
    return basis


def _design(x: Array, side: Array, axis: Axis) -> Array:
    u = 2.0 * x - 1.0
    return np.concatenate([_spline(x, PIECES[axis]), side[:, None] * np.stack([u**0, u, u * u, u**3], 1)], axis=1)


@lru_cache(maxsize=64)
def _fixed(x: tuple[float, ...], axis: Axis) -> Array:
    """Design of the picture's mean at fractions that are asked for again and again."""
    return _design(np.array(x), np.zeros(len(x)), axis)


@lru_cache(maxsize=64)
def _of_edges(at: bytes, side: float, axis: Axis) -> Array:
    """Design of a ruler's edges, given as the bytes of their fractions; they are mostly the same ones."""
    fractions = np.frombuffer(at)
    return _design(fractions, np.full(fractions.size, side), axis)


@lru_cache
def _penalty(axis: Axis, vague: bool, rulers: int) -> Array:
    """Weights on the spline's differences, and on what nothing tells: sides of one ruler, an unseen bow."""
    size = PIECES[axis] + 3
    penalty = np.diag(np.repeat([0.0, 0.0 if rulers > 1 else 1.0, 0.0, 1e-2], [size, SIDE_TERMS, 1, 1]))
    for order, usual in USUAL_BENDS if vague else BENDS:
        rough = np.diff(np.eye(size), order, axis=0) / usual
        penalty[:size, :size] += rough.T @ rough
    return penalty


@dataclass(frozen=True, slots=True, eq=False)
class _Marks:
    """Marks to draw the curve through: design, frame coordinate, error and whether each is good."""

    design: Array
    place: Array
    error: Array
    good: npt.NDArray[np.bool_]


def _of_crosshatch(crossings: Crossings, axis: Axis, away: float) -> _Marks:
    """Crosshatch crossings as marks: they share rows (columns), so that each counts for a part of one."""
    along = 0 if axis == "h" else 1
    at, side = crossings.xy[:, along], (crossings.xy[:, 1 - along] - 0.5) / away
    _, row, count = np.unique(crossings.index[:, along], return_inverse=True, return_counts=True)
    design = np.concatenate([_design(at, side, axis), np.zeros((at.size, 1)), _bow(at, side)], axis=1)
    error = np.sqrt((LINE_DOUBT**2 + crossings.sigma[:, along] ** 2) * count[row])
    return _Marks(design, crossings.found[:, along], error, np.ones(at.size, dtype=bool))


def _bow(at: Array, side: Array) -> Array:
    """Bulge of the picture's middle against its sides, (n, 1)."""
    return np.asarray(((2.0 * at - 1.0) * (1.0 - side**2))[:, None])


def _of_rulers(bars: list[Bars], axis: Axis, spread: float) -> _Marks:
    """Bar edges as marks, each with its error from noise and doubt."""
    sides = [float(np.sign(one.strip.across - 0.5)) if len(bars) > 1 else 0.0 for one in bars]
    curve = [_of_edges(one.at.tobytes(), side, axis) for one, side in zip(bars, sides, strict=True)]
    sign = np.concatenate([one.sign for one in bars])[:, None]
    parts = [np.concatenate(curve), sign, np.zeros_like(sign)]
    doubt = np.concatenate([one.doubt for one in bars])
    return _Marks(
        np.concatenate(parts, axis=1),
        np.concatenate([one.place for one in bars]),
        np.sqrt(doubt**2 + spread**2 + CLEAN**2),
        np.concatenate([one.good for one in bars]),
    )


def fit_scan(bars: list[Bars], crossings: Crossings | None = None) -> ScanMap:
    """Fit the scan through the bar edges of the rulers of one direction.

    Parameters
    ----------
    bars : list of Bars
        One or two rulers of one direction.
    crossings : Crossings, optional
        Of the crosshatch, which help out where bar edges are known to a part of a line only.

    Raises
    ------
    Unreadable
        If fewer edges agree than half the rulers' range needs.
    """
    axis = bars[0].strip.axis
    parts = [one.noise[one.good] for one in bars]
    # An edge's error: what noise does to it, measured between halves of the bands, and its doubt.
    spread = float(np.sqrt(np.mean(np.concatenate([part - part.mean() for part in parts]) ** 2)))
    common = float(np.sqrt(np.mean([part.mean() ** 2 for part in parts]) / len(parts)))
    marks = _of_rulers(bars, axis, spread)
    vague = middle(marks.error) > VAGUE
    count = marks.place.size
    if vague and crossings is not None:
        more = _of_crosshatch(crossings, axis, abs(bars[0].strip.across - 0.5))
        joined = zip(
            (marks.design, marks.place, marks.error, marks.good),
            (more.design, more.place, more.error, more.good),
            strict=True,
        )
        marks = _Marks(*(np.concatenate(pair) for pair in joined))
    coefficients, gain, left, used = _draw(marks, _penalty(axis, vague, len(bars)))
    on_rulers = np.flatnonzero(used[:count])
    if on_rulers.size < 10:
        raise Unreadable("the bars of the rulers do not run in a smooth scan")
    at = np.concatenate([one.at for one in bars])[on_rulers]
    return ScanMap(
        axis,
        coefficients[:-2],
        float(coefficients[-2]),
        (gain[:, :count] @ gain[:, :count].T)[:-2, :-2],
        spread,
        common,
        at,
        marks.place[on_rulers],
        left[on_rulers],
        float(at.min()),
        float(at.max()),
    )


def _draw(marks: _Marks, penalty: Array) -> tuple[Array, Array, Array, npt.NDArray[np.bool_]]:
    """Draw the curve and leave out marks far from it: coefficients, their slopes by the marks, departures, use."""
    used = marks.good
    for _ in range(3):
        weighted = marks.design * (used / marks.error**2)[:, None]
        inverse = np.linalg.inv(weighted.T @ marks.design + penalty)
        coefficients = inverse @ (weighted.T @ marks.place)
        left = marks.place - marks.design @ coefficients
        off = np.abs(left) / marks.error
        limit = max(5.0 * middle(off[used]), 4.0)
        fresh = marks.good & ((off < limit) | (np.abs(left) < ASTRAY))
        if np.array_equal(fresh, used):
            break
        used = fresh
    return coefficients, inverse @ weighted.T, left, used


def linearity(scan: ScanMap) -> Estimate:
    """Half the spread of the local scan speed over its mean, %.

    The largest and the smallest of many speeds that noise moves scatter less from grab to grab than two of
    them picked out beforehand would: where noise decides which they are, half their joint error is left.
    """
    speeds, spread = scan.speeds()
    high, low = int(np.argmax(speeds)), int(np.argmin(speeds))
    value = 50.0 * float(speeds[high] - speeds[low])
    joint = 50.0 * float(np.hypot(spread[high], spread[low]))
    return Estimate(value, joint * (0.5 if value < 4 * joint else 1.0))


def crush(scan: ScanMap, start: bool) -> Estimate:
    """Scan speed lost in the first or the last 5 % of the picture against the middle half, %."""
    outer = (0.05, 0.0) if start else (1.0, 0.95)
    edge = scan.linear(outer, (1.0, -1.0))
    middle = scan.linear((0.75, 0.25), (1.0, -1.0))
    ratio = 0.05 / edge.value * middle.value / 0.5
    spread = ratio * float(np.hypot(edge.sigma / edge.value, middle.sigma / middle.value))
    return Estimate(100.0 * (1.0 - ratio), 100.0 * spread)
