"""The chart as a drawing (SVG, PDF): the same shapes, sharp at every size."""

from __future__ import annotations

from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np

from patternscore.chart.lettering import Lettering, outlines
from patternscore.chart.shapes import Bars, Disc, Polygon, Shape, layers
from patternscore.errors import UsageError
from patternscore.layout import chart_plan
from patternscore.plan import Burst, Rect
from patternscore.standard import ASPECT, Standard

HIGH_INCHES = 6.0
_SLICES = 24  # slices of one level that stand for a cycle of a burst


def write_drawing(path: Path, standard: Standard) -> None:
    """Write the chart as SVG or PDF; the same chart gives the same bytes."""
    import matplotlib

    kind = path.suffix.lower().lstrip(".")
    dates = {"Date": None} if kind == "svg" else {"CreationDate": None, "ModDate": None}
    title = {"Title": f"patternscore chart {standard.name}"}
    # Own settings of the user's must not change the page or the outlines.
    fixed: dict[Any, Any] = {"svg.hashsalt": "patternscore", "savefig.bbox": "standard", "path.simplify": False}
    with matplotlib.rc_context(fixed):
        try:
            drawn(standard).savefig(path, format=kind, metadata=title | dates)
        except OSError as error:
            raise UsageError(f"{path}: cannot be written ({error.strerror}); name another place") from None


def drawn(standard: Standard) -> Any:
    """Give the chart as a Matplotlib figure that holds exactly the picture, 4:3."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(HIGH_INCHES * ASPECT, HIGH_INCHES))
    FigureCanvasAgg(figure)
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0))
    axes.set_axis_off()
    axes.set_xlim(0.0, 1.0)
    axes.set_ylim(1.0, 0.0)
    for layer in layers(chart_plan(standard)):
        for shape in layer:
            for artist in _artists(shape, standard):
                axes.add_patch(artist)
    return figure


def _artists(shape: Shape, standard: Standard) -> Iterator[Any]:
    match shape:
        case Bars():
            yield from _bars(shape)
        case Burst():
            yield from _bars(_sliced(shape, standard))
        case Polygon():
            yield _filled(shape.contours, shape.level)
        case Disc():
            yield _disc(shape)
        case Lettering():
            yield _filled(outlines(shape), shape.level)


def _bars(bars: Bars) -> Iterator[Any]:
    """Each bar reaches to the far side, under those after it: no hairline of the ground shows between."""
    from matplotlib.patches import Rectangle

    rect = bars.rect
    previous = None
    for start, level in zip(bars.bounds[:-1], bars.levels, strict=True):
        if level == previous:
            continue
        previous = level
        left, top = (start, rect.y0) if bars.axis == "h" else (rect.x0, start)
        yield Rectangle(
            (left, top), rect.x1 - left, rect.y1 - top, facecolor=_grey(level), linewidth=0, antialiased=False
        )


def _sliced(burst: Burst, standard: Standard) -> Bars:
    """A burst as slices, as many as show a smooth sine in print."""
    rect = burst.rect
    cycles = burst.mhz * standard.active_us * (rect.x1 - rect.x0)
    bounds = np.linspace(rect.x0, rect.x1, int(np.ceil(cycles * _SLICES)) + 1)
    phase = 2.0 * np.pi * burst.mhz * standard.active_us * ((bounds[:-1] + bounds[1:]) / 2 - rect.x0)
    levels = burst.middle + burst.swing * np.sin(phase)
    return Bars(Rect(rect.x0, rect.y0, rect.x1, rect.y1), "h", tuple(bounds), tuple(levels))


def _grey(level: float) -> tuple[float, float, float]:
    value = min(max(level / 100.0, 0.0), 1.0)
    return value, value, value


def _filled(contours: list[Any], level: float) -> Any:
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as Outline

    outline = Outline.make_compound_path(*(Outline(np.vstack([c, c[:1]]), closed=True) for c in contours))
    return PathPatch(outline, facecolor=_grey(level), linewidth=0)


def _disc(disc: Disc) -> Any:
    from matplotlib.patches import PathPatch
    from matplotlib.path import Path as Outline
    from matplotlib.transforms import Affine2D

    # y runs down: angles go clockwise as seen, 0 to 90 degrees being the quadrant bottom right.
    turns = {1: (0.0, 180.0), -1: (90.0, 270.0)}
    outline = (
        Outline.make_compound_path(*(Outline.wedge(a, a + 90.0) for a in turns[disc.quadrants]))
        if disc.quadrants
        else Outline.unit_circle()
    )
    placed = Affine2D().scale(disc.radius / ASPECT, disc.radius).translate(disc.x, disc.y)
    return PathPatch(placed.transform_path(outline), facecolor=_grey(disc.level), linewidth=0)
