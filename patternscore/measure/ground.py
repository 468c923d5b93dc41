"""The plain ground of a pattern: its slope along the line and down the field, and hum."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.measure.patches import SeenPatch
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
MAINS_HZ = (50.0, 60.0)
_FEWEST = 6  # patches


@dataclass(frozen=True, slots=True)
class Ground:
    """Tilt in % over the width and the height; hum amplitude in %, its frequency in Hz (None: none seen)."""

    tilt_line: Estimate
    tilt_field: Estimate
    hum: Estimate
    hum_hz: float | None


def line_seconds(frame: Frame, rows: Array) -> Array:
    """Time in s at which lines of a frame are scanned, the first field first."""
    standard = frame.standard
    second = (rows % 2 == 1) == (standard.first_field == "top")
    return np.asarray((second * standard.field_us + (rows // 2) * standard.line_us) * 1e-6)


def read_ground(frame: Frame, seen: list[SeenPatch]) -> Ground:
    """Fit slope and hum to the line means of all ground patches together.

    Parameters
    ----------
    seen : list of SeenPatch
        Patches of one nominal level.

    Raises
    ------
    Unreadable
        When fewer than six patches of ground are in the frame.

    Notes
    -----
    Hum at 1 x 50 or 60 Hz is fitted with the slopes in one least-squares problem, since a slow bar and a
    slope look alike; it is left out of the slopes' fit again where it is not seen.
    """
    if len(seen) < _FEWEST:
        raise Unreadable("too little plain ground of the pattern is in the frame")
    along, down, rows, level, weight = _line_means(seen)
    plain = np.stack([np.ones_like(along), along - 0.5, down - 0.5], 1)
    alone = _solve(plain, level, weight)
    trials = []
    for mains in MAINS_HZ:
        phase = 2.0 * np.pi * mains * line_seconds(frame, rows)
        design = np.concatenate([plain, np.stack([np.sin(phase), np.cos(phase)], 1)], 1)
        trials.append((_solve(design, level, weight), mains))
    (solved, covariance, misfit), mains = min(trials, key=lambda trial: trial[0][2])
    power = float(solved[3] ** 2 + solved[4] ** 2)
    spread = float(covariance[3, 3] + covariance[4, 4]) / 2
    amplitude = float(np.sqrt(max(power - 2.0 * spread, 0.0)))
    hum = Estimate(amplitude, float(np.sqrt(spread)))
    there = power > 2.0 * 16.0 * spread and misfit < alone[2]
    if not there:
        solved, covariance, _ = alone
    sigma = np.sqrt(np.diag(covariance))
    return Ground(
        Estimate(float(solved[1]), float(sigma[1])),
        Estimate(float(solved[2]), float(sigma[2])),
        hum,
        mains if there else None,
    )


def _line_means(seen: list[SeenPatch]) -> tuple[Array, Array, Array, Array, Array]:
    """For each line of each patch: x, y (fractions), row, mean level, weight (samples)."""
    parts = []
    for patch in seen:
        means = patch.levels.mean(1, dtype=np.float64)
        count = len(means)
        rows = patch.top + np.arange(count)
        rect = patch.patch.rect
        down = patch.y + (np.arange(count) - (count - 1) / 2) / count * (rect.y1 - rect.y0) * 0.6
        parts.append((np.full(count, patch.x), down, rows, means, np.full(count, patch.levels.shape[1])))
    x, y, rows, means, weight = (np.concatenate(part) for part in zip(*parts, strict=True))
    return x, y, rows, means, weight.astype(np.float64)


def _solve(design: Array, level: Array, weight: Array) -> tuple[Array, Array, float]:
    """Robust weighted least squares: solution, covariance by the residual scatter, and misfit."""
    keep = np.ones(len(level))
    for _ in range(2):
        scaled = weight * keep
        normal = (design * scaled[:, None]).T @ design
        solved = np.linalg.solve(normal, (design * scaled[:, None]).T @ level)
        left = (level - design @ solved) * np.sqrt(weight)
        spread = 1.4826 * float(np.median(np.abs(left))) + 1e-6
        keep = (np.abs(left) < 5.0 * spread).astype(np.float64)
    freedom = max(float(keep.sum()) - design.shape[1], 1.0)
    misfit = float((keep * left**2).sum() / freedom)
    return solved, np.linalg.inv(normal) * misfit, misfit
