"""Where the chart carries lettering, and its outlines.

All lettering stands clear of what is measured: between bursts and flats, in the disc above and below the
slanted bars, and in the middle of ground cells that the plan leaves out of its field patches.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt

from patternscore.layout import (
    BURST_STRIP,
    COLUMNS,
    DISC_CENTRE,
    FLAT_STRIP,
    LABEL_CELLS,
    LIGHT,
    ROWS,
    STEPS_IRE,
)
from patternscore.plan import Plan
from patternscore.standard import STANDARDS

INK = 95.0  # IRE, on the ground
SMALL, LARGE = 0.13, 0.23  # cap heights, cells
NAME_OFFSET = 2.15  # cells from the middle of the disc to the middle of the words in it
_TALL = 0.46  # cells from the first line of a list to the last
_SIDE = 0.25  # cells from the middle of a cell to the end of words that line up at its side


@dataclass(frozen=True, slots=True)
class Lettering:
    """A word.

    Attributes
    ----------
    x, y : float
        Middle of the word (``align`` 0), its left (-1) or right end (1); middle of its capitals.
    height : float
        Of a capital, fractions of the height.
    """

    text: str
    x: float
    y: float
    height: float
    level: float
    align: int = 0


def labels(plan: Plan) -> Iterator[Lettering]:
    """Words on the chart."""
    cx, cy = DISC_CENTRE
    standard = STANDARDS[plan.standard]
    yield _word("patternscore", cx, cy - NAME_OFFSET, LARGE, LIGHT)
    yield _word(f"{standard.name}/{standard.field_hz:.4g}", cx, cy + NAME_OFFSET, LARGE, LIGHT)
    middle = (BURST_STRIP[3] + FLAT_STRIP[1]) / 2
    for number, burst in enumerate(plan.bursts):
        unit = " MHz" if number == len(plan.bursts) - 1 else ""
        yield _word(f"{burst.mhz:g}{unit}", COLUMNS * (burst.rect.x0 + burst.rect.x1) / 2, middle)
    black, white, tall, wide, first, last = LABEL_CELLS
    yield from _list(black, "▴", "0", "IRE")
    yield from _list(white, "▴", "100", "IRE")
    yield from _list(tall, "↕", f"{standard.coded_lines / ROWS:g}", "lines")
    yield from _list(wide, "↔", f"{standard.active_us / COLUMNS:.2f}", "µs")
    yield from _list(first, "IRE", *(f"{row[0]} ▸" for row in STEPS_IRE), align=1)
    yield from _list(last, "IRE", *(f"◂ {row[-1]}" for row in STEPS_IRE), align=-1)


def _word(text: str, x: float, y: float, height: float = SMALL, level: float = INK, align: int = 0) -> Lettering:
    return Lettering(text, x / COLUMNS, y / ROWS, height / ROWS, level, align)


def _list(cell: tuple[int, int], *words: str, align: int = 0) -> Iterator[Lettering]:
    """Words one below the other in the middle of a cell, or towards its side."""
    leading = min(0.21, _TALL / (len(words) - 1))
    for number, word in enumerate(words):
        down = leading * (number - (len(words) - 1) / 2)
        x, y = cell[0] + 0.5 + _SIDE * align, cell[1] + 0.5 + down
        yield _word(word, x, y, min(SMALL, 0.75 * leading), align=align)


@cache
def _glyphs(text: str) -> tuple[npt.NDArray[np.float64], ...]:
    """Closed outlines of a word at cap height 1, x centred on 0, y down from the middle of the capitals."""
    import matplotlib
    from matplotlib.font_manager import FontProperties
    from matplotlib.textpath import TextPath

    font = FontProperties(fname=f"{matplotlib.get_data_path()}/fonts/ttf/DejaVuSans-Bold.ttf")
    cap = TextPath((0, 0), "H", size=100, prop=font).get_extents().height
    word = TextPath((0, 0), text, size=100, prop=font)
    box = word.get_extents()
    shift = np.array([(box.x0 + box.x1) / 2, cap / 2])
    contours = (np.asarray(contour)[:-1] for contour in word.to_polygons(closed_only=True))
    return tuple((contour - shift) * [1.0 / cap, -1.0 / cap] for contour in contours)


def outlines(label: Lettering) -> list[npt.NDArray[np.float64]]:
    """Contours of a label in picture fractions, true to shape on a 4:3 screen.

    Returns
    -------
    list of (n, 2) float64
        Corners of closed contours; holes turn the other way.
    """
    glyphs = _glyphs(label.text)
    reach = max(float(contour[:, 0].max()) for contour in glyphs)  # half the width
    scale = np.array([label.height * ROWS / COLUMNS, label.height])
    return [(contour - [label.align * reach, 0.0]) * scale + [label.x, label.y] for contour in glyphs]
