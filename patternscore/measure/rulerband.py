"""A ruler's band, followed along the picture and laid straight, so that its bars stand upright.

The band is followed with the located warp and averaged across, so noise and line jitter average out.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import cv2
import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.plan import Ruler
from patternscore.warp import Warp

Array = npt.NDArray[np.float64]
Axis = Literal["h", "v"]
USED = 0.72  # part of the band's depth that is averaged; the rest is margin for tilt and for the spot
GUIDES = 28  # points along the ruler at which the warp is asked for; at every third for its slopes
FEWEST = 4  # rows that a mean needs


@dataclass(frozen=True, slots=True, eq=False)
class Strip:
    """A ruler's band, straightened; index n of every array along it is frame coordinate n.

    Attributes
    ----------
    axis : {"h", "v"}
        "h": along the line, in samples; "v": down the frame, in lines.
    across : float
        Middle of the band, picture fraction across the ruler's axis.
    covered : (float, float)
        Picture fractions across between which its rows were taken.
    tilt : float
        By how much the bars lean within the band, samples, or the band runs aslant.
    mean : (n,) float64
        Mean of the rows, IRE.
    scatter : (n,) float64
        Half the difference of the means of two halves of the rows: what noise does to ``mean``.
    seen : (n,) bool
        Where enough rows lie in the frame.
    expected : (boundaries,) float64
        Where the warp puts the ruler's boundaries.
    """

    ruler: Ruler
    axis: Axis
    across: float
    covered: tuple[float, float]
    tilt: float
    mean: Array
    scatter: Array
    seen: npt.NDArray[np.bool_]
    expected: Array


def middle(values: npt.NDArray[np.floating[Any]]) -> float:
    """Upper median of an array; of few values it is had sooner by sorting."""
    return float(np.sort(values)[values.size // 2])


def axis_of(ruler: Ruler) -> Axis:
    """Which way a ruler runs."""
    return "h" if ruler.side in ("top", "bottom") else "v"


@dataclass(frozen=True, slots=True)
class Bend:
    """A folded stretch: from ``turning`` to the near or far end of the frame the scan runs back.

    ``ratio`` is the backward over the forward speed; 0 leaves it open and takes the band at its turning point.
    """

    turning: float
    ratio: float
    far: bool

    def forward(self, index: Array) -> tuple[Array, Array]:
        """Forward coordinate that shows the same place, and the backward slowness (0 where forward)."""
        back = index > self.turning if self.far else index < self.turning
        shown = np.where(back, self.turning - self.ratio * (index - self.turning), index)
        return shown, np.where(back, -1.0 / self.ratio if self.ratio > 0 else 0.0, 1.0)


def straighten(frame: Frame, warp: Warp, ruler: Ruler, bend: Bend | None = None) -> Strip:
    """Follow a ruler's band through the frame and lay it straight.

    Parameters
    ----------
    frame : Frame
        The frame.
    warp : Warp
        Picture fractions to frame coordinates, good to a sample or so.
    ruler : Ruler
        The ruler.
    bend : Bend, optional
        A fold, where the band leans and bows the other way.

    Raises
    ------
    Unreadable
        If the band lies outside the frame.
    """
    axis = axis_of(ruler)
    along, count = (0, frame.samples) if axis == "h" else (1, frame.rows)
    limit = (frame.rows if axis == "h" else frame.samples) - 1
    across = (ruler.band[0] + ruler.band[1]) / 2
    points = np.full((GUIDES + len(ruler.boundaries), 2), across)
    points[:GUIDES, along] = np.linspace(-0.04, 1.04, GUIDES)
    points[GUIDES:, along] = ruler.boundaries
    found, slopes = warp.to_frame(points), warp.slopes(points[:GUIDES:3])
    guide = found[:GUIDES, along]
    if np.any(guide[1:] <= guide[:-1]):
        raise Unreadable(f"the {ruler.side} ruler could not be followed")
    index = np.arange(count, dtype=np.float64)
    followed, slow = bend.forward(index) if bend is not None else (index, np.ones(1))
    centre = np.interp(followed, guide, found[:GUIDES, 1 - along])
    shear = slopes[:, along, 1 - along] / slopes[:, 1 - along, 1 - along]
    lean = np.interp(followed, guide[::3], shear) * slow
    depth = abs(ruler.band[1] - ruler.band[0]) * float(np.mean(slopes[:, 1 - along, 1 - along]))
    half = max(int(depth * USED / 2), 2)
    steps = np.arange(-half, half + 1, dtype=np.float32)[:, None]
    # Whole rows are taken: what lies between two would share their noise.
    across_map = np.rint(centre).astype(np.float32)[None, :] + steps
    away = np.rint(centre) - centre
    along_map = (index + lean * away).astype(np.float32)[None, :] + lean.astype(np.float32)[None, :] * steps
    maps = (along_map, across_map) if axis == "h" else (across_map, along_map)
    rows: npt.NDArray[Any] = cv2.remap(frame.luma, maps[0], maps[1], cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    whole = across_map[0].min() >= 0 and across_map[-1].max() <= limit
    inside = np.ones_like(rows, dtype=bool) if whole else (across_map >= 0) & (across_map <= limit)
    used = _alike(rows, inside, whole)
    mean, scatter, seen = _means(rows, used, whole and used is inside)
    if seen.sum() < 0.5 * count:
        raise Unreadable(f"the {ruler.side} ruler lies outside the frame")
    taken = steps[:, 0] if used is inside and whole else steps[used.mean(1) > 0.5, 0]
    wide = (ruler.band[1] - ruler.band[0]) / depth
    covered = ruler.band
    if taken.size:
        covered = (across + (float(taken[0]) - 0.5) * wide, across + (float(taken[-1]) + 0.5) * wide)
    tilt = max(half * float(np.abs(lean).max()), 0.02 * float(np.ptp(centre)))
    return Strip(ruler, axis, across, covered, tilt, mean, scatter, seen, found[GUIDES:, along])


def _alike(rows: npt.NDArray[np.float32], inside: npt.NDArray[np.bool_], whole: bool) -> npt.NDArray[np.bool_]:
    """Where rows lie in the frame, less whole rows that do not show the bars: a fold may reach into the band."""
    usual_row = rows.mean(0)
    usual_row -= usual_row.mean()
    if whole:
        gain = rows @ usual_row / max(float(usual_row @ usual_row), 1e-3)
    else:
        shown = inside.astype(np.float32)
        gain = ((rows - rows.mean(1)[:, None]) * shown) @ usual_row / np.maximum(shown @ usual_row**2, 1e-3)
    shown_rows = gain if whole else gain[inside.any(1)]
    usual = middle(shown_rows) if shown_rows.size else 0.0
    alike = np.abs(gain - usual) < 0.35 * abs(usual)
    return inside if alike.all() else inside & alike[:, None]


def _means(
    rows: npt.NDArray[np.float32], used: npt.NDArray[np.bool_], whole: bool
) -> tuple[Array, Array, npt.NDArray[np.bool_]]:
    """Mean of the rows, the scatter of the mean, and where there were rows enough.

    The halves are made of pairs of neighbouring rows, so that both hold as much of either field.
    """
    first = (np.arange(rows.shape[0]) // 2 % 2 == 0).astype(np.float32)
    split = np.stack([first, 1 - first])
    if whole:
        sums, counts = split @ rows, split.sum(1)[:, None]
    else:
        sums, counts = split @ (rows * used), split @ used.astype(np.float32)
    total = counts.sum(0)
    mean = sums.sum(0) / np.maximum(total, 1)
    each = sums / np.maximum(counts, 1)
    seen = np.broadcast_to(total >= FEWEST, mean.shape)
    return mean.astype(np.float64), ((each[0] - each[1]) / 2).astype(np.float64), seen
