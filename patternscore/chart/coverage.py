"""How much of each sample's area a shape covers, exactly."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]


def interval_cover(count: int, start: float, end: float) -> tuple[slice, Array]:
    """Samples that an interval touches, and how much of each it covers.

    Parameters
    ----------
    count : int
        Samples from 0 to 1.
    start, end : float
        Ends of the interval, fractions.
    """
    first, last = max(int(np.floor(start * count)), 0), min(int(np.ceil(end * count)), count)
    index = np.arange(first, last)
    covered = np.minimum(index + 1, end * count) - np.maximum(index, start * count)
    return slice(first, last), np.clip(covered, 0.0, 1.0)


def polygon_cover(contours: Sequence[npt.NDArray[Any]], width: int, height: int) -> Array:
    """Area of each sample that lies within closed contours.

    Parameters
    ----------
    contours : sequence of (n, 2) arrays
        Corners in samples and lines, the first sample reaching from 0 to 1; all inside the window. Outer
        contours turn one way, holes the other.
    width, height : int
        Size of the window.

    Returns
    -------
    (height, width) float64
        0 to 1.

    Notes
    -----
    Each side is cut where it meets the sample raster. A piece that goes down by dy covers dy of all
    samples to its right, and of its own sample the part right of its middle: the running sum along the
    line of these contributions is the area (Green's theorem, sample by sample).
    """
    start = np.concatenate([np.asarray(contour, dtype=np.float64) for contour in contours])
    end = np.concatenate([np.roll(np.asarray(contour, dtype=np.float64), -1, axis=0) for contour in contours])
    head, tail = _pieces(start, end)
    middle, drop = (head + tail) / 2, tail[:, 1] - head[:, 1]
    column = np.clip(np.floor(middle[:, 0]), 0, width - 1).astype(np.int64)
    row = np.clip(np.floor(middle[:, 1]), 0, height - 1).astype(np.int64)
    beyond = drop * (middle[:, 0] - column)
    place, size = row * (width + 1) + column, height * (width + 1)
    steps = np.bincount(place, drop - beyond, size) + np.bincount(place + 1, beyond, size)
    area = np.cumsum(steps.reshape(height, width + 1), axis=1)[:, :width]
    return np.asarray(np.clip(area if area.sum() > 0 else -area, 0.0, 1.0))


def _pieces(start: Array, end: Array) -> tuple[Array, Array]:
    """Cut sides at all whole coordinates: heads and tails of the pieces, (n, 2) each."""
    delta = end - start
    sides = np.arange(len(start))
    owners, parts = [sides, sides], [np.zeros(len(start)), np.ones(len(start))]
    for axis in (0, 1):
        low, high = np.minimum(start, end)[:, axis], np.maximum(start, end)[:, axis]
        first = np.floor(low) + 1
        count = np.maximum(np.ceil(high) - first, 0).astype(np.int64)
        owner = np.repeat(sides, count)
        whole = first[owner] + np.arange(len(owner)) - np.repeat(np.cumsum(count) - count, count)
        owners.append(owner)
        parts.append((whole - start[owner, axis]) / delta[owner, axis])
    owner, part = np.concatenate(owners), np.concatenate(parts)
    order = np.lexsort((part, owner))
    owner, part = owner[order], part[order]
    points = start[owner] + part[:, None] * delta[owner]
    same = owner[1:] == owner[:-1]
    return points[:-1][same], points[1:][same]
