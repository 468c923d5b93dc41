"""What the types of a plan cannot say: places, orders, levels and counts that make sense."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import fields, is_dataclass
from itertools import pairwise
from typing import Any

from patternscore.plan import Burst, Edge, Grid, Mark, Plan, Rect, Ruler
from patternscore.plankeys import SECTIONS, Fault, called
from patternscore.standard import ASPECT, STANDARDS
from patternscore.tomlfile import Place

_REACH = 0.25  # how far outside the picture a feature may be said to lie
_DARKEST, _LIGHTEST = -50.0, 150.0  # IRE
_PLACES = ("x", "y", "start", "end", "rect", "band", "boundaries", "columns", "rows")
_LEVELS = ("before", "after", "level", "dark", "light", "line", "ground", "middle")
_SIZES = ("clear_before", "clear_after", "thickness", "radius")
_WHERE = ("centre", "top left", "top right", "bottom left", "bottom right")


def check_sense(plan: Plan) -> None:
    """Refuse a plan that no pattern can have.

    Raises
    ------
    Fault
        For the first thing found, with the way to it.
    """
    if plan.standard not in STANDARDS:
        raise Fault(("standard",), f'the plan has standard "{plan.standard}"; write "525" or "625"')
    if not plan.name.strip() or not plan.name.isprintable():
        raise Fault(("name",), "the plan has no name that can be printed; write one in quotes")
    for section in SECTIONS:
        value = getattr(plan, section)
        for number, entry in enumerate(value if isinstance(value, tuple) else ()):
            _Check(plan, (section, number), entry).all()
    if plan.grid is not None:
        _Check(plan, ("grid",), plan.grid).all()


class _Check:
    """Checks of one entry."""

    def __init__(self, plan: Plan, place: Place, entry: Any) -> None:
        self.place, self.entry, self.name = place, entry, called(place, plan)

    def refuse(self, key: str, message: str) -> None:
        raise Fault((*self.place, key), f"{self.name}: {message}")

    def all(self) -> None:
        for field in fields(self.entry):
            self.numbers(field.name, _flat(getattr(self.entry, field.name)))
        rect = getattr(self.entry, "rect", None)
        if rect is not None and not (rect.x0 < rect.x1 and rect.y0 < rect.y1):
            self.refuse("rect", "its rectangle is turned over; write [x0, y0, x1, y1] with x0 < x1 and y0 < y1")
        checks = {Edge: self.edge, Grid: self.grid, Ruler: self.ruler, Burst: self.burst, Mark: self.mark}
        if type(self.entry) in checks:
            checks[type(self.entry)]()

    def numbers(self, key: str, values: list[float]) -> None:
        for value in values:
            if not math.isfinite(value):
                self.refuse(key, f"{key} holds {value}, which is no number; write one")
            if key in _PLACES and not -_REACH <= value <= 1 + _REACH:
                self.refuse(key, f"{key} {value:g} lies far outside the picture; write a fraction, 0 to 1")
            if key in _LEVELS and not _DARKEST <= value <= _LIGHTEST:
                self.refuse(key, f"{key} {value:g} is no level of a picture; write it in IRE, 0 to 100")
            if key in _SIZES and not 0 < value <= 1:
                self.refuse(key, f"{key} {value:g} is no size; write a fraction, more than 0 and at most 1")

    def edge(self) -> None:
        edge: Edge = self.entry
        across, down = (edge.end[0] - edge.start[0]) * ASPECT, edge.end[1] - edge.start[1]
        if edge.axis == "h" and not down > abs(across):
            self.refuse("end", 'axis "h" is a near-vertical edge, from top to bottom; mend start, end or axis')
        if edge.axis == "v" and not across > abs(down):
            self.refuse("end", 'axis "v" is a near-horizontal edge, from left to right; mend start, end or axis')
        if abs(edge.after - edge.before) < 1.0:
            self.refuse("after", "before and after are one level, so there is no edge; write the two levels in IRE")
        if edge.place not in _WHERE:
            self.refuse("place", f"its place is none of those measured; write one of {', '.join(_WHERE)}")

    def grid(self) -> None:
        grid: Grid = self.entry
        self.rising("columns", grid.columns)
        self.rising("rows", grid.rows)
        for number, (column, row) in enumerate(grid.shown):
            if not (0 <= column < len(grid.columns) and 0 <= row < len(grid.rows)):
                size = f"{len(grid.columns)} columns and {len(grid.rows)} rows"
                self.refuse("shown", f"crossing {number + 1} is [{column}, {row}], of {size}; count from 0")
        if len(set(grid.shown)) < len(grid.shown):
            self.refuse("shown", "a crossing is shown twice; take one out, and its arms")
        if len(grid.arms) != len(grid.shown):
            self.refuse("arms", f"{len(grid.shown)} crossings are shown and {len(grid.arms)} arms given; give one each")
        for arms in grid.arms:
            if not set(arms) <= set("lrud"):
                self.refuse("arms", f'arms "{arms[:9]}" are none; write letters of "lrud"')
        self.differ("line", grid.line, grid.ground)

    def ruler(self) -> None:
        ruler: Ruler = self.entry
        self.rising("boundaries", ruler.boundaries)
        self.rising("band", ruler.band)
        if len(ruler.boundaries) != len(ruler.bits) + 1:
            found, bars = len(ruler.boundaries), len(ruler.bits)
            self.refuse("bits", f"{bars} bars have {bars + 1} boundaries, not {found}; mend bits or boundaries")
        self.differ("light", ruler.light, ruler.dark, rising=True)

    def burst(self) -> None:
        burst: Burst = self.entry
        if not 0 < burst.mhz < 100:
            self.refuse("mhz", f"mhz {burst.mhz:g} is no frequency of a burst; write it in MHz, such as 2.0")
        if not 0 < burst.swing <= 100:
            self.refuse("swing", f"swing {burst.swing:g} is none; write half the range of levels in IRE")

    def mark(self) -> None:
        mark: Mark = self.entry
        if mark.hand not in (-1, 1):
            self.refuse("hand", f"hand {mark.hand} is none; write 1 or -1")
        self.differ("light", mark.light, mark.dark, rising=True)

    def rising(self, key: str, values: Sequence[float]) -> None:
        if any(not one < other for one, other in pairwise(values)):
            self.refuse(key, f"{key} must rise from one to the next; put them in order")

    def differ(self, key: str, one: float, other: float, rising: bool = False) -> None:
        if abs(one - other) < 1.0 or (rising and one < other):
            self.refuse(key, f"{key} {one:g} does not stand out from {other:g}; write the levels in IRE")


def _flat(value: Any) -> list[float]:
    """All numbers within a value of a plan."""
    if isinstance(value, Rect) or is_dataclass(value):
        value = [getattr(value, field.name) for field in fields(value)]
    if isinstance(value, tuple | list):
        return [number for item in value for number in _flat(item)]
    return [value] if isinstance(value, float) else []
