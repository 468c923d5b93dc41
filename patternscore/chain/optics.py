"""The picture as the spot sees it, its own pixels made good."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import UsageError
from patternscore.standard import Standard

Plane = npt.NDArray[np.float32]
Taps = tuple[float, ...]

CHART_SIZE = (5760, 1920)
_REACH = 8  # least reach to each side of the filter that makes pixels good
_SHARPEST = 0.7 * math.pi  # radians per pixel up to which their loss can be made good
_SPARE = 1e-3  # weight of what no one sees


class Picture:
    """Levels of the active picture, compared by content so that results can be kept for them.

    Parameters
    ----------
    levels : (h, w) array or None
        IRE; None stands for the package's chart.
    """

    def __init__(self, levels: npt.NDArray[Any] | None, standard: Standard) -> None:
        self.standard = standard
        self.levels: Plane | None = None
        self.token: tuple[Any, ...] = (standard.name,)
        if levels is not None:
            self.levels = np.ascontiguousarray(levels, dtype=np.float32)
            self.token = (self.levels.shape, hash(self.levels.tobytes()))
            if self.levels.ndim != 2 or not np.isfinite(self.levels).all():
                raise UsageError("the picture must be a plane of finite levels; give an array (height, width) in IRE")

    def __eq__(self, other: object) -> bool:
        return isinstance(other, Picture) and self.token == other.token

    def __hash__(self) -> int:
        return hash(self.token)

    @property
    def size(self) -> tuple[int, int]:
        """Width and height in pixels."""
        return CHART_SIZE if self.levels is None else (self.levels.shape[1], self.levels.shape[0])

    def plane(self) -> Plane:
        """Levels, (h, w); the chart is drawn now."""
        if self.levels is not None:
            return self.levels
        from patternscore.chart import render

        return render(self.standard, *CHART_SIZE)


@lru_cache(maxsize=2)
def filtered(picture: Picture, across: Taps, down: Taps) -> Plane:
    """Picture filtered along its rows and down its columns; its edges are continued."""
    import cv2

    seen = cv2.sepFilter2D(
        picture.plane(), cv2.CV_32F, np.array(across), np.array(down), borderType=cv2.BORDER_REPLICATE
    )
    return np.asarray(seen, dtype=np.float32)


@lru_cache(maxsize=4)
def sampled_rows(picture: Picture, across: Taps, rows: Taps, sigma: float) -> Plane:
    """Rows of the picture as a Gaussian spot sees them, filtered along.

    Parameters
    ----------
    rows : tuple of float
        Row coordinates at which the spot's middle passes.
    sigma : float
        Its sigma in rows, at least 0.6; the rows' own height is allowed for.
    """
    import cv2
    from scipy.sparse import csr_array

    height = picture.size[1]
    places = np.clip(np.array(rows), -0.5, height - 0.5)
    narrower = np.sqrt(sigma**2 - 1.0 / 12.0)  # a pixel is the mean over a box of variance 1/12
    reach = int(np.ceil(4.5 * narrower)) + 1
    taken = np.rint(places)[:, None].astype(np.int64) + np.arange(-reach, reach + 1)
    weights = np.exp(-0.5 * ((taken - places[:, None]) / narrower) ** 2)
    weights /= weights.sum(1, keepdims=True)
    line = np.broadcast_to(np.arange(len(places))[:, None], taken.shape)
    entries = (weights.ravel().astype(np.float32), (line.ravel(), np.clip(taken, 0, height - 1).ravel()))
    mixed = np.asarray(csr_array(entries, shape=(len(places), height)) @ picture.plane(), dtype=np.float32)
    seen = cv2.sepFilter2D(mixed, cv2.CV_32F, np.array(across), np.ones(1), borderType=cv2.BORDER_REPLICATE)
    return np.asarray(seen, dtype=np.float32)


@lru_cache(maxsize=64)
def spot_taps(sigma: float, pixel_us: float = 0.0, clock_mhz: float = 0.0) -> Taps:
    """Weights of a Gaussian spot and of the filter that makes good what pixels lose.

    Parameters
    ----------
    sigma : float
        Of the spot, in pixels.
    pixel_us, clock_mhz : float
        Duration of a pixel and clock on which the line is then reckoned; 0 where there is none.
    """
    highest, stop = _SHARPEST, math.inf
    if pixel_us > 0.0:
        clock = 2 * math.pi * pixel_us * clock_mhz  # radians per pixel; what passes 3/4 of it folds below 1/4
        highest, stop = min(_SHARPEST, clock / 4), max(clock * 3 / 4, min(_SHARPEST, clock / 4))
    return tuple(np.convolve(_gaussian(sigma), _pixel_inverse(highest, stop)).tolist())


def _gaussian(sigma: float) -> npt.NDArray[np.float64]:
    """Weights of a Gaussian of this sigma in pixels; three weights of the same variance where it is small."""
    if sigma < 0.6:
        return np.array([sigma**2 / 2, 1.0 - sigma**2, sigma**2 / 2])
    reach = int(np.ceil(4.5 * sigma))
    weights = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    return np.asarray(weights / weights.sum())


def _pixel_inverse(highest: float, stop: float) -> npt.NDArray[np.float64]:
    """Weights that undo pixels (a box) and linear interpolation between them (two boxes).

    Fitted by least squares: together with sinc^3 they are flat up to ``highest`` and let nothing pass from
    ``stop`` on, both in radians per pixel; the mean is kept exactly.
    """
    reach = max(_REACH, math.ceil(14.0 / (stop - highest)) if stop < math.pi else 0)
    w = np.linspace(0.0, np.pi, 500)
    wanted = (w <= highest).astype(np.float64)
    weight = np.where((w > highest) & (w < stop), _SPARE, 1.0)
    loss = np.sinc(w / (2 * np.pi)) ** 3
    # With the middle weight 1 - 2 sum(c), the response is 1 + sum c_k (2 cos k w - 2).
    waves = 2.0 * np.cos(np.outer(w, np.arange(1, reach + 1))) - 2.0
    solved, *_ = np.linalg.lstsq(waves * (loss * weight)[:, None], (wanted - loss) * weight, rcond=None)
    return np.concatenate([solved[::-1], [1.0 - 2.0 * solved.sum()], solved])
