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
NARROWEST, WIDEST = 0.2, 6.0  # samples


@dataclass(frozen=True, slots=True, eq=False)
class StepTrain:
    """Steps up and down over the samples ``low`` to ``high``: where, and +1 (up) or -1 (down)."""

    low: int
    high: int
    place: Array
    sign: Array

    @property
    def count(self) -> int:
        """Number of samples."""
        return self.high - self.low + 1

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
        where = (tau + REACH) * FINE
        cell = np.clip(where.astype(np.int64), 0, self.table.size - 2)
        part = np.clip(where - cell, 0.0, 1.0)
        lower = self.table[cell]
        return np.asarray(lower + part * (self.table[cell + 1] - lower))

    def slope(self, tau: Array) -> Array:
        """Slope per sample at distances in samples after the half-way point."""
        return self.at(tau + 0.25) * 2.0 - self.at(tau - 0.25) * 2.0

    def wave(self, train: StepTrain) -> Array:
        """Sum of the train's steps over its samples, from dark (0) to light (1)."""
        low, count, place, sign = train.low, train.count, train.place, train.sign
        total = np.zeros(count + 1)
        # Beyond the table a step is complete: a running sum; within it, the table.
        done = np.clip(np.floor(place).astype(np.int64) + REACH - low, 0, count)
        np.add.at(total, done, sign)
        wave = train.start + np.cumsum(total)[:count]
        return np.asarray(wave + _summed(train, self.at, REACH))

    def widening(self, train: StepTrain) -> Array:
        """Change of the wave per unit of width, were the step Gaussian."""

        def change(tau: Array) -> Array:
            z = tau / self.width
            return np.asarray(z * np.exp(-0.5 * z * z) * (-1.0 / (self.width * math.sqrt(2.0 * math.pi))))

        return _summed(train, change, min(max(math.ceil(4 * self.width), 2), REACH))

    def shifts(self, left: Array, low: int, place: Array, sign: Array) -> tuple[Array, Array]:
        """Move that each step needs to take up what is left, and the rms left about it after the move."""
        index = np.rint(place).astype(np.int64)[:, None] + np.arange(-WINDOW, WINDOW + 1)[None, :]
        slope = -self.slope(index - place[:, None]) * sign[:, None]
        inside = (index >= low) & (index < low + left.size)
        values = np.where(inside, left[np.clip(index - low, 0, left.size - 1)], 0.0)
        slope = np.where(inside, slope, 0.0)
        energy = np.maximum(np.sum(slope * slope, 1), 1e-6)
        move = np.sum(slope * values, 1) / energy
        rest = values - slope * move[:, None]
        return move, np.sqrt(np.mean(rest * rest, 1))


def _summed(train: StepTrain, values: Callable[[Array], Array], reach: int) -> Array:
    """Sum of signed values about every step, up to ``reach`` samples from it."""
    index = np.floor(train.place).astype(np.int64)[:, None] + np.arange(-reach, reach)[None, :] - train.low
    signed = values(index + train.low - train.place[:, None]) * train.sign[:, None]
    inside = (index >= 0) & (index < train.count)
    return np.bincount(index[inside], weights=signed[inside], minlength=train.count)


def _taus() -> Array:
    return np.arange(2 * REACH * FINE + 1) / FINE - REACH


@dataclass(frozen=True, slots=True, eq=False)
class ShapeFit:
    """Step shape, the width to try next, levels of dark and of light above dark, and what they leave, IRE."""

    shape: StepShape
    width: float
    base: Array
    swing: Array
    left: Array


def fit_shape(mean: Array, powers: Array, scale: Array, train: StepTrain, width: float) -> ShapeFit:
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
    """
    ground = StepShape.gaussian(width)
    wave = ground.wave(train)
    hats = _hats(train) * scale[:, None]
    widening = ground.widening(train) * scale
    design = np.concatenate([powers, powers * wave[:, None], widening[:, None], hats], axis=1)
    count = 2 * powers.shape[1]
    normal = design.T @ design
    # The correction is held to small values, so that levels and shape come apart even where every bar is
    # narrower than the step, and so that what a wider spot explains is given to the spot.
    held = np.full(normal.shape[0], 1e-6)
    held[count + 1 :] = STIFFNESS * float(np.mean(scale**2))
    normal[np.diag_indices(normal.shape[0])] += held
    found = np.linalg.solve(normal, design.T @ mean)
    correction = np.concatenate([[0.0], found[count + 1 :], [0.0]])
    next_width = width + min(max(float(found[count]), -0.3 * width), 0.3 * width)
    table = ground.table + np.interp(_taus(), np.arange(-BEFORE, AFTER + 1), correction)
    shape = StepShape(table, width)
    return ShapeFit(
        shape,
        min(max(next_width, NARROWEST), WIDEST),
        found[: count // 2],
        found[count // 2 : count],
        mean - np.asarray(design @ found),
    )


def _hats(train: StepTrain) -> Array:
    """Triangles one sample apart about every step, signed and summed: (n, BEFORE + AFTER - 1)."""
    place = train.place[:, None]
    index = np.ceil(train.place - BEFORE).astype(np.int64)[:, None] + np.arange(BEFORE + AFTER)[None, :]
    where = index - place + BEFORE
    cell = np.clip(where.astype(np.int64), 0, BEFORE + AFTER - 1)
    part = where - cell
    row = index - train.low
    inside = (row >= 0) & (row < train.count)
    nodes = BEFORE + AFTER + 1
    flat = (row * nodes + cell)[inside]
    signed = np.broadcast_to(train.sign[:, None], row.shape)[inside]
    later = part[inside] * signed
    size = train.count * nodes
    hats = np.bincount(flat, weights=signed - later, minlength=size)
    hats += np.bincount(flat + 1, weights=later, minlength=size)
    return np.asarray(hats.reshape(train.count, nodes)[:, 1:-1])


def spot_width(flat: Array, train: StepTrain) -> float:
    """Width in samples of the Gaussian spot as steep as the steps of bars between 0 and 1."""
    index = np.clip(np.floor(train.place).astype(np.int64) - train.low, 1, flat.size - 3)
    rise = float(np.median((flat[index + 2] - flat[index - 1]) * train.sign))  # over three samples
    half = min(max(rise / 2.0, 0.08), 0.498)
    return max(1.5 / float(ndtri(0.5 + half)), NARROWEST)
