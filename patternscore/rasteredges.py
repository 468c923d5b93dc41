"""Where the picture ends against blanking."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.located import RasterEdges
from patternscore.standard import Raster

Array = npt.NDArray[Any]
_SMOOTH = 5  # lines averaged before a line's onset is read


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

    def place(onset: float | None, last: int | None) -> float | None:
        return onset if onset is None or last is None else last - onset

    return RasterEdges(
        place(_onset(left), None),
        place(_onset(right), samples - 1),
        place(_onset(top), None),
        place(_onset(bottom), rows - 1),
    )


def _onset(lines: Array) -> float | None:
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
    # A turned or bent picture leaves blanking at different places; the raster starts at the first of them.
    return float(middle if high - low < 2.5 else np.mean(np.sort(onset)[: max(len(onset) // 8, 4)]))
