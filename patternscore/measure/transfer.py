"""Measured against nominal level of a staircase: gamma, and crush at either end."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
_HELD = 0.45  # IRE beyond noise by which a held step must stand off the curve
_ROUNDS = 8


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
        Steps that lie off the curve at its lower and upper end.
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

    def curve(self, nominal: Array) -> Array:
        """Level that the curve gives, IRE."""
        return np.asarray(self.black + self.swing * np.clip(nominal / 100.0, 0, None) ** self.gamma)

    def crush(self, end: str) -> Estimate:
        """Nominal level at which the curve meets the level that the held steps share.

        ``end`` is "black" or "white"; 0 (100) where no step is held.
        """
        held = self.held_low if end == "black" else self.held_high
        if not held.any():
            idle = 0.0 if end == "black" else 100.0
            return Estimate(idle, self._doubt(idle, float(self.sigma.min())))
        pick = self.measured[held]
        floor = float(pick.min() if end == "black" and len(pick) < 3 else np.median(pick))
        part = np.clip((floor - self.black) / self.swing, 1e-4, 1.2)
        level = float(100.0 * part ** (1.0 / self.gamma))
        inner = self.nominal[held].max() if end == "black" else self.nominal[held].min()
        spread = float(np.std(pick)) + float(self.sigma[held].mean())
        beyond = level - inner if end == "black" else inner - level
        if beyond < 0:  # a soft knee bends before the levels are one: the last held step is the bound
            level = float(inner)
        return Estimate(level, self._doubt(level, spread))

    def _doubt(self, nominal: float, spread: float) -> float:
        """Spread of a level as a spread of nominal level, at most half the distance of steps."""
        rise = self.swing / 100.0 * self.gamma * max(nominal / 100.0, 0.01) ** (self.gamma - 1.0)
        return float(min(spread / max(rise, 0.05), 5.0))


def fit_transfer(nominal: Array, measured: Array, sigma: Array) -> Transfer:
    """Fit the curve, setting aside steps that are held at either end.

    Parameters
    ----------
    nominal, measured, sigma : (n,) arrays, IRE

    Raises
    ------
    Unreadable
        When fewer than five steps are free, or levels do not rise.
    """
    order = np.argsort(nominal, kind="stable")
    nominal, measured, sigma = nominal[order], measured[order], sigma[order]
    free = (nominal >= 18.0) & (nominal <= 90.0)
    if np.count_nonzero(free) < 5:
        raise Unreadable("the staircase has too few steps for a curve")
    low = high = np.zeros(len(nominal), dtype=bool)
    for _ in range(_ROUNDS):
        solved, covariance = _fit_curve(nominal[free], measured[free], sigma[free])
        black, swing, gamma = solved
        off = measured - (black + swing * (nominal / 100.0) ** gamma)
        reach = np.hypot(3.5 * sigma, _HELD) + 2.0 * _curve_spread(nominal, solved, covariance)
        new_low = _run((off > reach), nominal < 50.0, from_start=True)
        new_high = _run((off < -reach), nominal > 50.0, from_start=False)
        new_free = ~(new_low | new_high)
        same = bool((new_free == free).all())
        low, high, free = new_low, new_high, new_free
        if np.count_nonzero(free) < 5:
            raise Unreadable("too few steps of the staircase are clear of clipping")
        if same:
            break
    if swing < 5.0:
        raise Unreadable("the staircase shows no contrast")
    return Transfer(nominal, measured, sigma, black, swing, gamma, covariance, low, high)


def _run(off: Array, side: Array, from_start: bool) -> Array:
    """Steps off the curve that reach, without a gap of more than one, to the end of the staircase."""
    flags = (off & side) if from_start else (off & side)[::-1]
    reach = np.nonzero(flags)[0]
    held = np.zeros(len(off), dtype=bool)
    if len(reach) and flags[:2].any():
        last = int(reach[0])
        for at in reach:
            if at - last > 2:
                break
            last = int(at)
        held[: last + 1] = True
    return held if from_start else held[::-1]


def _curve_spread(nominal: Array, solved: Array, covariance: Array) -> Array:
    slopes = _slopes(nominal, solved)
    return np.asarray(np.sqrt(np.einsum("ij,jk,ik->i", slopes, covariance, slopes)))


def _slopes(nominal: Array, solved: Array) -> Array:
    part = np.maximum(nominal / 100.0, 1e-6)
    power = part ** solved[2]
    return np.stack([np.ones_like(part), power, solved[1] * power * np.log(part)], 1)


def _fit_curve(nominal: Array, measured: Array, sigma: Array) -> tuple[Array, Array]:
    """Gauss-Newton on black, swing, gamma."""
    weight = 1.0 / np.hypot(sigma, 0.05)
    solved = np.array([measured[0] - nominal[0] * 0.9, measured[-1] - measured[0], 1.0])
    solved[:2] = np.polynomial.polynomial.polyfit(nominal / 100.0, measured, 1, w=weight)
    for _ in range(12):
        design = _slopes(nominal, solved) * weight[:, None]
        left = (measured - solved[0] - solved[1] * (nominal / 100.0) ** solved[2]) * weight
        step, *_ = np.linalg.lstsq(design, left, rcond=None)
        step[2] = np.clip(step[2], -0.3, 0.3)
        solved = solved + step
        solved[2] = np.clip(solved[2], 0.2, 5.0)
        if abs(step[2]) < 1e-5:
            break
    freedom = max(len(nominal) - 3, 1)
    excess = max(float((left**2).sum()) / freedom, 1.0)
    covariance = np.linalg.pinv(design.T @ design) * excess
    return solved, covariance
