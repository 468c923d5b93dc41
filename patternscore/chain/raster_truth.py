"""Where the picture of a chain lies in the frame, and how fast it is scanned."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.scanmap import distort, undistort
from patternscore.chain.settings import Chain
from patternscore.chain.sweep import Sweep
from patternscore.layout import chart_plan
from patternscore.standard import ASPECT

Array = npt.NDArray[Any]
_POINTS = 40_001


def _place(sweep: Sweep, duration: float, picture: Array) -> Array:
    """Times at which the forward sweep, were there no folds, passes picture fractions."""
    forward = replace(sweep, fold_start=0.0, fold_end=0.0)
    times = np.linspace(-0.24, 1.24, _POINTS) * duration
    return np.interp(picture, forward.position(times, duration), times)


def _durations(chain: Chain) -> tuple[float, float]:
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    return chain.standard.active_us, raster.height_lines


def local_speeds(chain: Chain) -> tuple[float, float]:
    """Scan speed along and across the lines at the centre of the picture, 1 = nominal."""
    step = 1e-4
    across = undistort(chain, np.array([0.5 - step, 0.5 + step]), np.array([0.5, 0.5]))[0]
    down = undistort(chain, np.array([0.5, 0.5]), np.array([0.5 - step, 0.5 + step]))[1]
    speeds = []
    for sweep, duration, seen in zip((chain.sweep_h, chain.sweep_v), _durations(chain), (across, down), strict=True):
        middle = _place(sweep, duration, np.array([0.5]))
        rate = float(sweep.speed(middle, duration)[0]) * duration
        speeds.append(rate * float(seen[1] - seen[0]) / (2 * step))
    return speeds[0], speeds[1]


def sweeps(chain: Chain, delay: float) -> dict[str, float]:
    """Fold-back, crush, linearity, size and centring, of the sweeps alone.

    ``delay`` is that of the signal, us: it moves the picture, not the raster. With a bow the size depends on
    where it is taken, and is left out.
    """
    along, down = _durations(chain)
    known = _sweep(chain.sweep_h, along, ("left", "right", "h", "width"), 16, delay)
    known |= _sweep(chain.sweep_v, down, ("top", "bottom", "v", "height"), 12, 0.0)
    known["aspect_error"] = 100.0 * (known["width"] / known["height"] - 1.0)
    bent = (["width"] if chain.bow_h else []) + (["height"] if chain.bow_v else [])
    return {key: value for key, value in known.items() if key not in bent and not (bent and key == "aspect_error")}


def _sweep(
    sweep: Sweep, duration: float, names: tuple[str, str, str, str], parts: int, delay: float
) -> dict[str, float]:
    start, end, letter, size = names
    first, last = (float(time) for time in _place(sweep, duration, np.array([0.0, 1.0])))
    known = {
        f"fold_{start}": sweep.fold_start,
        f"fold_{end}": sweep.fold_end,
        size: 100.0 * (last - first) / duration,
        f"centre_{letter}": 100.0 * (((first + last) / 2 + delay) / duration - 0.5),
    }
    times = np.linspace(sweep.fold_start, duration - sweep.fold_end, _POINTS)
    place = sweep.position(times, duration)

    def when(fraction: float) -> float | None:
        seen = place[0] - 1e-9 <= fraction <= place[-1] + 1e-9
        return float(np.interp(fraction, place, times)) if seen else None

    marks = [when(k / parts) for k in range(parts + 1)]
    spans = [b - a for a, b in pairwise(marks) if a is not None and b is not None]
    if len(spans) == parts:
        speeds = 1.0 / np.array(spans)
        known[f"linearity_{letter}"] = float(50.0 * (speeds.max() - speeds.min()) / speeds.mean())
    middle = _speed(when, 0.25, 0.75)
    for side, a, b in ((start, 0.0, 0.05), (end, 0.95, 1.0)):
        outer = _speed(when, a, b)
        if outer is not None and middle is not None:
            known[f"crush_{side}"] = 100.0 * (1.0 - outer / middle)
    return known


def _speed(when: Callable[[float], float | None], start: float, end: float) -> float | None:
    """Mean scan speed between two picture fractions; None where either is not seen."""
    a, b = when(start), when(end)
    return None if a is None or b is None else (end - start) / (b - a)


def geometry(chain: Chain) -> dict[str, float]:
    """Readings of the crosshatch."""
    names = ("rotation", "skew", "trapezoid_h", "trapezoid_v", "bow_h", "bow_v")
    known = {name: float(getattr(chain, name)) for name in names}
    return known | {"position_error": _position_error(chain)}


def frame_points(chain: Chain, xy: npt.ArrayLike) -> Array:
    """Frame coordinates (n, 2) at which picture points (n, 2) appear, were there no folds and no delay."""
    x, y = np.asarray(xy, dtype=np.float64).T
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    across, down = distort(chain, x, y)
    along, tall = _durations(chain)
    samples = raster.left + _place(chain.sweep_h, along, across) * chain.sample_rate
    return np.stack([samples, raster.top + _place(chain.sweep_v, tall, down)], axis=1)


def _position_error(chain: Chain) -> float:
    """Largest distance of a crossing of the chart from the best ideal grid, % of the picture height."""
    grid = chart_plan(chain.standard).grid
    assert grid is not None
    xy = np.array([(grid.columns[column], grid.rows[row]) for column, row in grid.shown])
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    found = frame_points(chain, xy) / [raster.width_samples / ASPECT, raster.height_lines]
    x, y = ((xy - 0.5) * [ASPECT, 1.0]).T
    none, ones = np.zeros_like(x), np.ones_like(x)
    # Shift, size along and down, and a small turn.
    design = np.stack([np.stack([ones, none, x, none, -y], 1), np.stack([none, ones, none, y, x], 1)], 1)
    solved, *_ = np.linalg.lstsq(design.reshape(-1, 5), found.ravel(), rcond=None)
    return float(100.0 * np.hypot(*(found - design @ solved).T).max())


def blanking(chain: Chain, delay: float) -> dict[str, float]:
    """Blanking seen before and after the picture, us; left out where the frame shows none."""
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    active = chain.standard.active_us
    begins, ends = np.clip(_place(chain.sweep_h, active, np.array([0.0, 1.0])), 0.0, active)
    if chain.sweep_h.fold_start:
        begins = 0.0
    if chain.sweep_h.fold_end:
        ends = active
    before = (raster.left + 0.5) / chain.sample_rate + begins + delay
    after = (chain.samples - 0.5 - raster.right) / chain.sample_rate + active - ends - delay
    return {key: float(seen) for key, seen in (("blank_left", before), ("blank_right", after)) if seen > 0}
