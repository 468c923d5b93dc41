"""Lines across parallel edges, piled up in step with each other into one fine edge profile."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.stepbasis import BINS
from patternscore.plan import Edge

Array = npt.NDArray[np.float64]
Single = npt.NDArray[np.float32]

LONGEST = {"h": 26.0, "v": 12.0}  # samples each side of an edge that are used at most
SHORTEST = 5.0  # and at least
MARGIN = 1.5  # samples kept off what lies beyond the clear part
END = {"h": 4, "v": 10}  # rows kept off the ends of an edge: spot and error of location, smear along the line
FEWEST = 12  # lines across an edge
LOWEST = 6.0  # IRE of step


@dataclass(slots=True, eq=False)
class Strip:
    """The parallel edges of one block, as windows of samples about each edge in each line.

    Along the line: rows are frame lines, positions are samples. Across: rows are columns, positions lines.

    Attributes
    ----------
    luma : (lines, samples) float32
        The frame, or its transpose.
    rows : (n,) int
        Rows that cross all edges.
    position : (edges, n) float64
        Where each edge lies in each row.
    left, right : int
        Whole samples used before and after an edge.
    sign, middle, step : (edges,) float64
        Polarity, mean of the two levels (IRE), their difference (IRE, positive).
    shifts : (n,) float64
        Shift of each row against the straight run of its edges, samples.
    field_shift : float
        Across only: how much later an edge lies in the lines 1, 3, 5 ... than in the others, lines.
    """

    luma: Single
    rows: npt.NDArray[np.int64]
    position: Array
    left: int
    right: int
    sign: Array = field(default_factory=lambda: np.ones(1))
    middle: Array = field(default_factory=lambda: np.zeros(1))
    step: Array = field(default_factory=lambda: np.ones(1))
    shifts: Array = field(default_factory=lambda: np.zeros(1))
    field_shift: float = 0.0

    def windows(self) -> tuple[Single, Single]:
        """Times from the edge (samples) and levels (IRE): two arrays of (edges, rows, window)."""
        return self.cut(self.left, self.right)

    def cut(self, left: int, right: int) -> tuple[Single, Single]:
        """Give the windows with these whole samples before and after each edge."""
        whole = np.floor(self.position).astype(np.int64)
        reach = np.arange(-left, right + 2)
        columns = whole[..., None] + reach
        np.clip(columns, 0, self.luma.shape[1] - 1, out=columns)
        times = reach.astype(np.float32) - (self.position - whole).astype(np.float32)[..., None]
        if self.field_shift:
            times -= np.float32(self.field_shift) * (columns % 2 - np.float32(0.5))
        columns += (self.rows * self.luma.shape[1])[None, :, None]
        levels = self.luma.ravel()[columns]
        return times, levels

    def signed(self, levels: Single) -> Single:
        """Levels as fractions of the step about its middle, every edge rising: -1/2 to 1/2."""
        scale = (self.sign / self.step).astype(np.float32)[:, None, None]
        return (levels - self.middle.astype(np.float32)[:, None, None]) * scale

    def expected(self, model: Array, first: int, times: Single) -> Single:
        """Levels in IRE of a modelled profile a edge at some times; bins as in ``Pile``."""
        place = times * np.float32(BINS) - np.float32(first)
        index = np.clip(place.astype(np.int64), 0, model.shape[1] - 2)
        place -= index.astype(np.float32)
        index += (np.arange(len(model)) * model.shape[1])[:, None, None]
        rise = np.diff(model, axis=1, append=model[:, -1:]).astype(np.float32).ravel()
        value = model.astype(np.float32).ravel()[index] + rise[index] * place
        scale = (self.sign * self.step).astype(np.float32)[:, None, None]
        return np.asarray(value * scale + self.middle.astype(np.float32)[:, None, None])


@dataclass(frozen=True, slots=True)
class Coding:
    """Codes of a frame: IRE of a step between codes (0: none), of code 0, and noise before rounding (codes)."""

    step: float
    floor: float
    limits: tuple[float, float]
    noise: float = 0.0

    def with_noise(self, ire: float) -> Coding:
        """Give the same coding with the noise that a measured rms (IRE) leaves when rounding's own is taken off."""
        if self.step <= 0:
            return self
        return replace(self, noise=float(np.sqrt(max((ire / self.step) ** 2 - 1.0 / 12.0, 0.0))))

    def rounding(self, ire: Single) -> Single:
        """Mean error in IRE of rounding a level with noise on it.

        The sawtooth of the rounding error, smoothed by the noise: its harmonics k fall as
        exp(-2 (pi k noise)^2), and from half a code of noise there is nothing left.
        """
        place = (ire - np.float32(self.floor)) * np.float32(1.0 / self.step)
        if self.noise < 0.12:
            return np.asarray((np.rint(place) - place) * np.float32(self.step))
        total = np.zeros_like(place)
        for k in (1, 2, 3):
            size = (-1.0) ** k / (np.pi * k) * np.exp(-2.0 * (np.pi * k * self.noise) ** 2)
            total += np.float32(size * self.step) * np.sin(np.float32(2.0 * np.pi * k) * place)
        return total

    @property
    def left_by_noise(self) -> float:
        """Share of the variance of rounding that noise does not smooth away."""
        return float(np.exp(-((2.0 * np.pi * self.noise) ** 2)))

    @property
    def coarse(self) -> bool:
        """Whether rounding shows in a mean."""
        return self.step > 0 and self.noise < 0.5


def coding_of(frame: Frame) -> Coding:
    """Coding of a frame; levels within half a code of the ends of its range are clipped."""
    half = 0.6 * frame.code_step if frame.code_step > 0 else 1e-3
    limits = (frame.code_floor + half, frame.code_ceiling - half)
    if frame.averaged > 1:
        return Coding(0.0, frame.code_floor, limits)
    return Coding(frame.code_step, frame.code_floor, limits)


@dataclass(frozen=True, slots=True, eq=False)
class Pile:
    """Fine profiles of the edges of some strips, each of many lines.

    Attributes
    ----------
    first : int
        Bin number of the first value; bin b is centred on b / ``BINS`` samples.
    count : (edges, bins) float64
        Samples in each bin.
    mean : (edges, bins) float64
        Their mean, fraction of the step about its middle.
    flat : (edges, bins) bool
        Bins whose samples show hardly more than one code, so that their mean may be off by part of it.
    clipped : (edges, bins) bool
        Bins that hold samples at the end of the coding range.
    noise : float
        rms of a sample about the mean of its bin, fraction of the step.
    """

    first: int
    count: Array
    mean: Array
    flat: npt.NDArray[np.bool_]
    clipped: npt.NDArray[np.bool_]
    noise: float

    @property
    def times(self) -> Array:
        """Centres of the bins, samples."""
        return (np.arange(self.mean.shape[1]) + self.first) / BINS

    def whole(self) -> tuple[Array, npt.NDArray[np.bool_]]:
        """Mean profile of all edges, and which of its bins are sound in every edge."""
        sound = (self.count > 0) & ~self.clipped
        share = sound / np.maximum(sound.sum(axis=0), 1)
        return np.asarray((self.mean * share).sum(axis=0)), np.asarray(sound.any(axis=0))


def pile_up(strips: list[Strip], coding: Coding, model: Array | None = None) -> Pile:
    """Pile the windows of all edges of some strips into bins, each edge by itself.

    Parameters
    ----------
    coding : Coding
        How levels were coded.
    model : (edges, bins) array, optional
        What the profiles are already known to be like: takes out what rounding to codes does to the means, and
        the bend of the profile within a bin.
    """
    left, right = strips[0].left, strips[0].right
    first, bins = -left * BINS, (left + right) * BINS + 1
    edges = sum(len(strip.position) for strip in strips)
    sums = np.zeros((6, edges, bins + 2))
    done = 0
    for strip in strips:
        count = len(strip.position)
        own = slice(done, done + count)
        times, levels = strip.cut(left, right)
        clipped = (levels <= coding.limits[0]) | (levels >= coding.limits[1])
        if model is not None and coding.coarse:
            levels = levels - coding.rounding(strip.expected(model[own], first, times))
        values = strip.signed(levels)
        place = times * np.float32(BINS)
        nearest = np.rint(place)
        off = ((place - nearest) * np.float32(1.0 / BINS)).ravel()
        index = nearest.astype(np.int64) - (first - 1)
        np.clip(index, 0, bins + 1, out=index)
        index += (np.arange(count) * (bins + 2))[:, None, None]
        value, flat, size = values.ravel(), index.ravel(), count * (bins + 2)
        terms: list[Any] = [None, value, off, off * off, value * value]
        if clipped.any():
            terms.append(clipped.ravel())
        for row, term in enumerate(terms):
            sums[row, own] = np.bincount(flat, term, size).reshape(count, -1)
        done += count
    scale = float(np.mean(np.concatenate([strip.step for strip in strips])))
    return _pile(first, sums[..., 1:-1], model, coding.step / scale)


def _pile(first: int, sums: Array, model: Array | None, code: float) -> Pile:
    count, value, off, square, power, clipped = sums
    whole = np.maximum(count, 1.0)
    mean = value / whole
    variance = np.maximum(power / whole - mean**2, 0.0)
    slope = np.gradient(mean, 1.0 / BINS, axis=1)
    # What the edge's own slope does within a bin is no noise.
    spread = variance - slope**2 * (square / whole - (off / whole) ** 2)
    free = np.maximum(count - 1, 0)
    noise = np.sqrt(max(float((spread * count).sum() / max(free.sum(), 1.0)), 1e-10))
    if model is not None:
        # A bin holds the mean of a bent curve about its centre, not its value there.
        rate = np.gradient(model, 1.0 / BINS, axis=1)
        mean -= off / whole * rate + square / whole / 2 * np.gradient(rate, 1.0 / BINS, axis=1)
    return Pile(first, count, mean, np.sqrt(variance) < 0.25 * code, clipped > 0, float(noise))


def cut_strip(frame: Frame, located: Located, edges: list[Edge]) -> Strip:
    """Lay out the windows of one block's edges from where the plan puts them.

    Raises
    ------
    Unreadable
        If the block is cut off by the frame or too short.
    """
    across = edges[0].axis == "v"
    luma = np.ascontiguousarray(frame.luma.T) if across else frame.luma
    runs = [_run(located, edge) for edge in edges]
    low = max(run[0].min() for run in runs) + END[edges[0].axis]
    high = min(run[0].max() for run in runs) - END[edges[0].axis]
    rows = np.arange(int(np.ceil(max(low, 0.0))), int(np.floor(min(high, luma.shape[0] - 1.0))) + 1)
    if len(rows) < FEWEST:
        raise Unreadable("the edge does not cross enough of the frame")
    position = np.stack([_along(run, rows) for run in runs])
    position = position[np.argsort(position.mean(axis=1))]
    before, after = _clear(located, edges, position)
    inside = np.all((position - before > 0) & (position + after < luma.shape[1] - 1), axis=0)
    if np.count_nonzero(inside) < FEWEST:
        raise Unreadable("the edge lies too near the side of the frame")
    longest = LONGEST[edges[0].axis]
    left, right = int(min(before, longest)), int(min(after, longest))
    return Strip(luma, rows[inside], position[:, inside], left, right)


def _run(located: Located, edge: Edge) -> tuple[Array, Array]:
    """Points along an edge: its row coordinate and its position coordinate."""
    part = np.linspace(0.0, 1.0, 7)[:, None]
    points = located.warp.to_frame(np.array(edge.start) * (1 - part) + np.array(edge.end) * part)
    return (points[:, 1], points[:, 0]) if edge.axis == "h" else (points[:, 0], points[:, 1])


def _along(run: tuple[Array, Array], rows: npt.NDArray[Any]) -> Array:
    middle, half = run[0].mean(), np.ptp(run[0]) / 2
    curve = np.polynomial.polynomial.polyfit((run[0] - middle) / half, run[1], 3)
    return np.asarray(np.polynomial.polynomial.polyval((rows - middle) / half, curve))


def _clear(located: Located, edges: list[Edge], position: Array) -> tuple[float, float]:
    """Samples before and after every edge that belong to it: half the way to a neighbour, or the clear part."""
    axis = 0 if edges[0].axis == "h" else 1
    ordered = sorted(edges, key=lambda edge: edge.start[axis])
    middles = np.array([(np.array(edge.start) + np.array(edge.end)) / 2 for edge in edges])
    scale = float(np.mean(np.abs(located.warp.slopes(middles)[:, axis, axis])))
    half_gaps = np.diff(position.mean(axis=1)) / 2
    before = min([ordered[0].clear_before * scale - MARGIN, *half_gaps])
    after = min([ordered[-1].clear_after * scale - MARGIN, *half_gaps])
    if min(before, after) < SHORTEST:
        raise Unreadable("too little of the pattern is clear beside the edge")
    return float(before), float(after)
