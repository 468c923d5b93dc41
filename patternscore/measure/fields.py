"""The two fields of a frame: whether they lie where they should and have the same level."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.flats import flat_areas
from patternscore.plan import Edge
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
_ENDS = 3  # samples or lines at each end of a cut that give the edge's two levels


@dataclass(frozen=True, slots=True)
class FieldDifference:
    """How the lines 1, 3, 5 ... lie against the lines 0, 2, 4 ...

    Attributes
    ----------
    down : Estimate
        Shift down the picture, frame lines.
    along : Estimate
        Shift along the line, samples.
    level : Estimate
        Difference in level, IRE.
    """

    down: Estimate
    along: Estimate
    level: Estimate

    def sentences(self) -> tuple[str, ...]:
        """Plain words for what is more than noise and large enough to matter."""
        said = []
        if abs(self.down.value) > max(0.15, 5 * self.down.sigma):
            way = "down" if self.down.value > 0 else "up"
            said.append(
                f"The second field lies {abs(self.down.value):.2f} lines too far {way}: interlace is off, and "
                "readings across the lines are of both fields together."
            )
        if abs(self.along.value) > max(0.25, 5 * self.along.sigma):
            said.append(
                f"The fields are {abs(self.along.value):.2f} samples apart along the line: the picture moved "
                "between them, or line timing differs."
            )
        if abs(self.level.value) > max(0.5, 5 * self.level.sigma):
            said.append(f"The fields differ in level by {abs(self.level.value):.1f} IRE.")
        return tuple(said)


def field_difference(frame: Frame, located: Located) -> FieldDifference:
    """Compare the fields by the places of slanted edges and the levels of flat patches.

    Raises
    ------
    Unreadable
        When the pattern has no edges of both directions or no patches in the frame.

    Notes
    -----
    The place of an edge in a cut through it is the area under the cut over its step, which needs no shape
    of the edge; a slanted edge meets the lines at all phases, so that lines of one field alone do.
    """
    down, along = [], []
    centre = [edge for edge in located.plan.edges if edge.place == "centre"]
    for edge in centre:
        cut = _cut(frame, located, edge)
        if cut is None:
            continue
        if edge.axis == "v":
            lines, cuts = cut
            down.append(_place(lines, cuts, 1) - _place(lines, cuts, 0))
        else:
            along.append(_across_rows(*cut))
    return FieldDifference(_mean(down), _mean(along), _level(frame, located))


def _mean(values: list[Any]) -> Estimate:
    if len(values) < 2:
        raise Unreadable("too few edges of the pattern are in the frame")
    found = np.array([np.mean(value) for value in values])
    return Estimate(float(np.median(found)), float(1.25 * np.std(found) / np.sqrt(len(found))))


def _cut(frame: Frame, located: Located, edge: Edge) -> tuple[Array, Array] | None:
    """Cuts across an edge: for "v" (first line, (n, samples)), for "h" (rows, (rows, n)); None off the frame."""
    run = located.warp.to_frame(np.linspace(edge.start, edge.end, 7)[1:-1])
    axis = 1 if edge.axis == "v" else 0
    size = frame.raster.height_lines if axis else frame.raster.width_samples
    reach = int(min(0.45 * min(edge.clear_before, edge.clear_after) * size, 14))
    begin, end = int(np.ceil(run[:, 1 - axis].min())), int(np.floor(run[:, 1 - axis].max()))
    low = int(np.floor(run[:, axis].min())) - reach
    high = int(np.ceil(run[:, axis].max())) + reach
    limits = (frame.samples, frame.rows)
    if reach < 4 or end - begin < 8 or low < 0 or begin < 0 or high >= limits[axis] or end >= limits[1 - axis]:
        return None
    if axis:
        return np.arange(low, high + 1), frame.luma[low : high + 1, begin : end + 1].astype(np.float64)
    return np.arange(begin, end + 1), frame.luma[begin : end + 1, low : high + 1].astype(np.float64)


def _place(lines: Array, cuts: Array, parity: int) -> Array:
    """Place of the edge in each column, from the lines of one field, frame lines."""
    own = lines % 2 == parity
    before, after = cuts[:_ENDS].mean(), cuts[-_ENDS:].mean()
    part = (cuts[own] - after) / (before - after)
    return np.asarray(lines[own][0] - 1.0 + 2.0 * part.sum(0))


def _across_rows(rows: Array, cuts: Array) -> Array:
    """Shift along the line of odd against even rows, samples."""
    before, after = cuts[:, :_ENDS].mean(), cuts[:, -_ENDS:].mean()
    place = ((cuts - after) / (before - after)).sum(1)
    design = np.stack([np.ones(len(rows)), rows - rows.mean(), (rows - rows.mean()) ** 2, rows % 2], 1)
    solved, *_ = np.linalg.lstsq(design, place, rcond=None)
    return np.asarray(solved[3])


def _level(frame: Frame, located: Located) -> Estimate:
    areas = flat_areas(frame, located)
    found: list[float] = []
    for cores in (areas.field, areas.flats, areas.steps):
        count = cores.levels.shape[1] // 2 * 2
        if not len(cores) or count < 4:
            continue
        means = cores.levels[:, :count].mean(2, dtype=np.float64)
        second = means[:, 1::2].mean(1) - means[:, ::2].mean(1)
        found += list(np.where(cores.top % 2 == 0, second, -second))
    if len(found) < 4:
        raise Unreadable("too few flat patches of the pattern are in the frame")
    return Estimate(float(np.median(found)), float(1.25 * np.std(found) / np.sqrt(len(found))))
