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
_ENDS = 3  # samples, or lines, at each end of a cut that give the edge's two levels
_LEAST_STEP = 5.0  # IRE


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
    level = _level(frame, located)
    edges = [edge for edge in located.plan.edges if edge.place == "centre"]
    if not edges:
        raise Unreadable("the pattern has no edges at its centre")
    parts = np.linspace(0.0, 1.0, 7)[1:-1, None]
    runs = [np.add(edge.start, parts * np.subtract(edge.end, edge.start)) for edge in edges]
    places = located.warp.to_frame(np.concatenate(runs)).reshape(len(edges), -1, 2)
    down: dict[str, list[float]] = {}
    along: dict[str, list[tuple[Array, Array]]] = {}
    slopes: list[float] = []
    for edge, run in zip(edges, places, strict=True):
        cut = _cut(frame, edge, run)
        if cut is None:
            continue
        if edge.axis == "v":
            lines, cuts = cut
            cuts[lines % 2 == 1] -= level.value  # a field that is lighter would seem to lie elsewhere
            shift = float(np.mean(_place(lines, cuts, 1) - _place(lines, cuts, 0)))
            down.setdefault(edge.block, []).append(shift)
        else:
            found = _places_in_rows(cut[1])
            if found is not None:
                along.setdefault(edge.block, []).append((cut[0], found))
                slopes.append((run[-1, 0] - run[0, 0]) / (run[-1, 1] - run[0, 1]))
    moved = _down(down)
    return FieldDifference(moved, _along(along, -moved.value * float(np.mean(slopes or [0.0]))), level)


def _down(blocks: dict[str, list[float]]) -> Estimate:
    """Mean over blocks, which lean opposite ways: what moves along the line cancels, and is no scatter."""
    found = [shifts for shifts in blocks.values() if len(shifts) > 1]
    if not found:
        raise Unreadable("too few near-horizontal edges of the pattern are in the frame")
    variances = [np.var(shifts, ddof=1) / len(shifts) for shifts in found]
    mean = np.mean([np.mean(shifts) for shifts in found])
    return Estimate(float(mean), float(np.sqrt(np.sum(variances)) / len(found)))


def _cut(frame: Frame, edge: Edge, run: Array) -> tuple[Array, Array] | None:
    """Cuts across an edge: its lines or rows with, for "v", (lines, n) and, for "h", (rows, n); None off the frame."""
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


def _places_in_rows(cuts: Array) -> Array | None:
    """Place of the edge in each row, samples from the middle of the cut; None where a field shows no edge there.

    Taken from the middle level, so that the step, known for each field only, hardly counts.
    """
    before, after = cuts[:, :_ENDS].mean(1), cuts[:, -_ENDS:].mean(1)
    step = np.empty(len(cuts))
    for parity in (0, 1):
        step[parity::2] = (before - after)[parity::2].mean()
    if np.abs(step).min() < _LEAST_STEP:
        return None
    return np.asarray((cuts - (before + after)[:, None] / 2).sum(1) / step)


def _along(blocks: dict[str, list[tuple[Array, Array]]], slanted: float) -> Estimate:
    """Shift along the line of odd against even rows, samples, without what slanted edges make of a shift down.

    Edges of a block share rows, and so their jitter: they are averaged row by row before the scatter is taken.
    """
    found = []
    for block in blocks.values():
        first, last = max(rows[0] for rows, _ in block), min(rows[-1] for rows, _ in block)
        if last - first < 16:
            continue
        rows = np.arange(first, last + 1)
        place = np.mean([places[first - own[0] : last + 1 - own[0]] for own, places in block], axis=0)
        bend = (rows - rows.mean()) / len(rows)
        design = np.stack([np.ones(len(rows)), bend, bend**2, rows % 2], 1)
        solved, *_ = np.linalg.lstsq(design, place, rcond=None)
        left = place - design @ solved
        found.append((solved[3], float(left @ left) / (len(rows) - 4) * 4.0 / len(rows)))
    if not found:
        raise Unreadable("too few near-vertical edges of the pattern are in the frame")
    shifts, variances = np.array(found).T
    return Estimate(float(shifts.mean() - slanted), float(np.sqrt(variances.sum()) / len(found)))


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
