"""Windows about edges piled up into fine profiles."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.frame import Frame
from patternscore.measure.stepbasis import BINS
from patternscore.measure.strip import Strip

Array = npt.NDArray[np.float64]
Single = npt.NDArray[np.float32]

SHARP = 0.15  # codes of noise below which it shows where a code changes
TRANSITION = 0.08  # codes by which such a place may be off: where samples happen to lie, errors of the slope
STRETCHED = 0.12  # codes by which the level between two such places may be off
LATTICE = 6.0  # times more than so many independent ones samples on a lattice leave of rounding errors
STEEP = 0.02  # fraction of the step that a profile rises over a bin, beyond which noise is not taken from it
STILL = 0.1  # codes per sample below which a profile is a plateau


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
    """Coding of a frame; its two outermost codes are clipped ones, for BT.601 reserves the very last."""
    end = 1.5 * frame.code_step if frame.code_step > 0 else 1e-3
    limits = (frame.code_floor + end, frame.code_ceiling - end)
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
    slope = slope_of(mean) / BINS
    # What the edge's own slope does within a bin, over which samples lie evenly, is no noise; where it is steep
    # too little is left to tell.
    quiet = np.where(np.abs(slope) < STEEP, count, 0.0)
    free = max(float(quiet.sum()) - np.count_nonzero(quiet), 1.0)
    noise = np.sqrt(max(float(np.vdot(variance - slope**2 / 12.0, quiet)) / free, 1e-10))
    code = 1.0 / np.abs(scale.codes)
    flat = variance < (0.25 * code) ** 2
    rounding = None
    if model is not None:
        rate = slope_of(model)
        flat &= np.abs(rate) < STILL * code
        # A bin holds the mean of a bent curve about its centre, not its value there.
        bent = mean - share * (off * rate + square * _bend_of(model) / 2.0)
        if scale.sharp:
            bent, rounding = _between_codes(mean, bent, variance, share, model, scale)
        mean = bent
    return Pile(first, count, mean, flat, clipped > 0, float(noise), rounding)


def _between_codes(
    mean: Array, bent: Array, variance: Array, share: Array, model: Array, scale: _Scale
) -> tuple[Array, Array]:
    """Profile from the places where the code changes, and the variance that rounding leaves in it.

    Without noise a bin over which the level moves by less than a code says nothing of its level but where in
    it the code changes: there the level is the transition between two codes, and a part ``p`` of the samples
    beyond it tells how far from the centre that is. (Code transition levels are how the tests of converters
    place a level, too.) From one such place to the next the level follows the model, stretched to fit both.
    """
    codes = np.abs(scale.codes)
    place = scale.middle + scale.codes * mean
    low = np.floor(place + 1e-4)
    part = place - low
    spread = variance * codes**2
    moved = np.abs(slope_of(model)) / BINS * codes
    between = (np.abs(spread - part * (1.0 - part)) < 0.02) & (spread > 1e-3) & (moved < 1.0)
    held = (spread < 1e-3) & (moved < 1.0)
    at = np.where(between, (low + 0.5 + moved * (part - 0.5) - scale.middle) / scale.codes, bent)
    left = (1.0 / (1.0 + moved**2) + LATTICE * share) / 12.0
    left = np.where(between, moved**2 * share / 12.0 + TRANSITION**2, np.where(held, 1.0 / 12.0, left))
    inner, stretched = _stretched(at, model, between, held, codes)
    return np.where(inner, stretched, at), np.where(inner, STRETCHED**2, left) / codes**2


def _stretched(at: Array, model: Array, between: Any, held: Any, codes: Array) -> tuple[Any, Array]:
    """Which held bins lie between two transitions that differ, and the model there stretched to fit both."""
    bins = np.arange(at.shape[1])
    before = np.maximum.accumulate(np.where(between, bins, -1), axis=1)
    after = np.minimum.accumulate(np.where(between, bins, at.shape[1])[:, ::-1], axis=1)[:, ::-1]
    inner = held & (before >= 0) & (after < at.shape[1])
    low, high = np.where(inner, before, 0), np.where(inner, after, 0)

    def take(values: Array, where: Any) -> Array:
        return np.take_along_axis(values, where, axis=1)

    step, run = take(at, high) - take(at, low), take(model, high) - take(model, low)
    apart = np.abs(step) * codes
    inner &= (apart > 0.6) & (apart < 3.5) & (step * run > 0.25 * step**2)
    part = (model - take(model, low)) / np.where(inner, run, 1.0)
    inner &= (part > -0.05) & (part < 1.05)
    return inner, take(at, low) + part * step
