"""Lines across parallel edges, as windows of samples about each edge in each line."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.stepbasis import BINS
from patternscore.plan import Edge

Array = npt.NDArray[np.float64]
Single = npt.NDArray[np.float32]

LONGEST = {"h": 26.0, "v": 12.0}  # samples each side of an edge that are used at most
SHORTEST = 5.0  # and at least
MARGIN = 1.5  # samples kept off what lies beyond the clear part
END = {"h": 4, "v": 10}  # rows kept off the ends of an edge: spot and error of location, smear along the line
FEWEST = 12  # lines across an edge
_PARTS = np.array([0.0, 0.3, 0.7, 1.0])  # of an edge, where it is laid on the frame
LOWEST = 6.0  # IRE of step


@dataclass(slots=True, eq=False)
class Strip:
    """The parallel edges of one block, as windows of samples about each edge in each line.

    Along the line: rows are frame lines, positions are samples. Across: rows are columns, positions lines.

    Attributes
    ----------
    luma : (lines, samples) float32
        The frame.
    across : bool
        Whether rows are columns of the frame.
    rows : (n,) int
        Rows that cross all edges.
    position : (edges, n) float64
        Where each edge lies in each row.
    left, right : int
        Whole samples used before and after an edge.
    sign, middle, step : (edges,) float64
        Polarity, mean of the two levels (IRE), their difference (IRE, positive).
    shifts : (n,) float64
        Shift of each row against the straight run of its edges, samples.
    field_shift : float
        Across only: how much later an edge lies in the lines 1, 3, 5 ... than in the others, lines.
    levelled : bool
        Whether differences of level between the rows have been taken off.
    binned : tuple or None
        What ``bins`` found last, with the positions and levels that it was for.
    start : (edges, n) int
        First sample of each window cut.
    levels : (edges, n, window) float32
        The windows, IRE.
    """

    luma: Single
    across: bool
    rows: npt.NDArray[np.int64]
    position: Array
    left: int
    right: int
    sign: Array = field(default_factory=lambda: np.ones(1))
    middle: Array = field(default_factory=lambda: np.zeros(1))
    step: Array = field(default_factory=lambda: np.ones(1))
    shifts: Array = field(default_factory=lambda: np.zeros(1))
    field_shift: float = 0.0
    levelled: bool = False
    binned: tuple[Array, Single, npt.NDArray[np.int32], Single] | None = None
    start: npt.NDArray[np.int64] = field(default_factory=lambda: np.zeros((1, 1), dtype=np.int64))
    levels: Single = field(default_factory=lambda: np.zeros((1, 1, 1), dtype=np.float32))

    @property
    def length(self) -> int:
        """Samples of a row."""
        return int(self.luma.shape[0 if self.across else 1])

    def cut(self) -> None:
        """Cut the windows about the present positions; small moves later on need no new cut."""
        self.start = np.floor(self.position).astype(np.int64) - self.left
        columns = self.start[..., None] + np.arange(self.left + self.right + 2)
        if self.start.min() < 0 or columns[..., -1].max() >= self.length:
            np.clip(columns, 0, self.length - 1, out=columns)
        samples = self.luma.shape[1]
        if self.across:
            columns *= samples
            columns += self.rows[:, None]
        else:
            columns += (self.rows * samples)[:, None]
        self.levels = np.take(self.luma, columns)
        self.shifts = np.zeros(len(self.rows))

    def narrow(self, left: int, right: int) -> None:
        """Narrow the windows to these whole samples before and after the edges."""
        first = self.left - left
        self.levels = self.levels[..., first : first + left + right + 2]
        self.start = self.start + first
        self.left, self.right = left, right

    def keep(self, rows: npt.NDArray[np.bool_]) -> None:
        """Drop the other rows."""
        self.rows, self.position = self.rows[rows], self.position[:, rows]
        self.start, self.levels = self.start[:, rows], self.levels[:, rows]
        self.shifts = self.shifts[rows]

    def times(self) -> Single:
        """Times of the windows' samples from the edge, samples: (edges, rows, window)."""
        reach = np.arange(self.levels.shape[2], dtype=np.float32)
        times = reach + (self.start - self.position).astype(np.float32)[..., None]
        if self.field_shift:
            odd = (self.start[..., None] + np.arange(self.levels.shape[2])) % 2
            times -= np.float32(self.field_shift) * (odd - np.float32(0.5)).astype(np.float32)
        return times

    def bins(self) -> tuple[npt.NDArray[np.int32], Single]:
        """Bin of each sample in a table of (edges, bins + 2), its ends for what lies outside, and distance from it."""
        if self.binned is not None and self.binned[0] is self.position and self.binned[1] is self.levels:
            return self.binned[2], self.binned[3]
        place = self.times()
        place *= np.float32(BINS)
        nearest = np.rint(place)
        place -= nearest
        place *= np.float32(1.0 / BINS)
        index = nearest.astype(np.int32)
        index += np.int32(self.left * BINS + 1)
        size = (self.left + self.right) * BINS + 3
        np.maximum(index, 0, out=index)
        np.minimum(index, size - 1, out=index)
        index += (np.arange(len(index), dtype=np.int32) * np.int32(size))[:, None, None]
        self.binned = self.position, self.levels, index, place
        return index, place

    def clipped_at(self, limits: tuple[float, float]) -> bool:
        """Whether the plateaus lie at the ends of the coding range."""
        low, high = self.middle - self.step / 2, self.middle + self.step / 2
        return bool(np.any(low <= limits[0]) or np.any(high >= limits[1]))

    def signed(self, levels: Single) -> Single:
        """Levels as fractions of the step about its middle, every edge rising: -1/2 to 1/2."""
        scale = (self.sign / self.step).astype(np.float32)[:, None, None]
        return (levels - self.middle.astype(np.float32)[:, None, None]) * scale


@dataclass(frozen=True, slots=True, eq=False)
class Run:
    """Where an edge of the plan ought to lie in the frame.

    Attributes
    ----------
    low, high : float
        Rows between which it runs.
    curve : (4,) float64
        Its position, a cubic in the row, -1 to 1 from ``low`` to ``high``; lowest power first.
    before, after : float
        Samples that are clear on its sides.
    """

    edge: Edge
    low: float
    high: float
    curve: Array
    before: float
    after: float

    def position(self, rows: npt.NDArray[Any]) -> Array:
        """Position in some rows."""
        u = (2.0 * rows - self.low - self.high) / (self.high - self.low)
        c = self.curve
        return np.asarray(c[0] + u * (c[1] + u * (c[2] + u * c[3])))


def lay_runs(located: Located, edges: list[Edge]) -> dict[str, Run]:
    """Lay edges of the plan on the frame, by name."""
    if not edges:
        return {}
    ends = np.array([(edge.start, edge.end) for edge in edges])
    upright = np.array([edge.axis == "h" for edge in edges])
    aside = np.where(upright[:, None], [1.0, 0.0], [0.0, 1.0])
    clear = np.array([(-edge.clear_before, edge.clear_after) for edge in edges])
    middle = ends.mean(axis=1)[:, None]
    along = ends[:, :1] + _PARTS[None, :, None] * (ends[:, 1:] - ends[:, :1])
    points = np.concatenate([along, middle, middle + clear[..., None] * aside[:, None]], axis=1)
    found = located.warp.to_frame(points.reshape(-1, 2)).reshape(points.shape)
    place = np.where(upright[:, None], found[..., 0], found[..., 1])
    rows = np.where(upright[:, None], found[:, :4, 1], found[:, :4, 0])
    low, high = rows.min(axis=1), rows.max(axis=1)
    u = (2.0 * rows - (low + high)[:, None]) / np.maximum(high - low, 1e-6)[:, None]
    curves = np.linalg.solve(u[..., None] ** np.arange(4), place[:, :4, None])[..., 0]
    sides = np.abs(place[:, 5:] - place[:, 4:5])
    return {
        edge.name: Run(edge, float(low[k]), float(high[k]), curves[k], float(sides[k, 0]), float(sides[k, 1]))
        for k, edge in enumerate(edges)
    }


def cut_strip(frame: Frame, runs: list[Run]) -> Strip:
    """Lay out the windows of one block's edges.

    Parameters
    ----------
    runs : list of Run
        The edges of the block.

    Raises
    ------
    Unreadable
        If the block is cut off by the frame or too short.
    """
    axis = runs[0].edge.axis
    count, length = frame.luma.shape if axis == "h" else frame.luma.shape[::-1]
    low = max(max(run.low for run in runs) + END[axis], 0.0)
    high = min(min(run.high for run in runs) - END[axis], count - 1.0)
    rows = np.arange(int(np.ceil(low)), int(np.floor(high)) + 1)
    if len(rows) < FEWEST:
        raise Unreadable("the edge does not cross enough of the frame")
    runs = sorted(runs, key=lambda run: run.curve[0])
    position = np.stack([run.position(rows) for run in runs])
    gaps = np.diff([run.curve[0] for run in runs]) / 2
    before, after = min([runs[0].before - MARGIN, *gaps]), min([runs[-1].after - MARGIN, *gaps])
    if min(before, after) < SHORTEST:
        raise Unreadable("too little of the pattern is clear beside the edge")
    inside = (position[0] - before > 0) & (position[-1] + after < length - 1)
    if np.count_nonzero(inside) < FEWEST:
        raise Unreadable("the edge lies too near the side of the frame")
    longest = LONGEST[axis]
    return Strip(
        np.ascontiguousarray(frame.luma),
        axis == "v",
        rows[inside],
        position[:, inside],
        int(min(before, longest)),
        int(min(after, longest)),
    )
