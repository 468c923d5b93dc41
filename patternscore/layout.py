"""The package's own chart, as a plan.

The picture is divided into 16 x 12 cells, square on a 4:3 screen. The outermost ring holds four rulers,
laid like a pinwheel: each corner belongs to one ruler, so that every side of the picture is reached by one.
Inside lie the crosshatch, a disc with slanted bars at the centre, blocks of near-horizontal edges beside it,
a slanted square in each corner, bursts and flats above and the staircase below.
"""

from __future__ import annotations

from functools import cache

from patternscore.plan import Burst, Edge, Grid, Mark, Patch, Plan, Rect, Ruler
from patternscore.rulers import orientable_sequence
from patternscore.standard import Standard, ire_from_code

COLUMNS, ROWS = 16, 12
# Tones that are measured against each other are whole codes of BT.601, so that rounding to 8 bits cannot shift
# them: 49 and 201 about 125; edges swing less, so that an overshoot of half a step stays inside the coding range.
DARK, LIGHT, GROUND = (float(ire_from_code(code)) for code in (49.0, 201.0, 125.0))
EDGE_DARK, EDGE_LIGHT = (float(ire_from_code(code)) for code in (71.0, 179.0))
SLANT = 1.0 / 12.0  # tangent of 4.8 degrees
H_BARS, V_BARS = 80, 60
H_ORDER, V_ORDER = 9, 8
RULER_DEPTH = 0.8  # cells
GAP = 0.2  # cells between a block and the crosshatch lines around it

# Blocks: (left, top, right, bottom) in cells; drawn regions, crosshatch lines inside are not drawn.
DISC_CENTRE, DISC_RADIUS = (8.0, 6.0), 2.8
SIDE_BLOCKS = ((2.2, 4.2, 4.8, 7.8), (11.2, 4.2, 13.8, 7.8))
CORNER_BLOCKS = {
    "top left": (1.2, 1.2, 3.8, 2.8),
    "top right": (12.2, 1.2, 14.8, 2.8),
    "bottom left": (1.2, 9.2, 3.8, 10.8),
    "bottom right": (12.2, 9.2, 14.8, 10.8),
}
BURST_STRIP = (5.2, 1.2, 10.8, 1.85)
FLAT_STRIP = (5.2, 2.15, 10.8, 2.8)
STAIR_BLOCK = (5.2, 9.2, 10.8, 10.8)
TOP_BLOCK = (5.2, 1.2, 10.8, 2.8)

BAR_OFFSETS = (-1.5, -0.5, 0.5, 1.5)  # edges of the two slanted bars in the disc, cells from its centre
BAR_HALF = 1.7  # half their height, cells
SIDE_OFFSETS = (-1.0, 0.0, 1.0)  # near-horizontal edges in a side block, cells from its middle
SQUARE_SIDE = 0.96  # slanted square of a corner block, cells

STEPS_IRE = (
    (0, 2, 4, 6, 8, 10, 12, 16),
    (20, 25, 30, 40, 50, 60, 70, 76),
    (82, 88, 90, 92, 94, 96, 98, 100),
)
BURSTS_MHZ = ((0.5, 2), (1.0, 3), (2.0, 5), (3.0, 7), (4.0, 10), (5.0, 13))  # frequency, whole cycles
MARK_RADIUS = 0.3  # cells
# Cell centres of the marks and the hand of each; no turn or reflection of the set falls on itself.
MARKS = (
    (4.5, 1.5, 1), (11.5, 1.5, -1), (3.5, 3.5, -1), (12.5, 3.5, -1), (1.5, 4.5, 1), (14.5, 4.5, 1),
    (1.5, 7.5, -1), (14.5, 7.5, 1), (3.5, 8.5, 1), (12.5, 8.5, -1), (4.5, 10.5, -1), (11.5, 10.5, -1),
)  # fmt: skip
LABEL_CELLS = ((5, 3), (10, 3), (5, 8), (10, 8), (4, 9), (11, 9))  # ground cells that carry lettering


def _x(cells: float) -> float:
    return cells / COLUMNS


def _y(cells: float) -> float:
    return cells / ROWS


def _rect(box: tuple[float, float, float, float]) -> Rect:
    return Rect(_x(box[0]), _y(box[1]), _x(box[2]), _y(box[3]))


@cache
def chart_plan(standard: Standard) -> Plan:
    """Plan of the package's chart for a scanning standard."""
    return Plan(
        name="chart",
        standard=standard.name,
        edges=(*_centre_edges(), *_side_edges(), *_corner_edges()),
        grid=_grid(),
        steps=_steps(),
        flats=_flats(),
        field=_field(),
        rulers=_rulers(),
        bursts=_bursts(standard),
        marks=tuple(Mark(_x(x), _y(y), hand, MARK_RADIUS / ROWS, DARK, LIGHT) for x, y, hand in MARKS),
    )


def _centre_edges() -> list[Edge]:
    cx, cy = DISC_CENTRE
    edges = []
    for number, offset in enumerate(BAR_OFFSETS):
        lean = SLANT * BAR_HALF
        rising = number % 2 == 0
        edges.append(
            Edge(
                name=f"centre {number + 1}",
                axis="h",
                start=(_x(cx + offset + lean), _y(cy - BAR_HALF)),
                end=(_x(cx + offset - lean), _y(cy + BAR_HALF)),
                before=EDGE_DARK if rising else EDGE_LIGHT,
                after=EDGE_LIGHT if rising else EDGE_DARK,
                clear_before=_x(1.0 if number else 0.55),
                clear_after=_x(1.0 if number < len(BAR_OFFSETS) - 1 else 0.55),
                place="centre",
                block="centre",
            )
        )
    return edges


def _side_edges() -> list[Edge]:
    edges = []
    for side, (x0, y0, x1, y1) in zip((-1, 1), SIDE_BLOCKS, strict=True):
        middle = (y0 + y1) / 2
        lean = side * SLANT * (x1 - x0) / 2
        for number, offset in enumerate(SIDE_OFFSETS):
            rising = number % 2 == 0
            edges.append(
                Edge(
                    name=f"{'left' if side < 0 else 'right'} {number + 1}",
                    axis="v",
                    start=(_x(x0), _y(middle + offset + lean)),
                    end=(_x(x1), _y(middle + offset - lean)),
                    before=EDGE_DARK if rising else EDGE_LIGHT,
                    after=EDGE_LIGHT if rising else EDGE_DARK,
                    clear_before=_y(1.0 if number else 0.65),
                    clear_after=_y(1.0 if number < len(SIDE_OFFSETS) - 1 else 0.65),
                    place="centre",
                    block="left" if side < 0 else "right",
                )
            )
    return edges


def square_corners(place: str) -> tuple[tuple[float, float], ...]:
    """Corners of the slanted square of a corner block, in cells, clockwise from the top left one."""
    x0, y0, x1, y1 = CORNER_BLOCKS[place]
    cx, cy, half = (x0 + x1) / 2, (y0 + y1) / 2, SQUARE_SIDE / 2
    lean = half * SLANT
    return (
        (cx - half + lean, cy - half - lean),
        (cx + half + lean, cy - half + lean),
        (cx + half - lean, cy + half + lean),
        (cx - half - lean, cy + half - lean),
    )


def _corner_edges() -> list[Edge]:
    edges = []
    for place, (x0, y0, x1, y1) in CORNER_BLOCKS.items():
        tl, tr, br, bl = ((_x(x), _y(y)) for x, y in square_corners(place))
        beside = _x((x1 - x0 - SQUARE_SIDE) / 2)
        above = _y((y1 - y0 - SQUARE_SIDE) / 2)
        wide, tall = _x(SQUARE_SIDE), _y(SQUARE_SIDE)
        edges += [
            Edge(f"{place} 1", "h", tl, bl, EDGE_DARK, EDGE_LIGHT, beside, wide, place, place),
            Edge(f"{place} 2", "h", tr, br, EDGE_LIGHT, EDGE_DARK, wide, beside, place, place),
            Edge(f"{place} 3", "v", tl, tr, EDGE_DARK, EDGE_LIGHT, above, tall, place, place),
            Edge(f"{place} 4", "v", bl, br, EDGE_LIGHT, EDGE_DARK, tall, above, place, place),
        ]
    return edges


def _blocks() -> list[tuple[float, float, float, float]]:
    return [*SIDE_BLOCKS, *CORNER_BLOCKS.values(), TOP_BLOCK, STAIR_BLOCK]


def _covered(x: float, y: float, reach: float) -> bool:
    """Whether a square of half side ``reach`` cells about (x, y) touches a block, the disc or a mark."""
    dx = max(abs(x - DISC_CENTRE[0]) - reach, 0.0)
    dy = max(abs(y - DISC_CENTRE[1]) - reach, 0.0)
    if dx * dx + dy * dy < DISC_RADIUS**2:
        return True
    if any(abs(x - mx) < MARK_RADIUS + reach and abs(y - my) < MARK_RADIUS + reach for mx, my, _ in MARKS):
        return True
    return any(x0 - reach < x < x1 + reach and y0 - reach < y < y1 + reach for x0, y0, x1, y1 in _blocks())


def _arms(column: int, row: int) -> str:
    """Which arms of a crossing run clear for a third of a cell; lines end at the outermost crossings."""
    ways = {"l": (-1, 0), "r": (1, 0), "u": (0, -1), "d": (0, 1)}
    clear = ""
    for letter, (dx, dy) in ways.items():
        ends = not (1 <= column + dx <= COLUMNS - 1 and 1 <= row + dy <= ROWS - 1)
        if not ends and not any(_covered(column + dx * part, row + dy * part, 0.0) for part in (0.1, 0.2, 0.36)):
            clear += letter
    return clear


def _grid() -> Grid:
    """Crosshatch; a crossing is shown where it has a clear arm both along and across."""
    columns = tuple(_x(k) for k in range(1, COLUMNS))
    rows = tuple(_y(j) for j in range(1, ROWS))
    shown, arms = [], []
    for j in range(1, ROWS):
        for k in range(1, COLUMNS):
            clear = _arms(k, j)
            if not _covered(k, j, 0.0) and set(clear) & set("lr") and set(clear) & set("ud"):
                shown.append((k - 1, j - 1))
                arms.append(clear)
    return Grid(columns, rows, tuple(shown), tuple(arms), LIGHT, GROUND, thickness=0.06 / ROWS)


def _field() -> tuple[Patch, ...]:
    """Every cell of plain ground: within the crosshatch and free of blocks, marks and labels."""
    return tuple(
        Patch(
            f"ground {column},{row}",
            _rect((column, row, column + 1, row + 1)).inset(_x(0.1), _y(0.1)),
            GROUND,
        )
        for row in range(1, ROWS - 1)
        for column in range(1, COLUMNS - 1)
        if not _covered(column + 0.5, row + 0.5, 0.4) and (column, row) not in LABEL_CELLS
    )


def _steps() -> tuple[Patch, ...]:
    x0, y0, x1, y1 = STAIR_BLOCK
    tall = (y1 - y0) / len(STEPS_IRE)
    patches = []
    for row, levels in enumerate(STEPS_IRE):
        wide = (x1 - x0) / len(levels)
        for column, level in enumerate(levels):
            left, top = x0 + column * wide, y0 + row * tall
            patches.append(Patch(f"step {level}", _rect((left, top, left + wide, top + tall)), float(level)))
    return tuple(patches)


def _flats() -> tuple[Patch, ...]:
    x0, y0, x1, y1 = FLAT_STRIP
    third = (x1 - x0) / 3
    return tuple(
        Patch(name, _rect((x0 + n * third, y0, x0 + (n + 1) * third, y1)), level)
        for n, (name, level) in enumerate((("black", 0.0), ("mid", GROUND), ("white", 100.0)))
    )


def _bursts(standard: Standard) -> tuple[Burst, ...]:
    """Packets of whole cycles, from one end of their strip to the other with equal gaps of ground."""
    left, y0, right, y1 = BURST_STRIP
    wide = [cycles / mhz * COLUMNS / standard.active_us for mhz, cycles in BURSTS_MHZ]
    gap = (right - left - sum(wide)) / (len(wide) - 1)
    bursts = []
    for (mhz, _), width in zip(BURSTS_MHZ, wide, strict=True):
        bursts.append(Burst(_rect((left, y0, left + width, y1)), mhz, GROUND, 35.0))
        left += width + gap
    return tuple(bursts)


def _rulers() -> tuple[Ruler, ...]:
    along = tuple(bool(bit) for bit in orientable_sequence(H_BARS, H_ORDER))
    # Of the orders found, one that changes at the last bar too: the crush at the bottom is read there.
    down = tuple(bool(bit) for bit in orientable_sequence(V_BARS, V_ORDER, seed=8))
    deep_x, deep_y = RULER_DEPTH / COLUMNS, RULER_DEPTH / ROWS
    own_x, own_y = round(deep_x * H_BARS), round(deep_y * V_BARS)  # bars that a corner takes
    xs = tuple(i / H_BARS for i in range(H_BARS + 1))
    ys = tuple(i / V_BARS for i in range(V_BARS + 1))
    return (
        Ruler("top", (0.0, deep_y), xs[: H_BARS - own_x + 1], along[: H_BARS - own_x], DARK, LIGHT),
        Ruler("right", (1 - deep_x, 1.0), ys[: V_BARS - own_y + 1], down[: V_BARS - own_y], DARK, LIGHT),
        Ruler("bottom", (1 - deep_y, 1.0), xs[own_x:], along[own_x:], DARK, LIGHT),
        Ruler("left", (0.0, deep_x), ys[own_y:], down[own_y:], DARK, LIGHT),
    )


def circle() -> tuple[float, float, float]:
    """Centre (x, y) in picture fractions and radius in fractions of the height of the disc."""
    return _x(DISC_CENTRE[0]), _y(DISC_CENTRE[1]), DISC_RADIUS / ROWS
