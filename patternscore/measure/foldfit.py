"""Fit of a scan that folds to the bands at an edge of the picture."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from patternscore.measure.foldmodel import TURNS, Look, Turn, folded, look_at, with_turn
from patternscore.measure.foldsearch import bent_starts, sharp_starts
from patternscore.measure.foldview import View
from patternscore.reading import Estimate

Array = npt.NDArray[np.float64]
SHARP, BENT = 5, 2  # starts from the coarse searches
SHARES = (0.0, 0.6, 0.9)  # parts of the step's width that the spot may have
LENGTHS = (0.1, 0.5, 1.5, 3.5)  # durations of the turn tried, bars
KEPT = 2  # of them, fitted to the end with every kind of turn
FLOOR = 0.01  # misfit, of the bars' contrast, that even the true scan may leave in a band
# What is known beforehand of start (bars off nominal), ratio and duration (bars), as mean and standard
# deviation, the last two of their logarithms: weak, and decisive only where the bars leave it open.
KNOWN_START, KNOWN_RATIO, KNOWN_TURN = (0.0, 0.15), (np.log(4.8), 0.6), (np.log(0.25), 1.0)
STEPS = np.array([0.02, 0.02, 0.02, 0.05])


@dataclass(frozen=True, slots=True, eq=False)
class FoldFit:
    """Best folded scan: length, turning point, ratio, rms misfit of the bars' contrast."""

    length: Estimate
    turning: float
    ratio: float
    misfit: float


@dataclass(frozen=True, slots=True, eq=False)
class _Ending:
    """Where one descent ended: parameters, cost (as chi-squared), rms misfit, covariance from noise."""

    free: Array
    cost: float
    misfit: float
    covariance: Array


def fit_fold(view: View) -> FoldFit:
    """Fit folded scans of all kinds of turn; where several explain the strip as well, take their mean.

    Parameters
    ----------
    view : View
        The edge of the picture, its bands cut to the strip to explain.
    """
    deepest = (view.bands[0].t[-1] - view.start) / float(view.bands[0].slope(0.0))
    bands = tuple(band.shallower(max(10.0 * deepest, 0.2)) for band in view.bands)
    view = replace(view, bands=bands)
    looks = {share: [look_at(band, share, view.blanked) for band in bands] for share in SHARES}
    problem = _Problem(view)
    middle = looks[SHARES[1]]
    sharp = with_turn(sharp_starts(view, SHARP), LENGTHS[1] * view.bar)
    starts = problem.free(np.concatenate([sharp, bent_starts(view, middle, BENT)]))
    screened = sorted((problem.descend(start, middle, "ramp", 5) for start in starts), key=lambda end: end.cost)
    shared = [problem.descend(end.free, looks[s], "ramp", 5) for end in screened[:KEPT] for s in SHARES]
    first = min(range(len(shared)), key=lambda index: shared[index].cost)
    chosen, found = looks[SHARES[first % len(SHARES)]], problem.parameters(shared[first].free[None, :])
    turned = problem.free(np.concatenate([with_turn(found, length * view.bar) for length in LENGTHS]))
    endings = [*shared, *(problem.descend(one, chosen, "ramp", 6) for one in turned)]
    nearest = min(endings, key=lambda ending: ending.cost)
    endings += [problem.descend(nearest.free, chosen, turn, 8) for turn in TURNS]
    best = min(endings, key=lambda ending: ending.cost)
    weights = np.exp(-0.5 * np.array([ending.cost - best.cost for ending in endings]))
    weights /= weights.sum()
    lengths = np.array([ending.free[0] - ending.free[1] for ending in endings]) * view.bar
    length = float(weights @ lengths)
    spread = float(weights @ (lengths - length) ** 2)
    along = np.array([view.bar, -view.bar, 0.0, 0.0])
    noise = float(along @ best.covariance @ along)
    return FoldFit(
        Estimate(length, float(np.sqrt(noise + spread))),
        float(weights @ np.array([ending.free[0] for ending in endings])) * view.bar,
        float(np.exp(best.free[2])),
        best.misfit,
    )


class _Problem:
    """Least squares over turning point and start (in bars), and logarithms of ratio and turn (in bars)."""

    def __init__(self, view: View) -> None:
        self.view = view
        self.target = np.concatenate([band.level for band in view.bands])
        noise = float(np.mean([band.sigma for band in view.bands]))
        self.noise, self.unit = noise, float(np.hypot(noise, FLOOR))
        self.known = np.array([0.0, view.start / view.bar, KNOWN_RATIO[0], KNOWN_TURN[0]])
        self.pull = np.array([0.0, 1.0 / KNOWN_START[1], 1.0 / KNOWN_RATIO[1], 1.0 / KNOWN_TURN[1]])

    def parameters(self, free: Array) -> Array:
        """Parameters of the model, kept within what scans do."""
        bar = self.view.bar
        ratio = np.exp(np.clip(free[:, 2:3], np.log(1.2), np.log(20.0)))
        turn = np.exp(np.clip(free[:, 3:4], np.log(0.02), np.log(12.0)))
        return np.concatenate([free[:, :2] * bar, ratio, turn * bar], axis=1)

    def free(self, parameters: Array) -> Array:
        """Free parameters of the model's parameters."""
        bar = self.view.bar
        logs = np.log(parameters[:, 2:] / np.array([1.0, bar]))
        return np.concatenate([parameters[:, :2] / bar, logs], axis=1)

    def left(self, free: Array, looks: list[Look], turn: Turn) -> Array:
        """Weighted departures for several sets of free parameters, the last four from what is known."""
        parameters = self.parameters(free)
        levels = [folded(look, parameters, turn) for look in looks]
        departure = (np.concatenate(levels, axis=1) - self.target) / self.unit
        return np.concatenate([departure, (free - self.known) * self.pull], axis=1)

    def jacobian(self, free: Array, looks: list[Look], turn: Turn, left: Array) -> Array:
        """Slopes of the departures by each free parameter, (4, n)."""
        return np.asarray((self.left(free[None, :] + np.diag(STEPS), looks, turn) - left) / STEPS[:, None])

    def descend(self, start: Array, looks: list[Look], turn: Turn, most: int) -> _Ending:
        """Levenberg-Marquardt from one start."""
        free, damping = start.copy(), 1e-2
        left = self.left(free[None, :], looks, turn)[0]
        slopes = self.jacobian(free, looks, turn, left)
        for _ in range(most):
            normal = slopes @ slopes.T
            move = -np.linalg.solve(normal + damping * np.diag(np.diag(normal) + 1e-9), slopes @ left)
            move = np.clip(move, [-0.4, -0.15, -0.4, -0.8], [0.4, 0.15, 0.4, 0.8])
            fresh = self.left((free + move)[None, :], looks, turn)[0]
            gain = float(left @ left - fresh @ fresh)
            if gain <= 0:
                damping *= 10
                if damping > 1e3:
                    break
                continue
            free, left, damping = free + move, fresh, max(damping / 5, 1e-6)
            slopes = self.jacobian(free, looks, turn, left)
            if gain < 1e-2:
                break
        normal = slopes @ slopes.T
        covariance = np.linalg.inv(normal + 1e-9 * np.eye(4))
        # The departures are weighted with the floor; noise alone moves the result by less.
        data = slopes[:, :-4] @ slopes[:, :-4].T * (self.noise / self.unit) ** 2
        spread = covariance @ data @ covariance
        misfit = float(np.sqrt(np.mean((left[:-4] * self.unit) ** 2)))
        return _Ending(free, float(left @ left), misfit, spread)
