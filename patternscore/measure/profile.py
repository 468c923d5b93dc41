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
SHARP = 0.15  # codes of noise below which it shows where a code changes
TRANSITION = 0.04  # codes by which such a place may be off: where samples happen to lie, errors of the slope
_PARTS = np.array([0.0, 0.3, 0.7, 1.0])  # of an edge, where it is laid on the frame
STILL = 0.1  # codes per sample below which a profile is a plateau
LOWEST = 6.0  # IRE of step


@dataclass(slots=True, eq=False)
class Strip:
    """The parallel edges of one block, as windows of samples about each edge in each line.

    Along the line: rows are frame lines, positions are samples. Across: rows are columns, positions lines.

    Attributes
    ----------
    luma : (lines, samples) float32
        The frame.
    across : bool
        Whether rows are columns of the frame.
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
    levelled : bool
        Whether differences of level between the rows have been taken off.
    start : (edges, n) int
        First sample of each window cut.
    levels : (edges, n, window) float32
        The windows, IRE.
    """

    luma: Single
    across: bool
    rows: npt.NDArray[np.int64]
    position: Array
    left: int
    right: int
    sign: Array = field(default_factory=lambda: np.ones(1))
    middle: Array = field(default_factory=lambda: np.zeros(1))
    step: Array = field(default_factory=lambda: np.ones(1))
    shifts: Array = field(default_factory=lambda: np.zeros(1))
    field_shift: float = 0.0
    levelled: bool = False
    start: npt.NDArray[np.int64] = field(default_factory=lambda: np.zeros((1, 1), dtype=np.int64))
    levels: Single = field(default_factory=lambda: np.zeros((1, 1, 1), dtype=np.float32))

    @property
    def length(self) -> int:
        """Samples of a row."""
        return int(self.luma.shape[0 if self.across else 1])

    def cut(self) -> None:
        """Cut the windows about the present positions; small moves later on need no new cut."""
        self.start = np.floor(self.position).astype(np.int64) - self.left
        columns = self.start[..., None] + np.arange(self.left + self.right + 2)
        if self.start.min() < 0 or columns[..., -1].max() >= self.length:
            np.clip(columns, 0, self.length - 1, out=columns)
        samples = self.luma.shape[1]
        if self.across:
            columns *= samples
            columns += self.rows[:, None]
        else:
            columns += (self.rows * samples)[:, None]
        self.levels = np.take(self.luma, columns)
        self.shifts = np.zeros(len(self.rows))

    def narrow(self, left: int, right: int) -> None:
        """Narrow the windows to these whole samples before and after the edges."""
        first = self.left - left
        self.levels = self.levels[..., first : first + left + right + 2]
        self.start = self.start + first
        self.left, self.right = left, right

    def keep(self, rows: npt.NDArray[np.bool_]) -> None:
        """Drop the other rows."""
        self.rows, self.position = self.rows[rows], self.position[:, rows]
        self.start, self.levels = self.start[:, rows], self.levels[:, rows]
        self.shifts = self.shifts[rows]

    def times(self) -> Single:
        """Times of the windows' samples from the edge, samples: (edges, rows, window)."""
        reach = np.arange(self.levels.shape[2], dtype=np.float32)
        times = reach + (self.start - self.position).astype(np.float32)[..., None]
        if self.field_shift:
            odd = (self.start[..., None] + np.arange(self.levels.shape[2])) % 2
            times -= np.float32(self.field_shift) * (odd - np.float32(0.5)).astype(np.float32)
        return times

    def bins(self) -> tuple[npt.NDArray[np.int32], Single]:
        """Bin of each sample in a table of (edges, bins + 2), its ends for what lies outside, and distance from it."""
        place = self.times()
        place *= np.float32(BINS)
        nearest = np.rint(place)
        place -= nearest
        place *= np.float32(1.0 / BINS)
        index = nearest.astype(np.int32)
        index += np.int32(self.left * BINS + 1)
        size = (self.left + self.right) * BINS + 3
        np.maximum(index, 0, out=index)
        np.minimum(index, size - 1, out=index)
        index += (np.arange(len(index), dtype=np.int32) * np.int32(size))[:, None, None]
        return index, place

    def signed(self, levels: Single) -> Single:
        """Levels as fractions of the step about its middle, every edge rising: -1/2 to 1/2."""
        scale = (self.sign / self.step).astype(np.float32)[:, None, None]
        return (levels - self.middle.astype(np.float32)[:, None, None]) * scale


def table(model: Array) -> Single:
    """Flat table of (edges, bins + 2) for ``Strip.bins``."""
    held = np.empty((len(model), model.shape[1] + 2), dtype=np.float32)
    held[:, 1:-1] = model
    held[:, 0], held[:, -1] = model[:, 0], model[:, -1]
    return held.ravel()


def slope_of(model: Array) -> Array:
    """Slope of profiles on bins, per sample; nought at their ends."""
    slope = np.zeros_like(model)
    np.subtract(model[..., 2:], model[..., :-2], out=slope[..., 1:-1])
    slope *= BINS / 2.0
    return slope


def _bend_of(model: Array) -> Array:
    """Second derivative of profiles on bins, per sample squared; nought at their ends."""
    bend = np.zeros_like(model)
    bend[..., 1:-1] = (model[..., 2:] + model[..., :-2] - 2.0 * model[..., 1:-1]) * BINS**2
    return bend


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

    @property
    def left_by_noise(self) -> float:
        """Share of the variance of rounding that noise does not smooth away."""
        return float(np.exp(-((2.0 * np.pi * self.noise) ** 2)))


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
        Bins of a plateau whose samples show hardly more than one code, so that their mean may be off by part of it.
    clipped : (edges, bins) bool
        Bins that hold samples at the end of the coding range.
    noise : float
        rms of a sample about the mean of its bin, fraction of the step.
    rounding : (edges, bins) float64 or None
        Variance that rounding leaves in the means where noise does not hide the codes.
    """

    first: int
    count: Array
    mean: Array
    flat: npt.NDArray[np.bool_]
    clipped: npt.NDArray[np.bool_]
    noise: float
    rounding: Array | None = None

    @property
    def times(self) -> Array:
        """Centres of the bins, samples."""
        return (np.arange(self.mean.shape[1]) + self.first) / BINS

    def whole(self) -> tuple[Array, npt.NDArray[np.bool_]]:
        """Mean profile of all edges, and which of its bins are sound in every edge."""
        sound = (self.count > 0) & ~self.clipped
        share = sound / np.maximum(sound.sum(axis=0), 1)
        return np.asarray((self.mean * share).sum(axis=0)), np.asarray(sound.any(axis=0))


def pile_up(strips: list[Strip], coding: Coding, model: Array | None = None, *, rounding: bool = False) -> Pile:
    """Pile the windows of all edges of some strips into bins, each edge by itself.

    Parameters
    ----------
    coding : Coding
        How levels were coded.
    model : (edges, bins) array, optional
        What the profiles are roughly known to be like: takes out the bend of the profile within a bin and, where
        noise does not hide the codes, what rounding does to the means.
    """
    left, right = strips[0].left, strips[0].right
    edges = sum(len(strip.position) for strip in strips)
    sums = np.zeros((6, edges, (left + right) * BINS + 3))
    done = 0
    for strip in strips:
        own = slice(done, done + len(strip.position))
        _pile_strip(sums[:, own], strip, coding, model is not None)
        done = own.stop
    return _pile(-left * BINS, sums[..., 1:-1], model, _Scale.of(strips, coding))


@dataclass(frozen=True, slots=True, eq=False)
class _Scale:
    """Codes per unit of a profile with its sign, and code of its middle: (edges, 1) each; 0 codes if not coded."""

    codes: Array
    middle: Array
    sharp: bool

    @classmethod
    def of(cls, strips: list[Strip], coding: Coding) -> _Scale:
        unit = coding.step if coding.step > 0 else 1.0
        codes = np.concatenate([strip.sign * strip.step for strip in strips])[:, None] / unit
        middle = (np.concatenate([strip.middle for strip in strips])[:, None] - coding.floor) / unit
        whole = all(not strip.levelled for strip in strips)
        return cls(codes, middle, coding.step > 0 and coding.noise < SHARP and whole)


def _pile_strip(sums: Array, strip: Strip, coding: Coding, bent: bool) -> None:
    levels = strip.levels
    index, off = strip.bins()
    low, high = levels.min(), levels.max()
    ends = None
    if low <= coding.limits[0] or high >= coding.limits[1]:
        ends = (levels <= coding.limits[0]) | (levels >= coding.limits[1])
    value = strip.signed(levels)
    terms: list[Any] = [None, value, None, None, value * value, ends]
    if bent:
        terms[2], terms[3] = off, off * off
    flat, shape = index.ravel(), sums.shape[1:]
    for row, term in enumerate(terms):
        if row == 0 or term is not None:
            weights = None if term is None else term.ravel()
            sums[row] = np.bincount(flat, weights, shape[0] * shape[1]).reshape(shape)


def _pile(first: int, sums: Array, model: Array | None, scale: _Scale) -> Pile:
    count, value, off, square, power, clipped = sums
    share = 1.0 / np.maximum(count, 1.0)
    mean = value * share
    variance = power * share - mean**2
    # What the edge's own slope does within a bin, over which samples lie evenly, is no noise.
    spread = variance - (slope_of(mean) / BINS) ** 2 / 12.0
    free = float(count.sum() - np.count_nonzero(count))
    noise = np.sqrt(max(float(np.vdot(spread, count)) / max(free, 1.0), 1e-10))
    code = 1.0 / np.abs(scale.codes)
    flat = variance < (0.25 * code) ** 2
    rounding = None
    if model is not None:
        rate = slope_of(model)
        flat &= np.abs(rate) < STILL * code
        # A bin holds the mean of a bent curve about its centre, not its value there.
        bent = mean - share * (off * rate + square * _bend_of(model) / 2.0)
        if scale.sharp:
            bent, rounding = _between_codes(mean, bent, variance, share, rate / BINS, scale)
        mean = bent
    return Pile(first, count, mean, flat, clipped > 0, float(noise), rounding)


def _between_codes(
    mean: Array, bent: Array, variance: Array, share: Array, rise: Array, scale: _Scale
) -> tuple[Array, Array]:
    """Profile from the places where the code changes, and the variance that rounding leaves in it.

    Without noise a bin over which the level moves by less than a code says nothing of its level but where in
    it the code changes: there the level is the transition between two codes, and a part ``p`` of the samples
    beyond it tells how far from the centre that is. (Code transition levels are how the tests of converters
    place a level, too.)

    Parameters
    ----------
    rise : (edges, bins) array
        How far the profile moves over a bin.
    """
    codes = np.abs(scale.codes)
    place = scale.middle + scale.codes * mean
    low = np.floor(place + 1e-4)
    part = place - low
    spread = variance * codes**2
    moved = np.abs(rise) * codes
    between = (np.abs(spread - part * (1.0 - part)) < 0.02) & (spread > 1e-3) & (moved < 1.0)
    held = (spread < 1e-3) & (moved < 1.0)
    at = (low + 0.5 + moved * (part - 0.5) - scale.middle) / scale.codes
    left = (1.0 / (1.0 + moved**2) + share) / 12.0
    left = np.where(between, moved**2 * share / 12.0 + TRANSITION**2, np.where(held, 1.0 / 12.0, left))
    return np.where(between, at, bent), left / codes**2


@dataclass(frozen=True, slots=True, eq=False)
class Run:
    """Where an edge of the plan ought to lie in the frame.

    Attributes
    ----------
    low, high : float
        Rows between which it runs.
    curve : (4,) float64
        Its position, a cubic in the row, -1 to 1 from ``low`` to ``high``; lowest power first.
    before, after : float
        Samples that are clear on its sides.
    """

    edge: Edge
    low: float
    high: float
    curve: Array
    before: float
    after: float

    def position(self, rows: npt.NDArray[Any]) -> Array:
        """Position in some rows."""
        u = (2.0 * rows - self.low - self.high) / (self.high - self.low)
        c = self.curve
        return np.asarray(c[0] + u * (c[1] + u * (c[2] + u * c[3])))


def lay_runs(located: Located, edges: list[Edge]) -> dict[str, Run]:
    """Lay edges of the plan on the frame, by name."""
    if not edges:
        return {}
    ends = np.array([(edge.start, edge.end) for edge in edges])
    upright = np.array([edge.axis == "h" for edge in edges])
    aside = np.where(upright[:, None], [1.0, 0.0], [0.0, 1.0])
    clear = np.array([(-edge.clear_before, edge.clear_after) for edge in edges])
    middle = ends.mean(axis=1)[:, None]
    along = ends[:, :1] + _PARTS[None, :, None] * (ends[:, 1:] - ends[:, :1])
    points = np.concatenate([along, middle, middle + clear[..., None] * aside[:, None]], axis=1)
    found = located.warp.to_frame(points.reshape(-1, 2)).reshape(points.shape)
    place = np.where(upright[:, None], found[..., 0], found[..., 1])
    rows = np.where(upright[:, None], found[:, :4, 1], found[:, :4, 0])
    low, high = rows.min(axis=1), rows.max(axis=1)
    u = (2.0 * rows - (low + high)[:, None]) / np.maximum(high - low, 1e-6)[:, None]
    curves = np.linalg.solve(u[..., None] ** np.arange(4), place[:, :4, None])[..., 0]
    sides = np.abs(place[:, 5:] - place[:, 4:5])
    return {
        edge.name: Run(edge, float(low[k]), float(high[k]), curves[k], float(sides[k, 0]), float(sides[k, 1]))
        for k, edge in enumerate(edges)
    }


def cut_strip(frame: Frame, runs: list[Run]) -> Strip:
    """Lay out the windows of one block's edges.

    Parameters
    ----------
    runs : list of Run
        The edges of the block.

    Raises
    ------
    Unreadable
        If the block is cut off by the frame or too short.
    """
    axis = runs[0].edge.axis
    count, length = frame.luma.shape if axis == "h" else frame.luma.shape[::-1]
    low = max(max(run.low for run in runs) + END[axis], 0.0)
    high = min(min(run.high for run in runs) - END[axis], count - 1.0)
    rows = np.arange(int(np.ceil(low)), int(np.floor(high)) + 1)
    if len(rows) < FEWEST:
        raise Unreadable("the edge does not cross enough of the frame")
    runs = sorted(runs, key=lambda run: run.curve[0])
    position = np.stack([run.position(rows) for run in runs])
    gaps = np.diff([run.curve[0] for run in runs]) / 2
    before, after = min([runs[0].before - MARGIN, *gaps]), min([runs[-1].after - MARGIN, *gaps])
    if min(before, after) < SHORTEST:
        raise Unreadable("too little of the pattern is clear beside the edge")
    inside = (position[0] - before > 0) & (position[-1] + after < length - 1)
    if np.count_nonzero(inside) < FEWEST:
        raise Unreadable("the edge lies too near the side of the frame")
    longest = LONGEST[axis]
    return Strip(
        np.ascontiguousarray(frame.luma),
        axis == "v",
        rows[inside],
        position[:, inside],
        int(min(before, longest)),
        int(min(after, longest)),
    )
