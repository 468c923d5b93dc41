"""Flat patches of a plan, as seen in a frame."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.plan import Patch
from patternscore.warp import Warp

Array = npt.NDArray[Any]
_SIDE, _ENDS = 0.24, 0.2  # parts of a patch left out at each side, and at top and bottom: edges ring and blur
_LEAST = 12  # samples that make a patch


@dataclass(frozen=True, slots=True, eq=False)
class SeenPatch:
    """The core of a patch in a frame.

    Attributes
    ----------
    levels : (rows, samples) float32, IRE
    left, top : int
        Frame coordinates of its first sample.
    x, y : float
        Its middle, picture fractions.
    """

    patch: Patch
    levels: Array
    left: int
    top: int
    x: float
    y: float

    @property
    def mean(self) -> float:
        """Mean level, IRE."""
        return float(self.levels.mean(dtype=np.float64))

    @property
    def count(self) -> int:
        """Number of samples."""
        return int(self.levels.size)

    def noise(self) -> tuple[float, int]:
        """Variance about the row and column means, and its degrees of freedom.

        What is the same on all rows (ringing of an edge) or all along a row (hum, streaks) does not count.
        """
        rows, samples = self.levels.shape
        levels = self.levels.astype(np.float64)
        rest = levels - levels.mean(0) - levels.mean(1, keepdims=True) + levels.mean()
        freedom = (rows - 1) * (samples - 1)
        return float((rest**2).sum() / max(freedom, 1)), freedom


def seen_patches(frame: Frame, located: Located, patches: tuple[Patch, ...]) -> list[SeenPatch]:
    """Cores of the patches that lie inside the frame, in the plan's order."""
    found = []
    boxes = patch_boxes(located.warp, patches)
    for patch, (x0, y0, x1, y1) in zip(patches, boxes, strict=True):
        if x0 < 0 or y0 < 0 or x1 >= frame.samples or y1 >= frame.rows:
            continue
        levels = frame.luma[y0 : y1 + 1, x0 : x1 + 1]
        if levels.size >= _LEAST and min(levels.shape) >= 2:
            rect = patch.rect
            middle = (rect.x0 + rect.x1) / 2, (rect.y0 + rect.y1) / 2
            found.append(SeenPatch(patch, levels, x0, y0, *middle))
    return found


def patch_boxes(warp: Warp, patches: tuple[Patch, ...]) -> Array:
    """Upright boxes that lie wholly inside the patches' cores, (n, 4) first and last sample and line."""
    corners = []
    for patch in patches:
        core = patch.rect.inset(_SIDE * (patch.rect.x1 - patch.rect.x0), _ENDS * (patch.rect.y1 - patch.rect.y0))
        corners.append([(core.x0, core.y0), (core.x1, core.y0), (core.x0, core.y1), (core.x1, core.y1)])
    places = warp.to_frame(np.reshape(corners, (-1, 2))).reshape(-1, 4, 2)
    x, y = places[..., 0], places[..., 1]
    return np.stack(
        [
            np.ceil(np.maximum(x[:, 0], x[:, 2])),
            np.ceil(np.maximum(y[:, 0], y[:, 1])),
            np.floor(np.minimum(x[:, 1], x[:, 3])),
            np.floor(np.minimum(y[:, 2], y[:, 3])),
        ],
        1,
    ).astype(int)


def noise_variance(seen: list[SeenPatch], frame: Frame) -> tuple[float, int]:
    """Variance of the noise in IRE squared, coding noise included, and its degrees of freedom.

    Patches that stand out (something else lies in them) or touch the ends of the coding range are left out.
    """
    margin = 2.0 * frame.code_step
    inside = [
        patch
        for patch in seen
        if patch.levels.min() > frame.code_floor + margin and patch.levels.max() < frame.code_ceiling - margin
    ]
    parts = np.array([patch.noise() for patch in inside]).reshape(-1, 2)
    if len(parts) == 0:
        return 0.0, 0
    usual = float(np.median(parts[:, 0]))
    kept = parts[parts[:, 0] <= max(3.0 * usual, frame.code_step**2 / 4)]
    freedom = int(kept[:, 1].sum())
    return float((kept[:, 0] * kept[:, 1]).sum() / max(freedom, 1)), freedom
