"""The deflection of one direction: which part of the picture is scanned when."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from patternscore.errors import UsageError

Array = npt.NDArray[np.float64]
_POINTS = 40_001


@dataclass(frozen=True, slots=True)
class Sweep:
    """Scan position as a function of time over the active part of a line (us) or field (lines).

    Attributes
    ----------
    size : float
        Size of the picture in the frame, 1 = nominal.
    shift : float
        Shift of the picture in the frame, fraction of the nominal size, right or down positive.
    droop : float
        Scan speed lost from start to end: the current of a yoke of L and R on a fixed voltage is
        i(t) = V/R (1 - exp(-t R/L)), so that droop is 1 - exp(-T R/L) (circuit textbooks).
    s_error : float
        Scan speed at both ends over that in the middle, less 1 (S shape).
    fold_start, fold_end : float
        Time at the start and the end over which the beam runs backwards.
    retrace : float
        Speed of the backward run over that of the forward one.
    turn : float
        Duration of the turn, in which the speed changes evenly; the turning point itself lies exactly at
        ``fold_start`` (``fold_end`` before the end).
    """

    size: float = 1.0
    shift: float = 0.0
    droop: float = 0.0
    s_error: float = 0.0
    fold_start: float = 0.0
    fold_end: float = 0.0
    retrace: float = 5.0
    turn: float = 0.15

    def __post_init__(self) -> None:
        if self.size <= 0 or self.droop >= 1 or self.s_error <= -1 or self.retrace <= 0:
            raise UsageError("a sweep must run forward: give size > 0, droop < 1, s_error > -1, retrace > 0")
        if min(self.fold_start, self.fold_end, self.turn) < 0:
            raise UsageError("fold_start, fold_end and turn are durations; give 0 or more")

    def position(self, time: npt.ArrayLike, duration: float) -> Array:
        """Picture fraction scanned at a time.

        Parameters
        ----------
        time : array
            From the start of the active part, in the unit of ``duration``.
        duration : float
            Length of the active part, us or lines.
        """
        grid, place, _ = _curve(self, duration)
        return np.interp(np.asarray(time, dtype=np.float64), grid, place)

    def speed(self, time: npt.ArrayLike, duration: float) -> Array:
        """Scan speed in picture fractions per unit of time, negative where the beam runs backwards."""
        grid, _, rate = _curve(self, duration)
        return np.interp(np.asarray(time, dtype=np.float64), grid, rate)


@lru_cache(maxsize=64)
def _curve(sweep: Sweep, duration: float) -> tuple[Array, Array, Array]:
    """Times, positions and speeds on a fine grid that reaches well beyond the active part."""
    if max(sweep.fold_start, sweep.fold_end) + sweep.turn > 0.5 * duration:
        raise UsageError(f"a fold must end before the middle of the active part, {duration / 2:.4g}")
    grid = np.linspace(-0.25 * duration, 1.25 * duration, _POINTS)
    forward = _forward_speed(sweep, grid / duration) / duration
    turned = forward * _turns(sweep, grid, duration)
    place = np.concatenate([[0.0], np.cumsum((turned[1:] + turned[:-1]) / 2)]) * (grid[1] - grid[0])
    # The middle of the active part is where no fold reaches: the forward sweep fixes the position there.
    middle = duration / 2
    place += _forward_place(sweep, 0.5) - np.interp(middle, grid, place)
    return grid, place, turned


def _exponent(sweep: Sweep) -> float:
    return float(-np.log1p(-sweep.droop))


def _base(sweep: Sweep, part: Array | float) -> Array:
    """Position of the yoke's sweep, 0 to 1 over the active part."""
    rate = _exponent(sweep)
    if abs(rate) < 1e-9:
        return np.asarray(part, dtype=np.float64)
    return np.asarray(np.expm1(-rate * np.asarray(part)) / np.expm1(-rate))


def _forward_place(sweep: Sweep, part: Array | float) -> Array:
    bend = sweep.s_error / 3.0
    u = 2.0 * _base(sweep, part) - 1.0
    place = 0.5 + 0.5 * (u + bend * u**3) / (1.0 + bend)
    return np.asarray(0.5 + (place - 0.5 - sweep.shift) / sweep.size)


def _forward_speed(sweep: Sweep, part: Array) -> Array:
    """Speed of the forward sweep, picture fractions per active part; held constant outside it."""
    inside = np.clip(part, 0.0, 1.0)
    rate = _exponent(sweep)
    slope = np.ones_like(inside) if abs(rate) < 1e-9 else -rate * np.exp(-rate * inside) / np.expm1(-rate)
    bend = sweep.s_error / 3.0
    u = 2.0 * _base(sweep, inside) - 1.0
    return np.asarray(slope * (1.0 + 3.0 * bend * u**2) / (1.0 + bend) / sweep.size)


def _turns(sweep: Sweep, grid: Array, duration: float) -> Array:
    """Factor on the forward speed: 1 while scanning, minus ``retrace`` while flying back."""
    factor = np.ones_like(grid)
    rise = max(sweep.turn / (1.0 + sweep.retrace), 1e-9)
    if sweep.fold_start > 0:
        factor = np.minimum(factor, np.clip((grid - sweep.fold_start) / rise, -sweep.retrace, 1.0))
    if sweep.fold_end > 0:
        turning = duration - sweep.fold_end
        factor = np.minimum(factor, np.clip((turning - grid) / rise, -sweep.retrace, 1.0))
    return factor
