"""Where the chart carries lettering, and its outlines.

All lettering stands clear of what is measured: in the gap between bursts and flats, and in ground cells
that the plan leaves out of its field patches.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import numpy.typing as npt

from patternscore.layout import BURST_STRIP, BURSTS_MHZ, COLUMNS, LABEL_CELLS, ROWS
from patternscore.plan import Plan

INK = 95.0  # IRE
SMALL = 0.13 / ROWS  # cap heights, fractions of the picture height

Label = tuple[str, float, float, float, float, str]


def labels(plan: Plan) -> list[Label]:
    """Words on the chart: text, x, y of the baseline, cap height, level, anchor."""
    found = [_at(text, x, 2.075, SMALL) for text, x in _burst_labels()]
    cells = dict(zip(("pattern", "line", "left", "right", "dark", "light"), LABEL_CELLS, strict=True))
    found += _stacked("pattern", "score", cells["pattern"])
    found += _stacked(plan.standard, "4:3", cells["line"])
    found += _stacked("IRE", "0-76", cells["dark"])
    found += _stacked("IRE", "82-100", cells["light"])
    return found


def _burst_labels() -> list[tuple[str, float]]:
    left, words = BURST_STRIP[0], []
    for mhz, wide in BURSTS_MHZ:
        words.append((f"{mhz:g}" + (" MHz" if mhz < 2 else ""), left + wide / 2))
        left += wide
    return words


def _at(text: str, x: float, y: float, height: float) -> Label:
    return text, x / COLUMNS, y / ROWS, height, INK, "middle"


def _stacked(upper: str, lower: str, cell: tuple[int, int]) -> list[Label]:
    """Two words, one over the other, in the middle of a cell."""
    x, y = cell[0] + 0.5, cell[1] + 0.5
    return [_at(upper, x, y - 0.07, SMALL), _at(lower, x, y + 0.21, SMALL)]


@cache
def outline(text: str) -> list[npt.NDArray[np.float64]]:
    """Closed outlines of a word at cap height 1, x to the right from 0, y down from the baseline.

    Returns
    -------
    list of (n, 2) float64
        Contours; overlapping ones are filled by the even-odd rule.
    """
    from matplotlib.font_manager import FontProperties
    from matplotlib.textpath import TextPath

    font = FontProperties(family="DejaVu Sans", weight="bold")
    cap = TextPath((0, 0), "H", size=100, prop=font).get_extents().height
    contours = TextPath((0, 0), text, size=100, prop=font).to_polygons(closed_only=True)
    return [np.asarray(contour) * [1.0 / cap, -1.0 / cap] for contour in contours]


def placed(label: Label) -> list[npt.NDArray[np.float64]]:
    """Contours of a label in picture fractions, true to shape on a 4:3 screen."""
    text, x, y, height, _, anchor = label
    contours = outline(text)
    width = max(float(contour[:, 0].max()) for contour in contours)
    shift = {"start": 0.0, "middle": width / 2, "end": width}[anchor]
    scale = np.array([height * ROWS / COLUMNS, height])
    return [(contour - [shift, 0.0]) * scale + [x, y] for contour in contours]
