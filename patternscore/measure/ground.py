"""Flat areas of one nominal level, seen all over the picture: slope along the line and down the field, hum."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.measure.patches import Cores
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
MAINS_HZ = (50.0, 60.0)
_FEWEST = 6  # areas
_SEEN = 16.0  # gain in chi-square by which a bar at mains rate is believed
_OUTLIER = 5.0


@dataclass(frozen=True, slots=True, eq=False)
class Ground:
    """How the level of flat areas changes over the picture.

    Attributes
    ----------
    tilt_line, tilt_field : Estimate
        % of 100 IRE over the active line and over the height.
    hum : Estimate
        Peak amplitude, % of 100 IRE.
    hum_hz : tuple of float
        Frequencies of the bars believed, Hz; empty where none is seen.
    """

    tilt_line: Estimate
    tilt_field: Estimate
    hum: Estimate
    hum_hz: tuple[float, ...]
    _swings: Array
    _frame: Frame

    def surface(self, columns: Array, rows: Array) -> Array:
        """Departure in IRE from the level at the middle of the picture, at frame coordinates.

        Only slopes and bars that stand out of the noise count.
        """
        along, down = places(self._frame, columns, rows)
        level = np.zeros(np.broadcast_shapes(along.shape, down.shape))
        if abs(self.tilt_line.value) > 3.0 * self.tilt_line.sigma:
            level = level + self.tilt_line.value * along
        if abs(self.tilt_field.value) > 3.0 * self.tilt_field.sigma:
            level = level + self.tilt_field.value * down
        if self.hum_hz:
            seconds = line_seconds(self._frame, rows)
            level = level + _bars(seconds, self.hum_hz) @ self._swings
        return level


def line_seconds(frame: Frame, rows: Array) -> Array:
    """Time in s at which lines of a frame are scanned, the first field first."""
    standard = frame.standard
    second = (rows % 2 == 1) == (standard.first_field == "top")
    return np.asarray((second * standard.field_us + (rows // 2) * standard.line_us) * 1e-6)


def places(frame: Frame, columns: Array, rows: Array) -> tuple[Array, Array]:
    """Distance from the middle in fractions of the active line and of the height, at frame coordinates."""
    raster = frame.raster
    along = (columns - raster.left) / raster.width_samples - 0.5
    return np.asarray(along), np.asarray((rows - raster.top) / raster.height_lines - 0.5)


def read_ground(frame: Frame, seen: tuple[Cores, ...], coding: float = 0.0) -> Ground:
    """Fit slopes and bars at mains rate to the line means of all flat areas together.

    Parameters
    ----------
    seen : tuple of Cores
        Areas of one nominal level ought to be alike over the picture.
    coding : float
        Error in IRE by which coding may shift the mean of an area, noise or not.

    Raises
    ------
    Unreadable
        When fewer than six flat areas are in the frame.

    Notes
    -----
    Bars at once and twice 50 and 60 Hz are tried, alone and together, in one least-squares problem with the
    slopes, since a slow bar and a slope look alike; a difference between the fields is let free at each nominal level.
    """
    seen = tuple(cores for cores in seen if len(cores))
    if sum(len(cores) for cores in seen) < _FEWEST:
        raise Unreadable("too little plain ground of the pattern is in the frame")
    means = _line_means(frame, seen, coding)
    plain = _solve(means, ())
    trials = [_solve(means, bars) for mains in MAINS_HZ for bars in ((mains,), (2 * mains,), (mains, 2 * mains))]
    local = 60.0 if frame.standard.name == "525" else 50.0  # the mains where the standard was at home
    best = min(trials, key=lambda trial: trial.cost(local))
    # The scale of either fit alone misleads: bars leave the plain one too large, bars that follow what areas
    # differ by leave the best one too small.
    scale = float(np.sqrt(plain.scale * best.scale))
    believed = plain.misfit - best.misfit > _SEEN * scale * len(best.bars)
    start = means.slopes
    if believed:
        line, down, hum = best.estimate(start), best.estimate(start + 1), best.amplitude(start + 2, True)
        return Ground(line, down, hum, best.bars, best.solved[start + 2 :], frame)
    # Bars too faint to be believed may still be there, and then pass for a slope.
    rival = min((trial for trial in trials if trial.bars == (local,)), key=lambda trial: trial.misfit)
    share = float(np.clip((plain.misfit - rival.misfit) / (_SEEN * rival.scale), 0.0, 1.0)) ** 2
    line, down = (_between(plain.estimate(at), rival.estimate(at), share) for at in (start, start + 1))
    faint = min((trial for trial in trials if len(trial.bars) == 1), key=lambda trial: trial.misfit)
    hum = _between(faint.amplitude(start + 2, False), rival.amplitude(start + 2, False), share)
    return Ground(line, down, hum, (), plain.solved[start + 2 :], frame)


def _between(own: Estimate, rival: Estimate, share: float) -> Estimate:
    """An estimate, as unsure as a rival of this share makes it."""
    return Estimate(own.value, float(np.hypot(own.sigma, share * (rival.value - own.value))))


@dataclass(frozen=True, slots=True, eq=False)
class _Means:
    """Line means of the areas with the columns of every model.

    Columns are each nominal level, the difference between the fields at each, then, from ``slopes`` on, the
    two slopes and the bars. ``normal``, ``right`` and ``power`` are the weighted sums of their products;
    ``least`` is the scale of the misfit that coding alone brings about.
    """

    columns: Array
    mean: Array
    weight: Array
    area: Array
    row: Array
    slopes: int
    normal: Array
    right: Array
    power: float
    least: float


@dataclass(frozen=True, slots=True, eq=False)
class _Fit:
    bars: tuple[float, ...]
    solved: Array
    covariance: Array
    misfit: float
    scale: float

    def cost(self, local: float) -> float:
        """Misfit, and what more bars, or less likely ones, must better it by.

        Less likely are those of the other mains, and those at twice mains alone: with a slope beside them they
        pass for one at mains.
        """
        unlikely = float(self.bars[0] % local != 0) + 0.5 * float(min(self.bars) not in MAINS_HZ)
        return self.misfit + _SEEN * self.scale * (len(self.bars) + unlikely)

    def estimate(self, which: int) -> Estimate:
        return Estimate(float(self.solved[which]), float(np.sqrt(self.covariance[which, which])))

    def amplitude(self, start: int, believed: bool) -> Estimate:
        """Half the distance from peak to peak of the bars, the part that noise adds taken out."""
        swings, covariance = self.solved[start:], self.covariance[start:, start:]
        power, noise = float((swings**2).sum()), float(np.trace(covariance))
        if not believed:
            return Estimate(float(np.sqrt(max(power - noise, 0.0))), float(np.sqrt(noise)))
        along = swings / np.sqrt(power)
        sigma = float(np.sqrt(along @ covariance @ along))
        if len(self.bars) == 1:
            return Estimate(float(np.sqrt(max(power - noise + sigma**2, 0.0))), sigma)
        wave = _bars(np.linspace(0.0, 1.0 / min(self.bars), 96, endpoint=False), self.bars) @ swings
        return Estimate(float(np.ptp(wave)) / 2.0, sigma)


def _bars(seconds: Array, frequencies: tuple[float, ...]) -> Array:
    phase = 2.0 * np.pi * seconds[..., None] * np.asarray(frequencies)
    return np.concatenate([np.sin(phase), np.cos(phase)], -1)


def _line_means(frame: Frame, seen: tuple[Cores, ...], coding: float) -> _Means:
    mean, weight, area, along, down, rows, nominal = [], [], [], [], [], [], []
    first = 0
    for cores in seen:
        tall = cores.rows.shape[1]
        mean.append(cores.levels.mean(2).ravel())
        weight.append(np.full(mean[-1].size, float(cores.levels.shape[2])))
        area.append(np.repeat(np.arange(first, first + len(cores)), tall))
        first += len(cores)
        x, y = places(frame, cores.columns, cores.rows.ravel())
        along.append(np.repeat(x, tall))
        down.append(y)
        rows.append(cores.rows.ravel())
        nominal.append(np.repeat(cores.nominal, tall))
    row = np.concatenate(rows)
    kinds, which = np.unique(np.concatenate(nominal), return_inverse=True)
    levels = (which[:, None] == np.arange(len(kinds))).astype(np.float64)
    columns = [levels, levels * ((row % 2) - 0.5)[:, None]]
    columns += [np.concatenate(along)[:, None], np.concatenate(down)[:, None]]
    columns.append(_bars(line_seconds(frame, row), _every_bar()))
    design, level, mass = np.concatenate(columns, 1), np.concatenate(mean).astype(np.float64), np.concatenate(weight)
    kept = _near_model(design, level, np.sqrt(mass))
    design, level, mass = design[kept], level[kept], mass[kept]
    scaled = (design * mass[:, None]).T
    power = float((mass * level**2).sum())
    least = coding**2 * float(mass.sum()) / first  # all lines of an area are off together
    shared = np.concatenate(area)[kept], row[kept]
    return _Means(design, level, mass, *shared, 2 * len(kinds), scaled @ design, scaled @ level, power, least)


def _every_bar() -> tuple[float, ...]:
    return tuple(mains * times for mains in MAINS_HZ for times in (1.0, 2.0))


def _near_model(design: Array, level: Array, root: Array) -> Array:
    """Which lines do not stand far off a model that holds every bar; something else lies in those that do."""
    scaled = design * root[:, None]
    solved = np.linalg.solve(scaled.T @ scaled + 1e-6 * np.eye(design.shape[1]), scaled.T @ (level * root))
    left = np.abs(level * root - scaled @ solved)
    return np.asarray(left < _OUTLIER * (1.4826 * float(np.median(left)) + 1e-3))


def _solve(means: _Means, bars: tuple[float, ...]) -> _Fit:
    """Weighted least squares of levels, slopes, fields and these bars."""
    offset = means.slopes + 2
    every = _every_bar()
    chosen = [*range(offset)]
    chosen += [offset + every.index(bar) for bar in bars]
    chosen += [offset + len(every) + every.index(bar) for bar in bars]
    inverse = np.linalg.inv(means.normal[np.ix_(chosen, chosen)] + 1e-9 * np.eye(len(chosen)))
    solved = inverse @ means.right[chosen]
    misfit = max(means.power - float(solved @ means.right[chosen]), 0.0)
    left = means.mean - means.columns[:, chosen] @ solved
    scale = misfit / max(len(left) - len(chosen), 1) * _togetherness(means, left)
    return _Fit(bars, solved, inverse * max(scale, means.least), misfit, max(scale, means.least))


def _togetherness(means: _Means, left: Array) -> float:
    """How much more the means of one area, or of one line of the frame, stray together than on their own."""
    power = max(float(((means.weight * left) ** 2).sum()), 1e-12)
    totals = (np.bincount(shared, means.weight * left) for shared in (means.area, means.row))
    return max(1.0, *(float((total**2).sum()) / power for total in totals))
