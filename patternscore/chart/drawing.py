"""The chart as a drawing (SVG, PDF): the same shapes, sharp at every size."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from patternscore.chart.lettering import placed
from patternscore.chart.raster import disc_outline
from patternscore.chart.shapes import Box, Disc, Lettering, Polygon, Shape, shapes
from patternscore.errors import UsageError
from patternscore.layout import chart_plan
from patternscore.plan import Burst
from patternscore.standard import ASPECT, Standard

HIGH_INCHES = 6.0
_SLICES = 24  # slices of one level that stand for a cycle of a burst


def write_drawing(path: Path, standard: Standard) -> None:
    """Write the chart as SVG or PDF; the same chart gives the same bytes."""
    import matplotlib
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(HIGH_INCHES * ASPECT, HIGH_INCHES))
    FigureCanvasAgg(figure)
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_axis_off()
    axes.set_xlim(0.0, 1.0)
    axes.set_ylim(1.0, 0.0)
    for shape in shapes(chart_plan(standard)):
        for artist in _artists(shape, standard):
            axes.add_patch(artist)
    kind = path.suffix.lower().lstrip(".")
    dates = {"Date": None} if kind == "svg" else {"CreationDate": None, "ModDate": None}
    title = {"Title": f"patternscore chart {standard.name}"}
    with matplotlib.rc_context({"svg.hashsalt": "patternscore"}):
        try:
            figure.savefig(path, format=kind, metadata=title | dates)
        except OSError as error:
            raise UsageError(f"{path}: cannot be written ({error.strerror}); name another place") from None


def _artists(shape: Shape, standard: Standard) -> list[Any]:
    match shape:
        case Box():
            return [_rectangle(shape.rect.x0, shape.rect.y0, shape.rect.x1, shape.rect.y1, shape.level)]
        case Burst():
            return _slices(shape, standard)
        case Polygon():
            return [_contours([np.array(shape.corners)], shape.level)]
        case Disc():
            return [_contours(disc_outline(shape), shape.level)]
        case Lettering():
            label = (shape.text, shape.x, shape.y, shape.height, shape.level, shape.anchor)
            return [_contours(placed(label), shape.level)]


def _grey(level: float) -> tuple[float, float, float]:
    value = min(max(level / 100.0, 0.0), 1.0)
    return value, value, value


def _rectangle(x0: float, y0: float, x1: float, y1: float, level: float) -> Any:
    from matplotlib.patches import Rectangle

    return Rectangle((x0, y0), x1 - x0, y1 - y0, facecolor=_grey(level), linewidth=0, antialiased=False)


def _contours(contours: list[Any], level: float) -> Any:
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as Outline

    outline = Outline.make_compound_path(*(Outline(np.vstack([c, c[:1]]), closed=True) for c in contours))
    return PathPatch(outline, facecolor=_grey(level), linewidth=0)


def _slices(burst: Burst, standard: Standard) -> list[Any]:
    """A burst as thin upright slices; it carries as many as show a smooth sine in print."""
    rect = burst.rect
    cycles = burst.mhz * standard.active_us * (rect.x1 - rect.x0)
    bounds = np.linspace(rect.x0, rect.x1, int(np.ceil(cycles * _SLICES)) + 1)
    phase = 2.0 * np.pi * burst.mhz * standard.active_us * ((bounds[:-1] + bounds[1:]) / 2 - rect.x0)
    levels = burst.middle + burst.swing * np.sin(phase)
    return [
        _rectangle(a, rect.y0, b, rect.y1, float(level))
        for a, b, level in zip(bounds[:-1], bounds[1:], levels, strict=True)
    ]
