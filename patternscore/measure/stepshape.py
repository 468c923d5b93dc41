"""The common shape of the steps of a train of bars, and the places of the steps, by least squares."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr, ndtri

Array = npt.NDArray[np.float64]
BEFORE, AFTER = 8, 14  # samples before and after a step over which its shape is free
FINE = 8  # points per sample of the tabulated shape
REACH = 16  # samples either side that the table covers
WINDOW = 4  # samples either side of an edge that tell its place
STIFFNESS = 0.5  # of the free correction, in units of one bar edge
NARROWEST, WIDEST = 0.1, 6.0  # samples
LEVEL_DOUBT = 0.01  # error of a level, of the step, that even a clean picture has
SHARP = 0.3  # samples: how a steeper step runs between samples is not known, so levels there say little
PLACE_DOUBT = 0.29  # samples: a place known to lie between two samples, and no better


@dataclass(frozen=True, slots=True, eq=False)
class Shifts:
    """Moves of steps in samples, rms left about each after its move, and doubt of its place in samples."""

    move: Array
    rest: Array
    doubt: Array


@dataclass(frozen=True, slots=True, eq=False)
class StepTrain:
    """Steps up and down over the samples ``low`` to ``high``.

    Attributes
    ----------
    place, sign : (k,) float64
        Where the steps are, and +1 (up) or -1 (down).
    lag : float
        How much later than their number says odd samples were taken: the offset between fields.
    """

    low: int
    high: int
    place: Array
    sign: Array
    lag: float = 0.0

    @property
    def count(self) -> int:
        """Number of samples."""
        return self.high - self.low + 1

    def taken(self, index: npt.NDArray[np.int64]) -> Array:
        """Coordinates at which samples were taken."""
        return index + self.lag * (index % 2) if self.lag else index.astype(np.float64)

    @property
    def start(self) -> float:
        """Level before the first step: 0 dark, 1 light."""
        return 0.0 if self.sign[0] > 0 else 1.0


@dataclass(frozen=True, slots=True, eq=False)
class StepShape:
    """A step from 0 to 1, tabulated every 1/8 sample over 16 samples either side of its half-way point.

    Attributes
    ----------
    table : (257,) float64
        The step.
    width : float
        Standard deviation in samples of the Gaussian spot nearest to it.
    """

    table: Array
    width: float

    @classmethod
    def gaussian(cls, width: float) -> StepShape:
        """Step seen by a Gaussian spot of a standard deviation in samples."""
        return cls(np.asarray(ndtr(_taus() / width)), width)

    @classmethod
    def from_spread(cls, spread: Array) -> StepShape:
        """Step that a centred line spread, one value a sample, makes of an ideal edge."""
        area = float(spread.sum())
        index = np.arange(spread.size) - (spread.size - 1) / 2
        table = np.interp(_taus(), index + 0.5, np.cumsum(spread) / area, left=0.0, right=1.0)
        middle = float(spread @ index) / area
        variance = float(spread @ (index - middle) ** 2) / area
        return cls(table, math.sqrt(max(variance, NARROWEST**2)))

    def at(self, tau: Array) -> Array:
        """Value of the step at distances in samples after its half-way point."""
        return _between(self.table, tau)

    def slope(self, tau: Array) -> Array:
        """Slope per sample at distances in samples after the half-way point."""
        rise = np.zeros_like(self.table)
        rise[2:-2] = (self.table[4:] - self.table[:-4]) * (FINE / 4.0)
        return _between(rise, tau)

    def without_spot(self, spot: float, *, limited: bool) -> StepShape:
        """Step that the response alone would give: a Gaussian spot taken out of the step of both.

        Along the line (``limited``) the grabber lets nothing through near half the sample clock, where the
        spot could not be taken out; across the lines the rest is taken for Gaussian.
        """
        if not limited:
            return StepShape.gaussian(math.sqrt(max(self.width**2 - spot**2, 0.01)))
        count = self.table.size - 1
        omega = 2.0 * np.pi * np.fft.rfftfreq(count, 1.0 / FINE)
        fade = np.minimum(np.maximum((1.05 * np.pi - omega) / (0.3 * np.pi), 0.0), 1.0)
        gain = np.minimum(np.exp(np.minimum(0.5 * (spot * omega) ** 2, 5.0)), 12.0)
        gain *= np.sin(0.5 * np.pi * fade) ** 2
        steps = np.fft.irfft(np.fft.rfft(np.diff(self.table)) * gain, count)
        width = math.sqrt(max(self.width**2 - spot**2, NARROWEST**2))
        return StepShape(np.concatenate([[0.0], np.cumsum(steps)]), width)

    def wave(self, train: StepTrain) -> Array:
        """Sum of the train's steps over its samples, from dark (0) to light (1)."""
        low, count, place, sign = train.low, train.count, train.place, train.sign
        total = np.zeros(count + 1)
        # Beyond the table a step is complete: a running sum; within it, the table.
        done = np.clip(np.floor(place).astype(np.int64) + REACH - low, 0, count)
        np.add.at(total, done, sign)
        wave = train.start + np.cumsum(total)[:count]
        return np.asarray(wave + _summed(train, self.at, REACH))

    def widening(self, tau: Array) -> Array:
        """Change of the step per unit of width, were it Gaussian."""
        z = tau / self.width
        return np.asarray(z * np.exp(-0.5 * z * z) * (-1.0 / (self.width * math.sqrt(2.0 * math.pi))))

    def shifts(self, left: Array, train: StepTrain) -> Shifts:
        """Find the move of each step that takes up what is left of a train's bars, 0 to 1.

        Where samples fall beside a step steeper than their spacing, they do not tell where between them it
        is; its place then stays, and the doubt says so.
        """
        index = np.rint(train.place).astype(np.int64)[:, None] + np.arange(-WINDOW, WINDOW + 1)[None, :]
        slope = -self.slope(train.taken(index) - train.place[:, None]) * train.sign[:, None]
        inside = (index >= train.low) & (index <= train.high)
        slope *= inside
        values = left[np.minimum(np.maximum(index - train.low, 0), left.size - 1)] * inside
        level = LEVEL_DOUBT * (1.0 + 30.0 * math.exp(-((self.width / SHARP) ** 6)))
        energy = np.sum(slope * slope, 1) + (level / PLACE_DOUBT) ** 2
        move = np.sum(slope * values, 1) / energy
        rest = values - slope * move[:, None]
        return Shifts(move, np.sqrt(np.mean(rest * rest, 1)), level / np.sqrt(energy))


def _between(table: Array, tau: Array) -> Array:
    """Look a table of a step up between its points."""
    where = np.minimum(np.maximum(tau * FINE + REACH * FINE, 0.0), table.size - 1.0)
    cell = where.astype(np.intp)
    rise = np.empty_like(table)
    np.subtract(table[1:], table[:-1], out=rise[:-1])
    rise[-1] = 0.0
    return np.asarray(table[cell] + (where - cell) * rise[cell])


def _summed(train: StepTrain, values: Callable[[Array], Array], reach: int) -> Array:
    """Sum of signed values about every step, up to ``reach`` samples from it."""
    index = np.floor(train.place).astype(np.int64)[:, None] + np.arange(-reach, reach)[None, :]
    signed = values(train.taken(index) - train.place[:, None]) * train.sign[:, None]
    # Steps lie within the samples, so that what is summed reaches at most ``reach`` beyond them.
    count = train.count
    padded = np.bincount((index - (train.low - reach - 1)).ravel(), signed.ravel(), count + 2 * reach + 2)
    return np.asarray(padded[reach + 1 : reach + 1 + count], dtype=np.float64)


def _taus() -> Array:
    return np.arange(2 * REACH * FINE + 1) / FINE - REACH


@dataclass(frozen=True, slots=True, eq=False)
class ShapeFit:
    """Step shape and levels of a train of bars.

    Attributes
    ----------
    shape : StepShape
        The common step.
    width, lag : float
        Width of the spot and lag of odd samples to try next.
    base, swing : (m,) float64
        Polynomials of the level of dark bars and of light above dark, IRE.
    lift : float
        Level of odd samples above the others, IRE.
    left : (n,) float64
        What all this leaves, IRE.
    """

    shape: StepShape
    width: float
    lag: float
    base: Array
    swing: Array
    lift: float
    left: Array


def fit_shape(mean: Array, powers: Array, scale: Array, train: StepTrain, width: float, *, fields: bool) -> ShapeFit:
    """Fit the common shape of steps at known places, together with the levels they run between.

    Parameters
    ----------
    mean : (n,) float64
        Bars over the train's samples, IRE.
    powers : (n, m) float64
        Polynomials along the strip that the levels are made of.
    scale : (n,) float64
        Light less dark as known so far, IRE.
    train : StepTrain
        Where the steps are.
    width : float
        Standard deviation in samples of the Gaussian step to which a correction is fitted, continuous and
        linear between whole samples.
    fields : bool
        Whether odd samples are of another field, with a lag and a lift to be fitted.
    """
    ground = StepShape.gaussian(width)
    wave = ground.wave(train)
    hats = _hats(train) * scale[:, None]
    count = powers.shape[1]
    reach = min(max(math.ceil(4 * width), 2), REACH)
    widening = _summed(train, ground.widening, reach) * scale
    columns = [powers, powers * wave[:, None], widening[:, None]]
    if fields:
        odd = (np.arange(train.low, train.high + 1) % 2).astype(np.float64)
        steep = _summed(train, ground.slope, REACH) * scale
        columns += [np.stack([odd, odd * steep, (1.0 - odd) * steep], axis=1)]
    first = 2 * count + columns[2].shape[1] + (3 if fields else 0)
    design = np.concatenate([*columns, hats], axis=1)
    normal = design.T @ design
    # The correction is held to small values, so that levels and shape come apart even where every bar is
    # narrower than the step, and so that what a wider spot explains is given to the spot.
    held = np.full(normal.shape[0], 1e-6)
    held[first:] = STIFFNESS * float(np.mean(scale**2))
    normal[np.diag_indices(normal.shape[0])] += held
    found = np.linalg.solve(normal, design.T @ mean)
    wider = float(found[2 * count])
    lift, later = 0.0, 0.0
    if fields:
        lift, later = float(found[first - 3]), float(found[first - 2] - found[first - 1])
    correction = np.concatenate([[0.0], found[first:], [0.0]])
    taus = _taus()
    table = ground.table + wider * ground.widening(taus)
    table += np.interp(taus, np.arange(-BEFORE, AFTER + 1), correction)
    next_width = min(max(width + wider, 0.7 * width, NARROWEST), 1.3 * width, WIDEST)
    return ShapeFit(
        StepShape(table, next_width),
        next_width,
        train.lag + min(max(later, -0.3), 0.3),
        found[:count],
        found[count : 2 * count],
        lift,
        mean - np.asarray(design @ found),
    )


def _hats(train: StepTrain) -> Array:
    """Triangles one sample apart about every step, signed and summed: (n, BEFORE + AFTER - 1)."""
    place = train.place[:, None]
    index = np.ceil(train.place - BEFORE).astype(np.int64)[:, None] + np.arange(BEFORE + AFTER)[None, :]
    where = np.minimum(np.maximum(train.taken(index) - place + BEFORE, 0.0), BEFORE + AFTER - 1e-9)
    cell = where.astype(np.int64)
    part = where - cell
    nodes = BEFORE + AFTER + 1
    flat = ((index - (train.low - AFTER - 1)) * nodes + cell).ravel()
    signed = np.broadcast_to(train.sign[:, None], index.shape).ravel()
    later = part.ravel() * signed
    size = (train.count + 2 * AFTER + 2) * nodes
    hats = np.bincount(flat, signed - later, size) + np.bincount(flat + 1, later, size)[:size]
    return np.asarray(hats.reshape(-1, nodes)[AFTER + 1 : AFTER + 1 + train.count, 1:-1])


def spot_width(flat: Array, train: StepTrain) -> float:
    """Width in samples of the Gaussian spot as steep as the steps of bars between 0 and 1."""
    index = np.minimum(np.maximum(np.floor(train.place).astype(np.int64) - train.low, 1), flat.size - 3)
    rises = np.sort((flat[index + 2] - flat[index - 1]) * train.sign)  # over three samples
    rise = float(rises[rises.size // 2])
    half = min(max(rise / 2.0, 0.08), 0.498)
    return max(1.5 / float(ndtri(0.5 + half)), NARROWEST)


def finer_shape(shape: StepShape, lefts: list[tuple[Array, StepTrain]]) -> StepShape:
    """Correct a step by what it leaves of trains of bars, to half a sample and smoothly.

    Parameters
    ----------
    shape : StepShape
        The step so far.
    lefts : list of (n,) float64 and StepTrain
        What each train leaves, of its contrast, and the train.
    """
    nodes = 2 * (BEFORE + AFTER) + 3
    normal = 0.05 * np.eye(nodes)
    right = np.zeros(nodes)
    for left, train in lefts:
        design = _splines(train, nodes)
        normal += design.T @ design
        right += design.T @ left
    taus = _taus()
    basis = cubic_splines((taus + BEFORE) * 2.0, nodes)
    return StepShape(shape.table + basis @ np.linalg.solve(normal, right), shape.width)


def _splines(train: StepTrain, nodes: int) -> Array:
    """Cubic splines half a sample apart about every step, signed and summed: (n, nodes)."""
    index = np.ceil(train.place - BEFORE).astype(np.int64)[:, None] + np.arange(BEFORE + AFTER)[None, :]
    inside = (index >= train.low) & (index <= train.high)
    values = cubic_splines(((train.taken(index) - train.place[:, None] + BEFORE) * 2.0)[inside], nodes)
    signed = values * np.broadcast_to(train.sign[:, None], index.shape)[inside][:, None]
    design = np.zeros((train.count, nodes))
    np.add.at(design, index[inside] - train.low, signed)
    return design


def cubic_splines(where: Array, nodes: int) -> Array:
    """Uniform cubic B-splines, a node apart, from 0 on: (n, nodes); nothing beyond the ends."""
    inside = (where >= 0) & (where < nodes - 3)
    cell = np.where(inside, where, 0.0).astype(np.int64)
    u = np.where(inside, where - cell, 0.0)
    rest = 1.0 - u
    weights = np.stack([rest**3, 3 * u**3 - 6 * u**2 + 4, 3 * rest**3 - 6 * rest**2 + 4, u**3], axis=-1)
    basis = np.zeros((where.size, nodes))
    np.put_along_axis(basis, cell[:, None] + np.arange(4)[None, :], weights / 6.0 * inside[:, None], axis=1)
    return basis
