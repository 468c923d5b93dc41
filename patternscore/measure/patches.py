"""Flat patches of a plan, as seen in a frame: all of one kind gathered into one block of samples."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.plan import Edge, Patch, Plan, Rect
from patternscore.warp import Warp

Array = npt.NDArray[Any]
# Parts of a patch left out. Edges blur both ways, but what rings or trails follows them in scanning order.
_LEAD, _TRAIL, _ENDS = 0.32, 0.16, 0.2
_SHARE = 0.6  # of the usual size, under which a patch is left out


@dataclass(frozen=True, slots=True, eq=False)
class Cores:
    """Cores of patches of one kind, cut to one size.

    Attributes
    ----------
    patches : tuple of Patch
        Those that lie inside the frame, in the plan's order.
    levels : (n, rows, samples) float32, IRE
    left, top : (n,) int
        Frame coordinates of the first sample of each.
    """

    patches: tuple[Patch, ...]
    levels: Array
    left: Array
    top: Array

    def __len__(self) -> int:
        return len(self.patches)

    @property
    def count(self) -> int:
        """Samples of each core."""
        return int(self.levels.shape[1] * self.levels.shape[2])

    @property
    def nominal(self) -> Array:
        """Nominal levels, (n,) IRE."""
        return np.array([patch.level for patch in self.patches])

    @property
    def rows(self) -> Array:
        """Frame line of each row of each core, (n, rows) int."""
        return np.asarray(self.top[:, None] + np.arange(self.levels.shape[1]))

    @property
    def columns(self) -> Array:
        """Frame sample of the middle of each core, (n,) float64."""
        return np.asarray(self.left + (self.levels.shape[2] - 1) / 2.0)

    def only(self, kept: Array) -> Cores:
        """Some of them, by an (n,) bool array."""
        chosen = tuple(patch for patch, keep in zip(self.patches, kept, strict=True) if keep)
        return Cores(chosen, self.levels[kept], self.left[kept], self.top[kept])


@dataclass(frozen=True, slots=True, eq=False)
class Kinds:
    """Patches of a plan, those of one kind and about one size together.

    ``corners`` are those of their cores in picture fractions, (4 n, 2).
    """

    patches: tuple[tuple[Patch, ...], ...]
    corners: Array


@lru_cache(maxsize=8)
def kinds_of(plan: Plan) -> Kinds:
    """Ground, steps and flats of a plan, then the areas beside its edges."""
    kinds = (plan.field, plan.steps, plan.flats, *beside_edges(plan))
    return Kinds(kinds, _corners(kinds))


def cut_cores(frame: Frame, located: Located) -> tuple[Cores, ...]:
    """Cut the cores of a plan's patches out of a frame, kind by kind in the order of ``kinds_of``.

    Patches outside the frame, or much smaller than the usual one of their kind, are left out.
    """
    kinds = kinds_of(located.plan)
    boxes = _boxes(located.warp, kinds.corners)
    luma = np.ascontiguousarray(frame.luma)
    parts = np.split(boxes, np.cumsum([len(kind) for kind in kinds.patches])[:-1])
    return tuple(_cut(luma, kind, part) for kind, part in zip(kinds.patches, parts, strict=True))


def _cut(luma: Array, patches: tuple[Patch, ...], boxes: Array) -> Cores:
    width = luma.shape[1]
    size = boxes[:, 2:] - boxes[:, :2] + 1
    fits = [boxes[:, :2] >= 0, boxes[:, 2:] < (width, luma.shape[0]), size >= 3]
    inside = np.asarray(np.concatenate(fits, 1).all(1))
    if inside.any():
        inside &= (size >= _SHARE * np.median(size[inside], axis=0)).all(1)
    if not inside.any():
        return Cores((), np.zeros((0, 3, 3), np.float32), np.zeros(0, np.int64), np.zeros(0, np.int64))
    samples, rows = (int(least) for least in size[inside].min(0))
    left, top = (boxes[:, :2] + (size - (samples, rows)) // 2)[inside].T
    at = (top[:, None, None] + np.arange(rows)[:, None]) * width + left[:, None, None] + np.arange(samples)
    kept = tuple(patch for patch, keep in zip(patches, inside, strict=True) if keep)
    return Cores(kept, np.take(luma.ravel(), at), left, top)


def _corners(kinds: tuple[tuple[Patch, ...], ...]) -> Array:
    rects = [(p.rect.x0, p.rect.y0, p.rect.x1, p.rect.y1) for kind in kinds for p in kind]
    x0, y0, x1, y1 = np.array(rects, dtype=np.float64).reshape(-1, 4).T
    wide, tall = x1 - x0, y1 - y0
    x0, x1 = x0 + _LEAD * wide, x1 - _TRAIL * wide
    y0, y1 = y0 + _ENDS * tall, y1 - _ENDS * tall
    return np.stack([np.stack([x0, x1, x0, x1], 1), np.stack([y0, y0, y1, y1], 1)], 2).reshape(-1, 2)


def _boxes(warp: Warp, corners: Array) -> Array:
    """Upright boxes that lie wholly inside the patches' cores, (n, 4) first and last sample and line."""
    places = warp.to_frame(corners).reshape(-1, 4, 2)
    x, y = places[..., 0], places[..., 1]
    first = np.ceil([np.maximum(x[:, 0], x[:, 2]), np.maximum(y[:, 0], y[:, 1])])
    last = np.floor([np.minimum(x[:, 1], x[:, 3]), np.minimum(y[:, 2], y[:, 3])])
    return np.concatenate([first, last]).T.astype(np.int64)


def beside_edges(plan: Plan) -> tuple[tuple[Patch, ...], ...]:
    """Flat areas on both sides of a plan's near-vertical edges, as patches, those of one size together.

    Their levels are no references, but all areas of one nominal level ought to be alike over the picture.
    """
    groups: dict[bool, list[Patch]] = {}
    blocks: set[str] = set()
    for edge in plan.edges:
        if edge.axis != "h":
            continue
        kind = groups.setdefault(edge.place == "centre", [])
        if edge.block not in blocks:  # what lies before any other edge of a block lies after the one before it
            kind.append(_beside(edge, after=False))
        blocks.add(edge.block)
        kind.append(_beside(edge, after=True))
    return tuple(tuple(patch for patch in kind if patch.rect.x1 > patch.rect.x0) for kind in groups.values())


def _beside(edge: Edge, after: bool) -> Patch:
    """Largest upright rectangle on one side of an edge, within the distance that the pattern keeps its level."""
    leftmost, rightmost = min(edge.start[0], edge.end[0]), max(edge.start[0], edge.end[0])
    if after:
        rect = Rect(rightmost, edge.start[1], leftmost + edge.clear_after, edge.end[1])
        return Patch(f"after {edge.name}", rect, edge.after)
    rect = Rect(rightmost - edge.clear_before, edge.start[1], leftmost, edge.end[1])
    return Patch(f"before {edge.name}", rect, edge.before)
