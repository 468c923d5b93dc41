"""Measured against nominal level of a staircase: gamma, and crush at either end."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
_GAMMAS = np.geomspace(0.25, 4.0, 49)
_LOWEST, _HIGHEST = 45.0, 60.0  # nominal levels up to (from) which steps may be held
_FEWEST = 5  # free steps
_SEEN = 25.0  # gain in chi-square by which held steps are believed
_OWN = 0.08  # IRE by which steps stray of themselves
_CAMERA = 0.65  # exponent up to which a curve may be a camera's
_DEAD = 0.3  # of the slope due, up to which steps are held for certain
_ALIVE = 0.6  # of the slope due, from which steps still differ as they should


@dataclass(frozen=True, slots=True, eq=False)
class Transfer:
    """Levels of a staircase and the curve through the steps that are not held.

    Attributes
    ----------
    nominal, measured, sigma : (n,) arrays, IRE
        In order of the nominal level.
    black, swing, gamma : float
        The curve: measured = black + swing * (nominal / 100) ** gamma.
    covariance : (3, 3) array
        Of black, swing, gamma.
    held_low, held_high : (n,) bool
        Steps that are held at one level at the lower and at the upper end.
    misfit : float
        Chi-square of the curve and the held steps.
    """

    nominal: Array
    measured: Array
    sigma: Array
    black: float
    swing: float
    gamma: float
    covariance: Array
    held_low: Array
    held_high: Array
    misfit: float

    def curve(self, nominal: Array | float) -> Array:
        """Level that the curve gives, IRE."""
        part = np.clip(np.asarray(nominal) / 100.0, 0, None)
        return np.asarray(self.black + self.swing * part**self.gamma)

    def exponent(self) -> Estimate:
        """Gamma."""
        return Estimate(self.gamma, float(np.sqrt(self.covariance[2, 2])))

    def crush(self, end: Literal["black", "white"]) -> Estimate:
        """Nominal level at which the curve meets the level that the held steps share.

        Returns
        -------
        Estimate
            IRE on the pattern; 0 (100) where no step is held.
        """
        held = self.held_low if end == "black" else self.held_high
        if not held.any():
            levels = np.unique(self.nominal)
            idle, step, own = (0.0, levels[1], self.sigma[0]) if end == "black" else (100.0, levels[-2], self.sigma[-1])
            return Estimate(idle, self._doubt(float(step), float(own)))
        weight = 1.0 / np.hypot(self.sigma[held], 0.05) ** 2
        floor = float((weight * self.measured[held]).sum() / weight.sum())
        part = np.clip((floor - self.black) / self.swing, 0.0, 1.0)
        level = float(100.0 * part ** (1.0 / self.gamma))
        return Estimate(level, self._doubt(level, float(1.0 / np.sqrt(weight.sum()))))

    def _doubt(self, nominal: float, spread: float) -> float:
        """Spread of a level, and of the curve there, as a spread of nominal level."""
        part = max(nominal / 100.0, 0.01)
        slopes = _slopes(np.array([part]), self.swing, self.gamma)[0]
        curve = float(slopes @ self.covariance @ slopes)
        rise = self.swing / 100.0 * self.gamma * part ** (self.gamma - 1.0)
        return float(min(np.sqrt(spread**2 + curve) / max(rise, 0.02), 5.0))


def fit_transfer(nominal: Array, measured: Array, sigma: Array, held_at: Array | None = None) -> Transfer:
    """Fit the curve, setting aside steps that are held at either end.

    Parameters
    ----------
    nominal, measured, sigma : (n,) arrays, IRE
    held_at : (n,) array, optional
        Levels that stand for those steps that turn out to be held: what clips after a tilt does not tilt.

    Raises
    ------
    Unreadable
        When there are too few levels, or they do not rise.

    Notes
    -----
    Every number of held steps at each end is tried against every exponent of a grid, black and swing
    following by least squares; the best is refined by Gauss-Newton. Steps count as held only where that
    explains them much better than the curve alone, so neither lift nor a gamma over 1, whose slope ends at
    nought by nature, reads as crush.
    """
    order = np.argsort(nominal, kind="stable")
    stuck = measured[order] if held_at is None else held_at[order]
    nominal, measured, sigma = nominal[order], measured[order], sigma[order]
    if len(np.unique(nominal)) < _FEWEST or np.ptp(nominal) < 30.0:
        raise Unreadable("the staircase has too few steps for a curve")
    weight = 1.0 / np.hypot(sigma, _OWN) ** 2
    lows, highs = _ends(nominal)
    table, gamma, black, swing = _trials(nominal / 100.0, (measured, stuck), weight, lows, highs)
    scale = max(float(table.min()) / max(len(nominal) - 5, 1), 1.0)
    ends_held = (lows > 0).astype(np.float64)[:, None] + (highs < len(nominal)).astype(np.float64)[None, :]
    low, high = np.unravel_index(int((table / scale + _SEEN * ends_held).argmin()), table.shape)
    if _steps_live_below(nominal, measured, int(lows[low]), gamma[low, high], swing[low, high]):
        low = np.intp(0)
    start = np.array([black[low, high], swing[low, high], gamma[low, high]])
    first, last = int(lows[low]), int(highs[high])
    solved, covariance = _refine(nominal, measured, sigma, slice(first, last), start)
    if not solved[1] > 5.0:
        raise Unreadable("the staircase shows no contrast")
    for _ in range(2):  # a step that the curve leaves under the level of the held ones is held too
        moved = _held_now(nominal, (measured, stuck), weight, solved, first, last)
        if moved == (first, last):
            break
        first, last = moved
        solved, covariance = _refine(nominal, measured, sigma, slice(first, last), solved)
    at = np.arange(len(nominal))
    held_low, held_high = at < first, at >= last
    levels = np.where(held_low | held_high, stuck, measured)
    misfit = float(table[low, high])
    black_, swing_, gamma_ = (float(value) for value in solved)
    return Transfer(nominal, levels, sigma, black_, swing_, gamma_, covariance, held_low, held_high, misfit)


def _ends(nominal: Array) -> tuple[Array, Array]:
    """Numbers of steps that may be held below, and indices from which they may be held above."""
    changes = np.nonzero(np.diff(nominal) > 1e-6)[0] + 1
    lows = [0, *(at for at in changes if nominal[at - 1] <= _LOWEST)]
    highs = [len(nominal), *(at for at in changes[::-1] if nominal[at] >= _HIGHEST)]
    middle = [at for at in changes if at < highs[-1]]
    spare = [at for at in middle if len(np.unique(nominal[at : highs[-1]])) >= 3]
    return np.array([at for at in lows if at == 0 or at in spare]), np.array(highs)


def _trials(
    part: Array, levels: tuple[Array, Array], weight: Array, lows: Array, highs: Array
) -> tuple[Array, Array, Array, Array]:
    """Best chi-square over the exponents, with its exponent, black and swing: (lows, highs) each.

    ``levels`` are those of steps while free, and while held.
    """
    power = part[None, :] ** _GAMMAS[:, None]
    level, stuck = levels
    w, wy, wyy = (_running(values) for values in (weight, weight * level, weight * level**2))
    wp, wpp, wpy = (_running(values) for values in (weight * power, weight * power**2, weight * level * power))
    count, y, yy, p, pp, py = (
        np.asarray(total[..., None, highs] - total[..., lows, None]) for total in (w, wy, wyy, wp, wpp, wpy)
    )
    swing = (count * py - p * y) / np.maximum(count * pp - p**2, 1e-12)
    black = (y - swing * p) / count
    misfit = yy - black * y - swing * py
    wy, wyy = _running(weight * stuck), _running(weight * stuck**2)
    for end, (first, last) in enumerate(((np.zeros_like(lows), lows), (highs, np.full_like(highs, len(part))))):
        mass = w[last] - w[first]
        held = (wy[last] - wy[first]) / np.maximum(mass, 1e-12)
        apart = wyy[last] - wyy[first] - mass * held**2
        inner, outer = (last - 1, last) if end == 0 else (first, first - 1)
        shape = (1, -1, 1) if end == 0 else (1, 1, -1)
        sign = 1.0 if end == 0 else -1.0
        for at, way in ((inner, sign), (outer, -sign)):  # the held level lies between its neighbours on the curve
            at = np.clip(at, 0, len(part) - 1)
            curve = black + swing * power[:, at].reshape(len(power), *shape[1:])
            beyond = np.maximum(way * (curve + (stuck - level)[at].reshape(shape) - held.reshape(shape)), 0.0)
            misfit = misfit + mass.reshape(shape) * beyond**2
        misfit = misfit + apart.reshape(shape)
    best = misfit.argmin(0)
    rest = np.ix_(np.arange(len(lows)), np.arange(len(highs)))
    # Between the exponents tried, the misfit is a parabola; at the ends of the range it is taken as it is.
    inner = np.clip(best, 1, len(_GAMMAS) - 2)
    below, at_best, above = misfit[inner - 1, *rest], misfit[inner, *rest], misfit[inner + 1, *rest]
    bend = np.maximum(below - 2.0 * at_best + above, 1e-12)
    least = np.maximum(at_best - (above - below) ** 2 / (8.0 * bend), 0.0)
    return np.where(best == inner, least, misfit[best, *rest]), _GAMMAS[best], black[best, *rest], swing[best, *rest]


def _running(values: Array) -> Array:
    """Sums of the first 0, 1, 2 ... along the last axis."""
    return np.concatenate([np.zeros((*values.shape[:-1], 1)), np.cumsum(values, -1)], -1)


def _steps_live_below(nominal: Array, measured: Array, low: int, gamma: float, swing: float) -> bool:
    """Whether steps set aside at black under a curve like a camera's still rise as an even staircase does.

    Such transfers are straight near black, where a power would rise without bound.
    """
    if low == 0 or gamma > _CAMERA:
        return False
    due = swing / 100.0 * (nominal - nominal[0])
    if due[low - 1] > 0 and float(measured[low - 1] - measured[0]) < _DEAD * due[low - 1]:
        return False
    return bool(float(measured[low] - measured[nominal <= nominal[0]].mean()) > _ALIVE * due[low])


def _slopes(part: Array, swing: float, gamma: float) -> Array:
    """Derivatives of the curve by black, swing and gamma, (n, 3)."""
    part = np.maximum(part, 1e-6)
    power = part**gamma
    return np.stack([np.ones_like(part), power, swing * power * np.log(part)], 1)


def _refine(nominal: Array, measured: Array, sigma: Array, free: slice, start: Array) -> tuple[Array, Array]:
    """Gauss-Newton on black, swing, gamma over the free steps, with the covariance that noise gives."""
    part, level, sigma = nominal[free] / 100.0, measured[free], sigma[free]
    root = 1.0 / np.hypot(sigma, _OWN)
    solved = start.copy()
    design = np.zeros((len(part), 3))
    for _ in range(8):
        design = _slopes(part, solved[1], solved[2]) * root[:, None]
        left = (level - solved[0] - solved[1] * part ** solved[2]) * root
        move = np.linalg.lstsq(design, left, rcond=None)[0]
        move[2] = np.clip(move[2], -0.2, 0.2)
        solved = solved + move
        solved[2] = np.clip(solved[2], 0.2, 5.0)
        if abs(move[2]) < 1e-6:
            break
    gain = np.linalg.pinv(design) * root * sigma
    return solved, np.asarray(gain @ gain.T)


def _held_now(
    nominal: Array, levels: tuple[Array, Array], weight: Array, solved: Array, first: int, last: int
) -> tuple[int, int]:
    """Free steps from first to last, those left out that the curve puts beyond the level of the held ones."""
    measured, stuck = levels
    due = solved[0] + solved[1] * (nominal / 100.0) ** solved[2] + stuck - measured
    count = len(nominal)
    if first:
        floor = np.average(stuck[:first], weights=weight[:first])
        first = _last_true((due < floor) & (nominal <= _LOWEST)) + 1 or first
    if last < count:
        ceiling = np.average(stuck[last:], weights=weight[last:])
        last = count - (_last_true(((due > ceiling) & (nominal >= _HIGHEST))[::-1]) + 1 or count - last)
    return (first, last) if len(np.unique(nominal[first:last])) >= _FEWEST else (0, count)


def _last_true(flags: Array) -> int:
    """Index of the last one; -1 where there is none."""
    at = np.nonzero(flags)[0]
    return int(at[-1]) if len(at) else -1
