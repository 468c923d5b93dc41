"""A plan: where the features of a pattern lie, in fractions of the picture.

x runs from 0 at the left edge of the picture to 1 at the right, y from 0 at the top to 1 at the bottom;
levels are in IRE. The classes hold no behaviour beyond what follows from their fields.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Point = tuple[float, float]
Side = Literal["left", "right", "top", "bottom"]


@dataclass(frozen=True, slots=True)
class Rect:
    """A rectangle of the picture, fractions."""

    x0: float
    y0: float
    x1: float
    y1: float

    def inset(self, dx: float, dy: float) -> Rect:
        """Give the rectangle moved in by dx at both sides and dy at top and bottom."""
        return Rect(self.x0 + dx, self.y0 + dy, self.x1 - dx, self.y1 - dy)


@dataclass(frozen=True, slots=True)
class Edge:
    """A straight edge between two levels.

    Attributes
    ----------
    axis : {"h", "v"}
        "h": near-vertical, shows the response along the line; "v": near-horizontal, across the lines.
    start, end : Point
        Ends of its usable part, top to bottom for "h", left to right for "v".
    before, after : float
        Levels left and right of it ("h"), above and below it ("v"), IRE.
    clear_before, clear_after : float
        Distance on each side over which the pattern keeps its level, fraction of the width ("h") or
        height ("v").
    place : str
        "centre", "top left", "top right", "bottom left" or "bottom right".
    block : str
        Edges of one axis and block are parallel and share lines ("h") or samples ("v"), so that their
        responses add up.
    """

    name: str
    axis: Literal["h", "v"]
    start: Point
    end: Point
    before: float
    after: float
    clear_before: float
    clear_after: float
    place: str
    block: str


@dataclass(frozen=True, slots=True)
class Grid:
    """The crosshatch: thin lines at the positions ``columns`` (x) and ``rows`` (y).

    ``shown`` lists the crossings (column index, row index) that can be measured, ``arms`` for each of them
    which of its four arms run clear of other features for a third of a cell, as letters of "lrud" (left,
    right, up, down). ``line`` and ``ground`` are levels in IRE, ``thickness`` is in fractions of the height.
    """

    columns: tuple[float, ...]
    rows: tuple[float, ...]
    shown: tuple[tuple[int, int], ...]
    arms: tuple[str, ...]
    line: float
    ground: float
    thickness: float


@dataclass(frozen=True, slots=True)
class Patch:
    """A flat patch of one nominal level, IRE."""

    name: str
    rect: Rect
    level: float


@dataclass(frozen=True, slots=True)
class Ruler:
    """A band of bars in the order of an orientable sequence.

    ``boundaries`` are the n + 1 positions along the ruler's axis (x for "top" and "bottom", y for "left"
    and "right"), ``bits`` whether each bar is light; ``band`` is its extent across (y0, y1 or x0, x1).
    """

    side: Side
    band: tuple[float, float]
    boundaries: tuple[float, ...]
    bits: tuple[bool, ...]
    dark: float
    light: float


@dataclass(frozen=True, slots=True)
class Burst:
    """A packet of sine waves along the line: ``middle`` + ``swing`` * sin(2 pi mhz t), t from its left side."""

    rect: Rect
    mhz: float
    middle: float
    swing: float


@dataclass(frozen=True, slots=True)
class Mark:
    """A disc of four quadrants, alternately light and dark, for finding the pattern.

    ``hand`` is +1 where the top left and bottom right quadrants are light, -1 where they are dark;
    ``radius`` is in fractions of the height.
    """

    x: float
    y: float
    hand: int
    radius: float
    dark: float
    light: float


@dataclass(frozen=True, slots=True)
class Plan:
    """All features of one pattern."""

    name: str
    standard: str
    edges: tuple[Edge, ...] = ()
    grid: Grid | None = None
    steps: tuple[Patch, ...] = ()
    flats: tuple[Patch, ...] = ()
    field: tuple[Patch, ...] = ()
    rulers: tuple[Ruler, ...] = ()
    bursts: tuple[Burst, ...] = ()
    marks: tuple[Mark, ...] = ()
