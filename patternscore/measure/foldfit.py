"""Fit of a scan that folds to the bands at an edge of the picture."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from patternscore.measure.foldmodel import TURNS, Look, Turn, folded, look_at, lowest, with_turn
from patternscore.measure.foldsearch import bent_starts, sharp_starts
from patternscore.measure.foldview import View
from patternscore.reading import Estimate

Array = npt.NDArray[np.float64]
SHARP, BENT = 5, 3  # starts from the coarse searches
SHARES = (0.0, 0.6, 0.9)  # parts of the step's width that the spot may have
LENGTHS = (0.1, 0.5, 1.5, 4.0)  # durations of the turn tried, bars
KEPT = 2  # of them, fitted to the end with every kind of turn
FLOOR = 0.01  # misfit, of the bars' contrast, that even the true scan may leave in a band
# What is known beforehand of start (bars off nominal), ratio and duration (bars), as mean and standard
# deviation, the last two of their logarithms: weak, and decisive only where the bars leave it open.
KNOWN_START, KNOWN_RATIO, KNOWN_TURN = (0.0, 0.15), (np.log(4.8), 0.6), (np.log(0.25), 1.0)
# Where the scanned picture is the whole chart, the scan turns at its very edge: as likely as all other places
# together. AT_EDGE is how near (bars), FAVOUR what that is worth in chi-squared.
AT_EDGE, FAVOUR = 0.03, 8.0
CLEARLY = 0.5  # bars: a turn farther off the edge than this is not tried at it
# From grab to grab the mean over kinds moves by this part of their spread, and each fit by this much (bars).
CHANGES, SETTLED = 0.17, 0.002
STEPS = np.array([0.02, 0.02, 0.02, 0.05])


@dataclass(frozen=True, slots=True, eq=False)
class FoldFit:
    """Best folded scan: length, turning point, ratio, rms misfit of the bars' contrast."""

    length: Estimate
    turning: float
    ratio: float
    misfit: float


@dataclass(frozen=True, slots=True, eq=False)
class _Kind:
    """What is not fitted: the bands as one spot sees them, the kind of turn, and whether it lies at x = 0."""

    looks: list[Look]
    turn: Turn = "ramp"
    at_edge: bool = False


@dataclass(frozen=True, slots=True, eq=False)
class _Endings:
    """Where descents of one kind ended: free parameters (c, 4) and cost as chi-squared."""

    free: Array
    cost: Array
    kind: _Kind

    def best(self, count: int) -> Array:
        """Free parameters of the best few."""
        return self.free[np.argsort(self.cost)[:count]]


def fit_fold(view: View) -> FoldFit:
    """Fit folded scans of all kinds of turn; where several explain the strip as well, take their mean.

    Parameters
    ----------
    view : View
        The edge of the picture, its bands cut to the strip to explain.
    """
    deepest = (view.bands[0].t[-1] - view.start) / float(view.bands[0].slope(0.0))
    bands = tuple(band.shallower(max(10.0 * deepest, 0.2)) for band in view.bands)
    problem = _Problem(replace(view, bands=bands))
    found = _explore(problem)
    best = min(found, key=lambda ending: float(ending.cost.min()))
    cost = np.concatenate([ending.cost for ending in found])
    free = np.concatenate([ending.free for ending in found])
    weights = np.exp(-0.5 * (cost - cost.min()))
    weights /= weights.sum()
    lengths = (free[:, 0] - free[:, 1]) * view.bar
    length = float(weights @ lengths)
    spread = float(weights @ (lengths - length) ** 2)
    noise, misfit = problem.judge(best.best(1)[0], best.kind)
    return FoldFit(
        Estimate(length, float(np.sqrt(noise + CHANGES**2 * spread + (SETTLED * view.bar) ** 2))),
        float(weights @ free[:, 0]) * view.bar,
        float(np.exp(best.best(1)[0, 2])),
        misfit,
    )


def _explore(problem: _Problem) -> list[_Endings]:
    """Descend from the coarse searches' starts, then vary the spot, the turn's duration and its kind."""
    view = problem.view
    looks = {share: [look_at(band, share, view.blanked) for band in view.bands] for share in SHARES}
    sharp = with_turn(sharp_starts(view, SHARP), LENGTHS[1] * view.bar)
    starts = problem.free(np.concatenate([sharp, bent_starts(view, looks[SHARES[1]], BENT)]))
    first = [problem.descend(starts, _Kind(looks[share]), 5) for share in (SHARES[0], SHARES[-1])]
    kept = np.concatenate([ending.best(KEPT) for ending in first])
    shared = [problem.descend(kept, _Kind(looks[share]), 5) for share in SHARES]
    best = min(shared, key=lambda ending: float(ending.cost.min()))
    found = problem.parameters(best.best(1))
    turned = problem.free(np.concatenate([with_turn(found, length * view.bar) for length in LENGTHS]))
    free = [problem.descend(turned, _Kind(best.kind.looks, turn), 6) for turn in TURNS]
    if abs(float(problem.bottom(found, best.kind)[0, 0])) > CLEARLY:
        return [*shared, *free]
    return [*shared, *free, *(problem.descend(turned, _Kind(best.kind.looks, turn, True), 6) for turn in TURNS)]


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

    def left(self, free: Array, kind: _Kind) -> Array:
        """Weighted departures for several sets of free parameters, the last five from what is known."""
        parameters = self.parameters(free)
        levels = [folded(look, parameters, kind.turn) for look in kind.looks]
        departure = (np.concatenate(levels, axis=1) - self.target) / self.unit
        pinned = self.bottom(parameters, kind) / AT_EDGE if kind.at_edge else np.zeros((free.shape[0], 1))
        return np.concatenate([departure, (free - self.known) * self.pull, pinned], axis=1)

    def bottom(self, parameters: Array, kind: _Kind) -> Array:
        """Where the scan turns, bars from the picture's edge, (c, 1)."""
        look = kind.looks[0]
        return np.asarray(lowest(look, parameters, kind.turn)[0] * look.band.slope(0.0) / self.view.bar)

    def slopes(self, free: Array, kind: _Kind, left: Array) -> Array:
        """Slopes of the departures by each free parameter, (c, 4, n)."""
        count = free.shape[0]
        moved = (free[:, None, :] + np.diag(STEPS)[None, :, :]).reshape(4 * count, 4)
        return np.asarray((self.left(moved, kind).reshape(count, 4, -1) - left[:, None, :]) / STEPS[None, :, None])

    def descend(self, starts: Array, kind: _Kind, most: int) -> _Endings:
        """Levenberg-Marquardt from several starts side by side."""
        free, damping = starts.copy(), np.full(starts.shape[0], 1e-2)
        left = self.left(free, kind)
        cost = np.sum(left * left, axis=1)
        for _ in range(most):
            slopes = self.slopes(free, kind, left)
            normal = slopes @ np.swapaxes(slopes, 1, 2)
            held = np.einsum("cii->ci", normal) * damping[:, None] + 1e-9
            normal += held[:, :, None] * np.eye(4)
            move = -np.linalg.solve(normal, slopes @ left[:, :, None])[:, :, 0]
            move = np.clip(move, [-0.4, -0.15, -0.4, -0.8], [0.4, 0.15, 0.4, 0.8])
            fresh = self.left(free + move, kind)
            better = np.sum(fresh * fresh, axis=1) < cost
            free = np.where(better[:, None], free + move, free)
            left = np.where(better[:, None], fresh, left)
            gain = cost - np.sum(left * left, axis=1)
            cost = cost - gain
            damping = np.where(better, np.maximum(damping / 5, 1e-6), damping * 10)
            if np.all(better & (gain < 1e-2)):
                break
        return _Endings(free, cost - (FAVOUR if kind.at_edge else 0.0), kind)

    def judge(self, free: Array, kind: _Kind) -> tuple[float, float]:
        """Variance of the fold's length from noise, samples squared, and rms misfit."""
        left = self.left(free[None, :], kind)
        slopes = self.slopes(free[None, :], kind, left)[0]
        covariance = np.linalg.inv(slopes @ slopes.T + 1e-9 * np.eye(4))
        # The departures are weighted with the floor; noise alone moves the result by less.
        data = slopes[:, :-5] @ slopes[:, :-5].T * (self.noise / self.unit) ** 2
        spread = covariance @ data @ covariance
        along = np.array([self.view.bar, -self.view.bar, 0.0, 0.0])
        return float(along @ spread @ along), float(np.sqrt(np.mean((left[0, :-5] * self.unit) ** 2)))
