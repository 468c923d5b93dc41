"""The chart as levels: every sample is the mean of the chart over the sample's area."""

from __future__ import annotations

from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chart.coverage import interval_cover, polygon_cover
from patternscore.chart.lettering import Lettering, outlines
from patternscore.chart.shapes import Bars, Disc, Layer, Polygon, Shape, layers
from patternscore.layout import chart_plan
from patternscore.plan import Burst, Rect
from patternscore.standard import ASPECT, Standard

Levels = npt.NDArray[np.float32]
Array = npt.NDArray[np.float64]
Window = tuple[slice, slice]


@lru_cache(maxsize=8)
def render(standard: Standard, width: int, height: int) -> Levels:
    """Draw the chart as levels.

    Parameters
    ----------
    standard : Standard
        Scanning standard; it sets the length of a line in us, and so the pitch of the bursts.
    width, height : int
        Size; the array holds exactly the active picture.

    Returns
    -------
    (height, width) float32
        IRE, read-only: means over each sample's area (discs as polygons of 2880 corners), exact but for the few
        samples in which rims of shapes that lie one over the other meet at a slant. The last few sizes drawn
        are kept.
    """
    canvas = np.zeros((height, width), dtype=np.float32)
    for layer in layers(chart_plan(standard)):
        _draw(canvas, layer, standard)
    np.clip(canvas, 0.0, 100.0, out=canvas)  # rounding leaves a hair below black
    canvas.flags.writeable = False
    return canvas


def _draw(canvas: Levels, layer: Layer, standard: Standard) -> None:
    """Lay a layer over what is there; samples that shapes share get the right part of each."""
    drawn = [_shape(shape, canvas.shape[1], canvas.shape[0], standard) for shape in layer]
    before = [canvas[window].copy() for window, _, _ in drawn]
    for (window, cover, level), under in zip(drawn, before, strict=True):
        canvas[window] += cover * (level - under)


def _shape(shape: Shape, width: int, height: int, standard: Standard) -> tuple[Window, Levels, Levels]:
    """Window that a shape touches, the part of each sample that it covers there, and its mean level."""
    match shape:
        case Bars():
            return _upright(shape.rect, shape.axis, _bars_integral(shape), width, height)
        case Burst():
            return _upright(shape.rect, "h", _burst_integral(shape, standard), width, height)
        case Polygon():
            return _filled(shape.contours, shape.level, width, height)
        case Disc():
            return _filled(disc_outlines(shape), shape.level, width, height)
        case Lettering():
            return _filled(outlines(shape), shape.level, width, height)


def _bars_integral(bars: Bars) -> Any:
    """Integral of the level over the position, as a function of the position."""
    bounds = np.array(bars.bounds)
    total = np.concatenate([[0.0], np.cumsum(np.diff(bounds) * bars.levels)])
    return lambda position: np.interp(position, bounds, total)


def _burst_integral(burst: Burst, standard: Standard) -> Any:
    pulse = 2.0 * np.pi * burst.mhz * standard.active_us  # radians per picture width
    return lambda x: burst.middle * x - burst.swing / pulse * np.cos(pulse * (x - burst.rect.x0))


def _upright(rect: Rect, axis: str, integral: Any, width: int, height: int) -> tuple[Window, Levels, Levels]:
    """Coverage and mean level of an upright rectangle whose level changes along one axis."""
    rows, down = interval_cover(height, rect.y0, rect.y1)
    columns, along = interval_cover(width, rect.x0, rect.x1)
    count, span, part, low, high = (
        (width, columns, along, rect.x0, rect.x1) if axis == "h" else (height, rows, down, rect.y0, rect.y1)
    )
    bounds = np.clip(np.arange(span.start, span.stop + 1) / count, low, high)
    mean = np.diff(integral(bounds)) * count / np.maximum(part, 1e-9)
    level = (mean[None, :] if axis == "h" else mean[:, None]).astype(np.float32)
    return (rows, columns), np.outer(down, along).astype(np.float32), level


def _filled(contours: list[Array], level: float, width: int, height: int) -> tuple[Window, Levels, Levels]:
    """Coverage of closed contours of one level."""
    size = np.array([width, height])
    corners = np.concatenate(contours) * size
    (x0, y0), (x1, y1) = np.floor(corners.min(0)).astype(int), np.ceil(corners.max(0)).astype(int)
    cover = polygon_cover([contour * size - [x0, y0] for contour in contours], x1 - x0, y1 - y0)
    return (slice(y0, y1), slice(x0, x1)), cover.astype(np.float32), np.float32(level).reshape(1, 1)


def disc_outlines(disc: Disc, points: int = 2880) -> list[Array]:
    """Contours of a disc, or of two of its quadrants, as polygons of the same area."""
    turns = {0: [(0.0, 1.0)], 1: [(0.5, 0.75), (0.0, 0.25)], -1: [(0.25, 0.5), (0.75, 1.0)]}[disc.quadrants]
    # A chord polygon loses area; a slightly larger radius gives it back.
    radius = disc.radius / np.sqrt(np.sinc(2.0 / points))
    contours = []
    for start, end in turns:
        angle = 2.0 * np.pi * np.linspace(start, end, round(points * (end - start)) + 1)
        rim = np.stack([np.cos(angle) / ASPECT, np.sin(angle)], 1) * radius
        contour = rim[:-1] if disc.quadrants == 0 else np.vstack([[0.0, 0.0], rim])
        contours.append(contour + [disc.x, disc.y])
    return contours
