"""Where the edges lie in each line, to a small part of a sample."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.measure.profile import slope_of, table
from patternscore.measure.strip import FEWEST, LOWEST, Strip

Array = npt.NDArray[np.float64]
UNLEVEL = 0.1  # IRE rms between the rows that is left alone
ALIKE = 0.15  # part of the step within which edges of one block are taken to have the same levels
MOST_CUTS = 3  # windows are cut again while they were off by more than this many samples:
CLOSE = 1.5
DEGREE = 3  # of the run of an edge: turn, bow and the bend of a non-linear sweep


@dataclass(frozen=True, slots=True, eq=False)
class Alignment:
    """How well rows were brought into step.

    Attributes
    ----------
    noise : float
        rms of a sample about the profile, fraction of the step.
    row_sigma : (n,) float64
        Standard deviation of each row's measured shift, samples.
    raw : (n,) float64
        Measured shift of each row about the smooth run, not shrunk, samples.
    jitter, jitter_sigma : float
        rms shift of the rows beyond what noise explains, samples.
    blur : float
        Variance by which aligning has narrowed the profile (to be added back), samples squared.
    moved : float
        Largest move that was made, samples.
    """

    noise: float
    row_sigma: Array
    raw: Array
    jitter: float
    jitter_sigma: float
    blur: float
    moved: float


def run_basis(rows: npt.NDArray[Any], degree: int, parity: bool) -> Array:
    """Orthonormal columns for the smooth run of an edge over its rows, and the difference of the fields."""
    if rows[-1] - rows[0] == len(rows) - 1:
        return _unbroken_basis(len(rows), int(rows[0]) % 2, degree, parity)
    return _basis(rows, degree, parity)


@lru_cache(maxsize=64)
def _unbroken_basis(count: int, first: int, degree: int, parity: bool) -> Array:
    return _basis(np.arange(first, first + count), degree, parity)


def _basis(rows: npt.NDArray[Any], degree: int, parity: bool) -> Array:
    u = (rows - rows.mean()) / max(np.ptp(rows) / 2.0, 1.0)
    columns = [u**power for power in range(degree + 1)]
    if parity:
        columns.append(1.0 - 2.0 * (rows % 2))
    return np.asarray(np.linalg.qr(np.stack(columns, axis=1))[0])


def settle(strip: Strip, limits: tuple[float, float]) -> None:
    """Cut the windows; find polarity, levels and a first run of every edge by the area under its step.

    Parameters
    ----------
    limits : (low, high)
        Levels in IRE at and beyond which samples are clipped.

    Raises
    ------
    Unreadable
        If there is no step to be seen, or only a clipped one.
    """
    for round_ in range(MOST_CUTS):
        strip.cut()
        side = max(int(0.3 * min(strip.left, strip.right)), 2)
        before = strip.levels[..., :side].sum(axis=2) / side
        after = strip.levels[..., -side:].sum(axis=2) / side
        first, last = before.mean(axis=1, dtype=np.float64), after.mean(axis=1, dtype=np.float64)
        strip.sign = np.where(last >= first, 1.0, -1.0)
        strip.middle, strip.step = _levels(first, last)
        if np.min(strip.step) < LOWEST:
            raise Unreadable("there is no step to be seen where the plan has an edge")
        if strip.clipped_at(limits):
            raise Unreadable("the levels beside the edge are clipped")
        if round_ == 0:
            keep = _whole_rows(strip, after - before)
            before, after = before[:, keep], after[:, keep]
        _level_rows(strip, (after + before) / 2, side)
        moved = _by_area(strip)
        strip.position = strip.position + moved
        if np.abs(moved).max() < CLOSE:
            break
    _inside(strip)


def _level_rows(strip: Strip, plateaus: Array, side: int) -> None:
    """Take differences of level between the rows (hum, tilt) off the windows, so far as they stand out of noise."""
    off = plateaus.mean(axis=0)
    off = off - off.mean()
    outer = strip.levels[..., :side]
    noise = float(np.mean((outer[..., 1:] - outer[..., :-1]) ** 2)) / (4.0 * side * len(plateaus))
    power = float(np.mean(off**2))
    if power > 2.0 * noise + UNLEVEL**2:
        strip.levelled = True
        strip.levels -= (off * (1.0 - noise / power)).astype(np.float32)[:, None]


def _by_area(strip: Strip) -> Array:
    """Move of each edge to where a sharp step would leave the same area under the window; a smooth run."""
    width = strip.levels.shape[2]
    scale = (strip.sign / strip.step)[:, None]
    area = (strip.levels.sum(axis=2) - width * strip.middle[:, None]) * scale
    shift = strip.start + (width - 1) / 2.0 - strip.position - area
    limit = 0.5 * min(strip.left, strip.right)
    return _robust_run(np.minimum(np.maximum(shift, -limit), limit), run_basis(strip.rows, 2, False))


def _levels(before: Array, after: Array) -> tuple[Array, Array]:
    """Middle and step of each edge; the same for all where they are alike, for ringing falsifies single ones."""
    middle, step = (before + after) / 2, np.abs(after - before)
    common = step.mean()
    if len(step) > 1 and np.max(np.hypot(step - common, middle - middle.mean())) < ALIKE * common:
        low, high = np.minimum(before, after).mean(), np.maximum(before, after).mean()
        return np.full(len(step), (low + high) / 2), np.full(len(step), high - low)
    return middle, step


def _whole_rows(strip: Strip, rise: Array) -> npt.NDArray[np.bool_]:
    """Keep the rows that have the whole step: near its ends an edge fades into what lies beyond."""
    part = np.mean(rise * (strip.sign / strip.step)[:, None], axis=0)
    off = np.abs(part / _median(part) - 1.0)
    keep = off < max(0.04, 6.0 * _median(off))
    if np.count_nonzero(keep) < FEWEST:
        raise Unreadable("the step differs too much along the edge")
    if not keep.all():
        strip.keep(keep)
    return np.asarray(keep)


def _median(values: Array) -> float:
    return float(np.sort(values)[len(values) // 2])


def _robust_run(shift: Array, basis: Array) -> Array:
    """Smooth run through one shift a row, rows that lie far off left out."""
    smooth = (shift @ basis) @ basis.T
    rest = shift - smooth
    limit = 3.0 * np.sqrt(np.mean(rest**2, axis=1, keepdims=True)) + 0.1
    if np.all(np.abs(rest) < limit):
        return np.asarray(smooth)
    held = np.where(np.abs(rest) > limit, smooth, shift)
    return np.asarray((held @ basis) @ basis.T)


def _inside(strip: Strip) -> None:
    """Drop rows whose windows reach beyond the frame."""
    low = strip.position.min(axis=0) - strip.left > 0
    high = strip.position.max(axis=0) + strip.right + 1 < strip.length - 1
    keep = low & high
    if np.count_nonzero(keep) < FEWEST:
        raise Unreadable("the edge lies too near the side of the frame")
    if not keep.all():
        strip.keep(keep)


def refine(strip: Strip, model: Array, *, jitter: bool) -> Alignment:
    """Shift every row into step with a model of the profile; changes the strip.

    Parameters
    ----------
    model : (edges, bins) array
        Modelled profiles, fraction of the step about its middle.
    jitter : bool
        Whether rows may also move on their own (along the line), or only along a smooth run.

    Notes
    -----
    One Gauss-Newton step. A row's own shift is measured by all its edges together and shrunk by what noise
    alone would make of it, so that without jitter the rows keep to the smooth run.
    """
    index, off = strip.bins()
    rate = table(slope_of(model))[index]
    rest = strip.signed(strip.levels) - table(model)[index] - rate * off
    power = np.einsum("erw,erw->er", rate, rate).astype(np.float64)
    moved = -np.einsum("erw,erw->er", rest, rate) / np.maximum(power, 1e-9)
    basis = run_basis(strip.rows, DEGREE, jitter)
    smooth = (moved @ basis) @ basis.T
    left_over = moved - smooth
    weight = power / power.sum(axis=0)
    own = strip.shifts + (left_over * weight).sum(axis=0)
    variance = _noise(rest, moved, power)
    if not jitter:
        strip.field_shift += _field_shift(strip, rest, rate)
    row_variance = variance / power.sum(axis=0)
    free = 1.0 - basis.shape[1] / len(strip.rows)
    excess = max(float(np.mean(own**2)) / free - float(row_variance.mean()), 0.0)
    shrink = excess / (excess + row_variance) if jitter else np.zeros_like(row_variance)
    change = smooth + (own * shrink - strip.shifts)
    strip.position = strip.position + change
    strip.shifts = own * shrink
    return Alignment(
        noise=float(np.sqrt(variance)),
        row_sigma=np.sqrt(row_variance),
        raw=own,
        jitter=float(np.sqrt(excess)),
        jitter_sigma=_jitter_sigma(excess, float(row_variance.mean()), len(own)),
        blur=float(np.mean(shrink * row_variance)),
        moved=float(np.abs(change).max()),
    )


def _field_shift(strip: Strip, rest: Any, rate: Any) -> float:
    """How much later the edges lie in the odd lines than in the even ones, lines; across only."""
    parity = ((strip.start[..., None] + np.arange(strip.levels.shape[2])) % 2).astype(np.float32).ravel()
    slope, left = rate.ravel(), rest.ravel()
    against, power = slope * left, slope * slope
    odd, odd_power = float(against @ parity), float(power @ parity)
    even, even_power = float(against.sum()) - odd, float(power.sum()) - odd_power
    return even / max(even_power, 1e-9) - odd / max(odd_power, 1e-9)


def _noise(rest: Any, moved: Array, power: Array) -> float:
    """Variance of a sample about the model once every row has been moved into step."""
    flat = rest.ravel()
    left = float(flat @ flat) - float(np.sum(moved**2 * power))
    return max(left, 1e-12) / float(max(rest.size - moved.size, 1))


def _jitter_sigma(excess: float, row_variance: float, count: int) -> float:
    """Scatter of the rms jitter over grabs: that of a variance from ``count`` rows, carried to its root."""
    of_variance = (excess + row_variance) * np.sqrt(2.0 / count)
    return float(min(of_variance / (2.0 * np.sqrt(max(excess, 1e-12))), 0.5 * np.sqrt(of_variance)))
