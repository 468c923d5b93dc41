"""Where the picture ends against blanking."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.located import RasterEdges
from patternscore.reading import Estimate
from patternscore.standard import Raster

Array = npt.NDArray[Any]
_SMOOTH = 5  # lines averaged before a line's onset is read
_SHARED = _SMOOTH / (_SMOOTH - 2)  # every third of them is read: neighbours share lines


def raster_edges(luma: Array, raster: Raster) -> RasterEdges:
    """Ends of the picture on all four sides, to a fraction of a sample or line.

    Parameters
    ----------
    luma : (rows, samples) float32, IRE
    raster : Raster
        Nominal place of the picture; ends are looked for up to 15 % of its size further in.
    """
    import cv2

    rows, samples = luma.shape
    wide = min(int(max(raster.left, 0) + 0.15 * raster.width_samples), samples // 3)
    tall = min(int(max(raster.top, 0) + 0.15 * raster.height_lines), rows // 3)
    left = cv2.blur(luma[:, :wide], (1, _SMOOTH))[:: _SMOOTH - 2]
    right = cv2.blur(luma[:, -wide:], (1, _SMOOTH))[:: _SMOOTH - 2, ::-1]
    top = cv2.blur(luma[:tall], (4 * _SMOOTH, 1))[:, :: 2 * _SMOOTH].T
    bottom = cv2.blur(luma[-tall:], (4 * _SMOOTH, 1))[::-1, :: 2 * _SMOOTH].T

    found = [_onset(side) for side in (left, right, top, bottom)]
    last = (None, samples - 1, None, rows - 1)
    ends = [
        None if onset is None else onset.value if end is None else end - onset.value
        for onset, end in zip(found, last, strict=True)
    ]
    sigmas = [0.0 if onset is None else onset.sigma for onset in found]
    return RasterEdges(ends[0], ends[1], ends[2], ends[3], (sigmas[0], sigmas[1], sigmas[2], sigmas[3]))


def _onset(lines: Array) -> Estimate | None:
    """Position at which lines leave blanking, from their first sample on; None where they start in picture."""
    blank = float(np.median(lines[:, 0]))
    spread = 1.4826 * float(np.median(np.abs(lines[:, 0] - blank)))
    if abs(blank) > 12.0 or spread > 4.0:
        return None
    lifted = lines - blank
    clear = max(8.0, 6.0 * spread)
    # Each line's own plateau just after it leaves blanking sets its half level.
    leaves = np.argmax(lifted > clear, axis=1)
    used = (lifted.max(axis=1) > clear) & (leaves > 0) & (leaves < lines.shape[1] - 8)
    if np.count_nonzero(used) < max(8, 0.05 * len(lines)):
        return None
    lifted, leaves = lifted[used], leaves[used]
    at = np.arange(len(leaves))
    plateau = np.median(lifted[at[:, None], leaves[:, None] + np.arange(2, 7)[None]], axis=1)
    half = np.maximum(plateau, clear) / 2
    over = np.argmax(lifted >= half[:, None], axis=1)
    before, after = lifted[at, np.maximum(over - 1, 0)], lifted[at, over]
    onset = over - (after - half) / np.maximum(after - before, 1e-3)
    onset = onset[over > 0]
    if len(onset) < 8:
        return None
    low, middle, high = np.quantile(onset, [0.1, 0.5, 0.9])
    if high - low < 2.5:
        return Estimate(float(middle), float(1.25 * np.std(onset) / np.sqrt(len(onset) / _SHARED)))
    # A turned or bent picture leaves blanking at different places; the raster starts at the first of them.
    first = np.sort(onset)[: max(len(onset) // 8, 4)]
    return Estimate(float(first.mean()), float(np.std(first) / np.sqrt(len(first) / _SHARED)))
