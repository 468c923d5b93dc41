"""Measures crosshatch crossings to a fraction of a sample, from a warp that is good to a third of a cell."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.located import Crossings
from patternscore.plan import Grid
from patternscore.warp import Warp

Array = npt.NDArray[Any]


@dataclass(frozen=True, slots=True)
class _Lines:
    """Profiles across the grid lines of one direction, one for each crossing.

    ``profiles`` is (n, 2 * reach + 1), offsets from the predicted place in samples or lines.
    """

    profiles: Array
    offsets: Array


def predicted(grid: Grid) -> tuple[Array, Array]:
    """Index (n, 2) and picture fractions (n, 2) of the crossings that the plan shows."""
    index = np.array(grid.shown, dtype=np.int64).reshape(-1, 2)
    return index, np.stack([np.array(grid.columns)[index[:, 0]], np.array(grid.rows)[index[:, 1]]], 1)


def _inside(points: Array, shape: tuple[int, int], margin: float) -> Array:
    rows, samples = shape
    x, y = points.T
    return np.asarray((x > margin) & (x < samples - 1 - margin) & (y > margin) & (y < rows - 1 - margin))


def _profiles(
    luma: Array, points: Array, slopes: Array, arms: Array, axis: int, reach: int, span: tuple[int, int]
) -> _Lines:
    """Average along the clear arms of each crossing; axis 0 cuts upright lines."""
    import cv2

    offsets = np.arange(-reach, reach + 1, dtype=np.float64)
    along = np.arange(span[0], span[1] + 1, dtype=np.float64)
    along = np.concatenate([-along[::-1], along])
    # How far the line leans: movement across it for one step along it.
    lean = slopes[:, axis, 1 - axis] / slopes[:, 1 - axis, 1 - axis]
    across = points[:, axis, None, None] + offsets[None, None] + lean[:, None, None] * along[None, :, None]
    run = np.broadcast_to(points[:, 1 - axis, None, None] + along[None, :, None], across.shape)
    x, y = (across, run) if axis == 0 else (run, across)
    shape = (len(points) * len(along), len(offsets))
    levels = cv2.remap(
        luma,
        x.reshape(shape).astype(np.float32),
        y.reshape(shape).astype(np.float32),
        cv2.INTER_CUBIC,
        borderMode=cv2.BORDER_REPLICATE,
    )
    sides = levels.reshape(len(points), 2, len(along) // 2, len(offsets)).mean(2)
    weight = arms / arms.sum(1, keepdims=True)
    return _Lines((sides * weight[:, :, None]).sum(1), offsets)


def _clear_arms(grid: Grid) -> Array:
    """Clear arms of each crossing, (n, 2, 2): up and down of the upright line, left and right of the other."""
    return np.array([[[way in arms for way in pair] for pair in ("ud", "lr")] for arms in grid.arms], float)


def _coarse(lines: _Lines, half_width: float) -> tuple[Array, Array]:
    """Shift of each line by its ridge response, good to a fraction of a sample, and how strong it is."""
    import cv2

    narrow = np.exp(-0.5 * (np.arange(-8, 9) / max(half_width, 1.0)) ** 2)
    ridge = narrow - narrow.mean()
    centred = (lines.profiles - lines.profiles.mean(1, keepdims=True)).astype(np.float32)
    response = cv2.filter2D(centred, -1, ridge[None].astype(np.float32), borderType=cv2.BORDER_CONSTANT)
    offsets = lines.offsets[3:-3]
    response = response[:, 3:-3] - 0.002 * np.ptp(response) * np.abs(offsets)
    top = np.clip(response.argmax(1), 1, response.shape[1] - 2)
    at = np.arange(len(top))
    before, middle, after = response[at, top - 1], response[at, top], response[at, top + 1]
    bend = np.minimum(before - 2 * middle + after, -1e-6)
    return np.asarray(offsets[top] + np.clip(0.5 * (before - after) / bend, -1, 1)), middle


def _line_shape(distance: Array, thickness: float, blur: float) -> tuple[Array, Array, Array]:
    """Line of a thickness seen through a Gaussian blur: level 0 to 1, its slope, its slope by the blur."""
    from scipy.special import ndtr

    first, last = (distance + thickness / 2) / blur, (distance - thickness / 2) / blur
    bell_first, bell_last = (np.exp(-0.5 * side**2) / np.sqrt(2.0 * np.pi) for side in (first, last))
    return ndtr(first) - ndtr(last), (bell_first - bell_last) / blur, (last * bell_last - first * bell_first) / blur


def _first_blur(lines: _Lines, shifts: Array, thickness: float) -> float:
    """Blur of the lines from their second moment."""
    heights = lines.profiles - np.median(lines.profiles, axis=1, keepdims=True)
    weight = np.clip(heights - 0.15 * heights.max(1, keepdims=True), 0.0, None)
    distance = lines.offsets[None] - shifts[:, None]
    spread = float((weight * distance**2).sum() / max(float(weight.sum()), 1e-9))
    return float(np.sqrt(max(spread - thickness**2 / 12.0, 0.16)))


def noise_level(luma: Array) -> float:
    """Rms noise of a frame in IRE, from second differences along the line; most of a pattern is flat."""
    bend = luma[::9, 2:] - 2.0 * luma[::9, 1:-1] + luma[::9, :-2]
    return float(1.4826 * np.median(np.abs(bend)) / np.sqrt(6.0))


def _refine(
    lines: _Lines, shifts: Array, noise: Array, thickness: float, rounds: int = 2
) -> tuple[Array, Array, Array]:
    """Least-squares shift of each line against the shape of a blurred line; the blur is one for all.

    Parameters
    ----------
    noise : (n,) array
        rms noise of each profile, IRE.
    thickness : float
        Of the line as drawn, samples or lines.

    Returns
    -------
    shifts, sigma, height : (n,) arrays
        Height is the line's contrast, IRE.
    """
    blur = _first_blur(lines, shifts, thickness)
    ramp = np.broadcast_to(lines.offsets / lines.offsets[-1], lines.profiles.shape)
    sigma = height = np.ones(len(shifts))
    for _ in range(rounds):
        level, slope, wider = _line_shape(lines.offsets[None] - shifts[:, None], thickness, blur)
        design = np.stack([np.ones_like(level), ramp, level, slope], 2)
        turned = np.swapaxes(design, 1, 2)
        normal = turned @ design
        normal += 1e-9 * np.trace(normal, axis1=1, axis2=2)[:, None, None] * np.eye(4)
        inverse = np.linalg.inv(normal)
        solved = (inverse @ (turned @ lines.profiles[:, :, None]))[:, :, 0]
        height = solved[:, 2]
        safe = np.where(np.abs(height) < 1.0, 1.0, height)
        sigma = np.sqrt(np.maximum(inverse[:, 3, 3], 0.0)) * noise / np.abs(safe)
        shifts = shifts + np.clip(-solved[:, 3] / safe, -2.0, 2.0)
        left = lines.profiles - (design @ solved[:, :, None])[:, :, 0]
        wider = wider * height[:, None]
        blur = float(np.clip(blur + (left * wider).sum() / max(float((wider**2).sum()), 1e-9), 0.3, 8.0))
    return shifts, sigma, height


def _row_pitch(grid: Grid) -> float:
    return float(np.median(np.diff(grid.rows)))


def measure_crossings(
    luma: Array, grid: Grid, warp: Warp, cell: tuple[float, float], noise: float, wide: bool
) -> Crossings:
    """Crossings that are there, near where the warp puts them.

    Parameters
    ----------
    luma : (rows, samples) float32, IRE
    cell : (float, float)
        Size of a cell in samples and lines.
    noise : float
        rms noise of the frame, IRE; the sigmas follow from it.
    wide : bool
        Search over a third of a cell, to a fraction of a sample and with no sigma; else measure within a sixth,
        which keeps other features out.
    """
    index, xy = predicted(grid)
    points = warp.to_frame(xy)
    reach = [max(int(size * (0.34 if wide else 0.16)), 5) for size in cell]
    thick = [grid.thickness * cell[1] / _row_pitch(grid)] * 2
    thick[0] *= cell[0] / cell[1]
    clear = (int(np.ceil(0.1 * min(cell))), int(0.33 * min(cell)))
    here = _inside(points, (luma.shape[0], luma.shape[1]), clear[1] + 2.0)
    index, xy, points, arms = index[here], xy[here], points[here], _clear_arms(grid)[here]
    if len(points) < 4:
        return Crossings(index, xy, points, np.ones_like(points))
    slopes = warp.slopes(xy)
    shifts, sigma, good = np.zeros_like(points), np.ones_like(points), np.ones(len(points), dtype=bool)
    for axis in (0, 1):
        lines = _profiles(luma, points, slopes, arms[:, axis], axis, reach[axis], clear)
        if wide:
            shifts[:, axis], height = _coarse(lines, 0.05 * cell[axis])
        else:
            rows = arms[:, axis].sum(1) * (clear[1] - clear[0] + 1)
            still = np.zeros(len(points))
            shifts[:, axis], sigma[:, axis], height = _refine(lines, still, noise / np.sqrt(rows), thick[axis])
        good &= (height > 0.4 * np.median(height)) & (np.abs(shifts[:, axis]) < reach[axis] - 2)
    # The two lines lean a little: go from the predicted crossing along both to where they meet.
    lean_x = slopes[:, 0, 1] / slopes[:, 1, 1]
    lean_y = slopes[:, 1, 0] / slopes[:, 0, 0]
    moved_x = (shifts[:, 0] + lean_x * shifts[:, 1]) / (1 - lean_x * lean_y)
    moved_y = (shifts[:, 1] + lean_y * shifts[:, 0]) / (1 - lean_x * lean_y)
    found = points + np.stack([moved_x, moved_y], 1)
    return Crossings(index[good], xy[good], found[good], sigma[good])
