"""Plan and frame in, the place of every feature out."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.crosshatch import measure_crossings, noise_level
from patternscore.errors import UnscorableFrame
from patternscore.frame import Frame
from patternscore.located import Crossings, Located
from patternscore.marks import pose_from_marks
from patternscore.plan import Plan, Rect
from patternscore.rasteredges import raster_edges
from patternscore.warp import Warp, fit_warp

Array = npt.NDArray[Any]
_LEAST_LIKENESS = 0.6  # rank correlation of the levels seen with the plan's tones
_ROUGH = 0.6  # samples rms
_TERMS = {1: 3, 2: 6, 3: 10, 4: 15}


def locate(frame: Frame, plan: Plan) -> Located:
    """Find a plan's features in a frame.

    Parameters
    ----------
    frame : Frame
    plan : Plan
        With marks, from which the pose is found without a hint.

    Returns
    -------
    Located

    Raises
    ------
    UnscorableFrame
        When the pattern is not in the frame.
    """
    try:
        if frame.rows < 64 or frame.samples < 64 or not plan.marks:
            raise UnscorableFrame("the pattern of the plan is not there")
        start = pose_from_marks(frame.luma, plan, frame.raster)
        return refine(frame, plan, start)
    except UnscorableFrame as reason:
        raise UnscorableFrame(
            f"{frame.name}: {reason}; feed the chart through the chain and grab the whole picture"
        ) from None


def refine(frame: Frame, plan: Plan, start: Warp) -> Located:
    """Lay a plan on a frame, from a pose that is good to a third of a grid cell.

    Raises
    ------
    UnscorableFrame
        When what lies there is not what the plan says.
    """
    warp, crossings, misfit = start, None, 0.0
    if plan.grid is not None and len(plan.grid.shown) >= _TERMS[1]:
        warp, crossings, misfit = _bend(frame, plan, start)
    if likeness(frame, plan, warp) < _LEAST_LIKENESS:
        raise UnscorableFrame("the pattern of the plan is not there")
    return Located(plan, warp, crossings, raster_edges(frame.luma, frame.raster), misfit)


def _bend(frame: Frame, plan: Plan, start: Warp) -> tuple[Warp, Crossings, float]:
    """Measure the crosshatch, bend the warp to it, and measure again where it now expects the crossings."""
    grid = plan.grid
    assert grid is not None
    raster = frame.raster
    cell = (
        float(np.median(np.diff(grid.columns))) * raster.width_samples,
        float(np.median(np.diff(grid.rows))) * raster.height_lines,
    )
    noise = max(noise_level(frame.luma), frame.code_step / np.sqrt(12.0), 1e-3)
    warp = start
    found = measure_crossings(frame.luma, grid, warp, cell, noise, wide=True)
    warp, _, coarse = _fit(found, 3, 6.0, warp)
    found = measure_crossings(frame.luma, grid, warp, cell, noise, wide=False)
    warp, kept, misfit = _fit(found, 4, 1.0, warp)
    if coarse > _ROUGH:  # what lay far from the third-degree warp is measured again from closer by
        found = measure_crossings(frame.luma, grid, warp, cell, noise, wide=False)
        warp, kept, misfit = _fit(found, 4, 1.0, warp)
    return warp, _chosen(found, kept), misfit


def _chosen(found: Crossings, kept: Array) -> Crossings:
    return Crossings(found.index[kept], found.xy[kept], found.found[kept], found.sigma[kept])


def _fit(found: Crossings, degree: int, limit: float, fallback: Warp) -> tuple[Warp, Array, float]:
    """Warp through crossings, those further off than ``limit`` samples (or five times the usual) left out."""
    kept = np.ones(len(found.xy), dtype=bool)
    warp, misfit = fallback, limit
    while degree > 1 and len(found.xy) < 1.5 * _TERMS[degree]:
        degree -= 1
    for _ in range(4):
        if np.count_nonzero(kept) < _TERMS[degree] + 3:
            return fallback, np.ones(len(found.xy), dtype=bool), limit
        warp = fit_warp(found.xy[kept], found.found[kept], degree)
        off = np.hypot(*(warp.to_frame(found.xy) - found.found).T)
        misfit = float(np.sqrt(np.mean(off[kept] ** 2)))
        kept = off < max(limit, 5.0 * float(np.median(off)))
    return warp, kept, misfit


@lru_cache(maxsize=8)
def _checkpoints(plan: Plan) -> tuple[Array, Array]:
    """Points of the pattern whose level the plan states: (n, 2) fractions and (n,) IRE."""
    points: list[tuple[float, float]] = []
    levels: list[float] = []

    def add(x: float, y: float, level: float) -> None:
        points.append((x, y))
        levels.append(level)

    def middle(rect: Rect) -> tuple[float, float]:
        return (rect.x0 + rect.x1) / 2, (rect.y0 + rect.y1) / 2

    for patch in (*plan.steps, *plan.flats, *plan.field):
        add(*middle(patch.rect), patch.level)
    for edge in plan.edges:
        x, y = (edge.start[0] + edge.end[0]) / 2, (edge.start[1] + edge.end[1]) / 2
        dx, dy = (1.0, 0.0) if edge.axis == "h" else (0.0, 1.0)
        add(x - dx * edge.clear_before / 2, y - dy * edge.clear_before / 2, edge.before)
        add(x + dx * edge.clear_after / 2, y + dy * edge.clear_after / 2, edge.after)
    for ruler in plan.rulers:
        across = (ruler.band[0] + ruler.band[1]) / 2
        bounds = np.array(ruler.boundaries)
        for along, light in zip((bounds[:-1] + bounds[1:]) / 2, ruler.bits, strict=True):
            x, y = (along, across) if ruler.side in ("top", "bottom") else (across, along)
            add(float(x), float(y), ruler.light if light else ruler.dark)
    return np.array(points).reshape(-1, 2), np.array(levels)


def likeness(frame: Frame, plan: Plan, warp: Warp) -> float:
    """Rank correlation, -1 to 1, of the levels in the frame with those that the plan states there.

    Ranks do not mind gamma, lift or gain.
    """
    import cv2

    points, levels = _checkpoints(plan)
    if len(points) < 8:
        return 1.0
    places = warp.to_frame(points)
    x, y = places.T
    # What lies beyond the active line is blanking, however large the picture is.
    raster = frame.raster
    left, right = max(raster.left, 0.0) + 3.0, min(raster.right, frame.samples - 1.0) - 3.0
    top, bottom = max(raster.top, 0.0) + 3.0, min(raster.bottom, frame.rows - 1.0) - 3.0
    inside = (x > left) & (x < right) & (y > top) & (y < bottom)
    if np.count_nonzero(inside) < max(8, 0.25 * len(points)):
        return 0.0
    smooth = cv2.blur(frame.luma, (3, 3))
    across, down = x[inside].astype(np.float32)[None], y[inside].astype(np.float32)[None]
    seen = cv2.remap(smooth, across, down, cv2.INTER_LINEAR)[0]
    if float(np.std(seen)) < 2.0:
        return 0.0
    return float(np.corrcoef(_ranks(seen), _tones(levels[inside]))[0, 1])


def _tones(levels: Array) -> Array:
    """Dark, middle or light: -1, 0, 1."""
    return np.asarray((levels > 60.0).astype(np.float64) - (levels < 40.0))


def _ranks(levels: Array) -> Array:
    """Rank of each level, equal ones sharing their mean rank."""
    _, index, count = np.unique(levels, return_inverse=True, return_counts=True)
    return np.asarray((np.cumsum(count) - (count - 1) / 2.0)[index])
