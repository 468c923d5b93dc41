"""The chart as a list of shapes, drawn one over the other; raster and vector output share it.

Coordinates are picture fractions, levels IRE.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

from patternscore import layout
from patternscore.chart.lettering import labels
from patternscore.layout import COLUMNS, DARK, GROUND, LIGHT, ROWS, SLANT
from patternscore.plan import Burst, Plan, Point, Rect


@dataclass(frozen=True, slots=True)
class Box:
    """An upright rectangle of one level."""

    rect: Rect
    level: float


@dataclass(frozen=True, slots=True)
class Polygon:
    """A convex polygon of one level, corners clockwise as seen."""

    corners: tuple[Point, ...]
    level: float


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


@dataclass(frozen=True, slots=True)
class Lettering:
    """A word: its baseline starts (anchor "start") or is centred ("middle") or ends ("end") at (x, y)."""

    text: str
    x: float
    y: float
    height: float
    level: float
    anchor: str = "start"


Shape = Box | Polygon | Disc | Burst | Lettering


def _cells(*points: Point) -> tuple[Point, ...]:
    return tuple((x / COLUMNS, y / ROWS) for x, y in points)


def _box(block: tuple[float, float, float, float], level: float) -> Box:
    (x0, y0), (x1, y1) = _cells(block[:2], block[2:])
    return Box(Rect(x0, y0, x1, y1), level)


def shapes(plan: Plan) -> Iterator[Shape]:
    """All shapes of the package's chart, back to front."""
    yield Box(Rect(0.0, 0.0, 1.0, 1.0), GROUND)
    yield from _crosshatch(plan)
    yield from _bars()
    for side, block in zip((-1, 1), layout.SIDE_BLOCKS, strict=True):
        yield from _bands(side, block)
    for place, block in layout.CORNER_BLOCKS.items():
        yield _box(block, DARK)
        yield Polygon(_cells(*layout.square_corners(place)), LIGHT)
    yield _box(layout.TOP_BLOCK, GROUND)
    yield from plan.bursts
    for patch in (*plan.flats, *plan.steps):
        yield Box(patch.rect, patch.level)
    for mark in plan.marks:
        yield Disc(mark.x, mark.y, mark.radius, mark.light, mark.hand)
        yield Disc(mark.x, mark.y, mark.radius, mark.dark, -mark.hand)
    yield from _rulers(plan)
    yield from (Lettering(*label) for label in labels(plan))


def _crosshatch(plan: Plan) -> Iterator[Box]:
    grid = plan.grid
    assert grid is not None
    half_y, half_x = grid.thickness / 2, grid.thickness * ROWS / COLUMNS / 2
    left, right = grid.columns[0] - half_x, grid.columns[-1] + half_x
    top, bottom = grid.rows[0] - half_y, grid.rows[-1] + half_y
    for x in grid.columns:
        yield Box(Rect(x - half_x, top, x + half_x, bottom), grid.line)
    for y in grid.rows:
        yield Box(Rect(left, y - half_y, right, y + half_y), grid.line)


def _bars() -> Iterator[Shape]:
    """Two slanted bars in the disc at the centre."""
    x, y, radius = layout.circle()
    yield Disc(x, y, radius, DARK)
    cx, cy = layout.DISC_CENTRE
    high = layout.BAR_HALF
    lean = SLANT * high
    for left, right in zip(layout.BAR_OFFSETS[::2], layout.BAR_OFFSETS[1::2], strict=True):
        yield Polygon(
            _cells(
                (cx + left + lean, cy - high),
                (cx + right + lean, cy - high),
                (cx + right - lean, cy + high),
                (cx + left - lean, cy + high),
            ),
            LIGHT,
        )


def _bands(side: int, block: tuple[float, float, float, float]) -> Iterator[Shape]:
    """Near-horizontal edges of a side block."""
    x0, y0, x1, y1 = block
    yield _box(block, DARK)
    lean, middle = side * SLANT * (x1 - x0) / 2, (y0 + y1) / 2
    first, second, third = (middle + offset for offset in layout.SIDE_OFFSETS)
    yield Polygon(
        _cells((x0, first + lean), (x1, first - lean), (x1, second - lean), (x0, second + lean)), LIGHT
    )
    yield Polygon(_cells((x0, third + lean), (x1, third - lean), (x1, y1), (x0, y1)), LIGHT)


def _rulers(plan: Plan) -> Iterator[Box]:
    for ruler in plan.rulers:
        low, high = ruler.band
        bars = zip(ruler.boundaries[:-1], ruler.boundaries[1:], ruler.bits, strict=True)
        for start, end, light in bars:
            level = ruler.light if light else ruler.dark
            if ruler.side in ("top", "bottom"):
                yield Box(Rect(start, low, end, high), level)
            else:
                yield Box(Rect(low, start, high, end), level)
