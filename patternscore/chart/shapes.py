"""The chart as layers of shapes, drawn one over the other; levels and drawings share them.

Coordinates are picture fractions, levels IRE. Shapes of one layer do not overlap, so that the mean level of
a sample on which several of them meet is exact too.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise
from typing import Literal

import numpy as np
import numpy.typing as npt

from patternscore import layout
from patternscore.chart.lettering import Lettering, labels
from patternscore.layout import COLUMNS, EDGE_DARK, EDGE_LIGHT, GROUND, ROWS, SLANT
from patternscore.plan import Burst, Patch, Plan, Point, Rect, Ruler


@dataclass(frozen=True, slots=True)
class Bars:
    """Bars of one level each, side by side along x (axis "h") or y ("v").

    ``bounds`` are the n + 1 positions along that axis, from one side of ``rect`` to the other.
    """

    rect: Rect
    axis: Literal["h", "v"]
    bounds: tuple[float, ...]
    levels: tuple[float, ...]


@dataclass(frozen=True, slots=True)
class Polygon:
    """A polygon of one level; the corners of a ``hole`` run the other way round than its own."""

    corners: tuple[Point, ...]
    level: float
    hole: tuple[Point, ...] = ()

    @property
    def contours(self) -> list[npt.NDArray[np.float64]]:
        """Outline, and that of the hole if there is one, (n, 2) each."""
        return [np.array(outline) for outline in (self.corners, self.hole) if outline]


@dataclass(frozen=True, slots=True)
class Disc:
    """A disc on a 4:3 screen, or two opposite quadrants of it.

    ``radius`` is in fractions of the height; ``quadrants`` is 0 for the whole disc, +1 for the quadrants
    top left and bottom right, -1 for the other two.
    """

    x: float
    y: float
    radius: float
    level: float
    quadrants: int = 0


Shape = Bars | Polygon | Disc | Burst | Lettering
Layer = tuple[Shape, ...]


def layers(plan: Plan) -> Iterator[Layer]:
    """All layers of the package's chart, back to front."""
    yield (_box(Rect(0.0, 0.0, 1.0, 1.0), GROUND),)
    yield from _crosshatch(plan)
    yield _blocks()
    yield _light_bars()
    yield *plan.bursts, *_gaps(plan.bursts), *_rows(plan.flats), *_rows(plan.steps)
    yield tuple(_marks(plan))
    yield tuple(_ruler(ruler) for ruler in plan.rulers)
    yield tuple(labels(plan))


def _box(rect: Rect, level: float) -> Bars:
    return Bars(rect, "h", (rect.x0, rect.x1), (level,))


def _cells(*points: Point) -> tuple[Point, ...]:
    return tuple((x / COLUMNS, y / ROWS) for x, y in points)


def _block(block: tuple[float, float, float, float], level: float) -> Bars:
    (x0, y0), (x1, y1) = _cells(block[:2], block[2:])
    return _box(Rect(x0, y0, x1, y1), level)


def _crosshatch(plan: Plan) -> Iterator[Layer]:
    """The outermost lines as one frame; the others end at the middle of the frame's, so that no rims coincide."""
    grid = plan.grid
    assert grid is not None
    half_y, half_x = grid.thickness / 2, grid.thickness * ROWS / COLUMNS / 2
    (left, *inner_x, right), (top, *inner_y, bottom) = grid.columns, grid.rows

    def ring(by: int) -> tuple[Point, ...]:
        x0, x1, y0, y1 = left - by * half_x, right + by * half_x, top - by * half_y, bottom + by * half_y
        return ((x0, y0), (x1, y0), (x1, y1), (x0, y1))[::by]

    yield (Polygon(ring(1), grid.line, ring(-1)),)
    yield tuple(_box(Rect(x - half_x, top, x + half_x, bottom), grid.line) for x in inner_x)
    yield tuple(_box(Rect(left, y - half_y, right, y + half_y), grid.line) for y in inner_y)


def _blocks() -> Layer:
    """What lies over the crosshatch: the disc, the blocks, the ground of bursts and flats."""
    x, y, radius = layout.circle()
    corners = (_block(block, EDGE_DARK) for block in layout.CORNER_BLOCKS.values())
    bands = (band for side, block in zip((-1, 1), layout.SIDE_BLOCKS, strict=True) for band in _bands(side, block))
    # The ground between bursts and flats ends under both: its rim must not coincide with theirs.
    left, top, right, bottom = layout.TOP_BLOCK
    strip = _block((left, top + 0.3, right, bottom - 0.3), GROUND)
    return Disc(x, y, radius, EDGE_DARK), *corners, *bands, strip


def _bands(side: int, block: tuple[float, float, float, float]) -> Iterator[Shape]:
    """Near-horizontal edges of a side block, dark uppermost."""
    x0, y0, x1, y1 = block
    lean, middle = side * SLANT * (x1 - x0) / 2, (y0 + y1) / 2
    inner = [(middle + offset + lean, middle + offset - lean) for offset in layout.SIDE_OFFSETS]
    bounds = [(y0, y0), *inner, (y1, y1)]
    for number, ((left, right), (low_left, low_right)) in enumerate(pairwise(bounds)):
        corners = _cells((x0, left), (x1, right), (x1, low_right), (x0, low_left))
        yield Polygon(corners, EDGE_LIGHT if number % 2 else EDGE_DARK)


def _light_bars() -> Layer:
    """Slanted bars in the disc and slanted squares in the corner blocks."""
    cx, cy = layout.DISC_CENTRE
    high = layout.BAR_HALF
    lean = SLANT * high
    bars = (
        Polygon(
            _cells(
                (cx + left + lean, cy - high),
                (cx + right + lean, cy - high),
                (cx + right - lean, cy + high),
                (cx + left - lean, cy + high),
            ),
            EDGE_LIGHT,
        )
        for left, right in zip(layout.BAR_OFFSETS[::2], layout.BAR_OFFSETS[1::2], strict=True)
    )
    squares = (Polygon(_cells(*layout.square_corners(place)), EDGE_LIGHT) for place in layout.CORNER_BLOCKS)
    return *bars, *squares


def _gaps(bursts: tuple[Burst, ...]) -> Iterator[Bars]:
    """Ground between the packets."""
    for before, after in pairwise(burst.rect for burst in bursts):
        yield _box(Rect(before.x1, before.y0, after.x0, before.y1), GROUND)


def _rows(patches: tuple[Patch, ...]) -> Iterator[Bars]:
    """Patches of a strip that lie side by side, as bars."""
    rows: dict[tuple[float, float], list[Patch]] = {}
    for patch in patches:
        rows.setdefault((patch.rect.y0, patch.rect.y1), []).append(patch)
    for (y0, y1), row in rows.items():
        bounds = (*(patch.rect.x0 for patch in row), row[-1].rect.x1)
        yield Bars(Rect(bounds[0], y0, bounds[-1], y1), "h", bounds, tuple(patch.level for patch in row))


def _marks(plan: Plan) -> Iterator[Disc]:
    for mark in plan.marks:
        yield Disc(mark.x, mark.y, mark.radius, mark.light, mark.hand)
        yield Disc(mark.x, mark.y, mark.radius, mark.dark, -mark.hand)


def _ruler(ruler: Ruler) -> Bars:
    levels = tuple(ruler.light if light else ruler.dark for light in ruler.bits)
    (low, high), (start, end) = ruler.band, (ruler.boundaries[0], ruler.boundaries[-1])
    if ruler.side in ("top", "bottom"):
        return Bars(Rect(start, low, end, high), "h", ruler.boundaries, levels)
    return Bars(Rect(low, start, high, end), "v", ruler.boundaries, levels)
