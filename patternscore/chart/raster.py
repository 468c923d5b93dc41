"""The chart as levels: every sample is the mean of the drawing over the sample's area."""

from __future__ import annotations

from functools import cache

import numpy as np
import numpy.typing as npt

from patternscore.chart.lettering import placed
from patternscore.chart.shapes import Box, Disc, Lettering, Polygon, Shape, shapes
from patternscore.layout import chart_plan
from patternscore.plan import Burst
from patternscore.standard import ASPECT, Standard

Levels = npt.NDArray[np.float32]
FINE = 16  # sub-samples each way in a sample that a slanted or round outline cuts
_BAND = 64  # rows of an outline drawn at a time, which bounds the memory


@cache
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
        IRE, read-only. Upright outlines and bursts are exact area means; slanted and round ones are good
        to 1/256 of a sample's area.
    """
    canvas = np.zeros((height, width), dtype=np.float32)
    for shape in shapes(chart_plan(standard)):
        _draw(canvas, shape, standard)
    canvas.flags.writeable = False
    return canvas


def _draw(canvas: Levels, shape: Shape, standard: Standard) -> None:
    match shape:
        case Box():
            _draw_box(canvas, shape)
        case Burst():
            _draw_burst(canvas, shape, standard)
        case Polygon():
            _draw_outline(canvas, [np.array(shape.corners)], shape.level)
        case Disc():
            for contour in disc_outline(shape):
                _draw_outline(canvas, [contour], shape.level)
        case Lettering():
            label = (shape.text, shape.x, shape.y, shape.height, shape.level, shape.anchor)
            _draw_outline(canvas, placed(label), shape.level)


def _cover(count: int, start: float, end: float) -> tuple[slice, Levels]:
    """Samples that an interval of fractions touches, and how much of each it covers."""
    first, last = max(int(np.floor(start * count)), 0), min(int(np.ceil(end * count)), count)
    index = np.arange(first, last)
    covered = np.minimum(index + 1, end * count) - np.maximum(index, start * count)
    return slice(first, last), np.clip(covered, 0.0, 1.0).astype(np.float32)


def _blend(part: Levels, cover: Levels, level: Levels | float) -> None:
    part += cover * (level - part)


def _draw_box(canvas: Levels, box: Box) -> None:
    rows, down = _cover(canvas.shape[0], box.rect.y0, box.rect.y1)
    columns, along = _cover(canvas.shape[1], box.rect.x0, box.rect.x1)
    _blend(canvas[rows, columns], np.outer(down, along), box.level)


def _draw_burst(canvas: Levels, burst: Burst, standard: Standard) -> None:
    rows, down = _cover(canvas.shape[0], burst.rect.y0, burst.rect.y1)
    columns, along = _cover(canvas.shape[1], burst.rect.x0, burst.rect.x1)
    pulse = 2.0 * np.pi * burst.mhz * standard.active_us  # radians per picture width
    bounds = np.clip(
        np.arange(columns.start, columns.stop + 1) / canvas.shape[1], burst.rect.x0, burst.rect.x1
    )
    integral = -np.cos(pulse * (bounds - burst.rect.x0)) / pulse
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = np.where(along > 0, np.diff(integral) * canvas.shape[1] / along, 0.0)
    level = (burst.middle + burst.swing * mean).astype(np.float32)
    _blend(canvas[rows, columns], np.outer(down, along), level[None, :])


def disc_outline(disc: Disc, points: int = 720) -> list[npt.NDArray[np.float64]]:
    """Contours of a disc, or of two of its quadrants, as polygons of the same area."""
    turns = {0: [(0.0, 1.0)], 1: [(0.5, 0.75), (0.0, 0.25)], -1: [(0.25, 0.5), (0.75, 1.0)]}[disc.quadrants]
    contours = []
    for start, end in turns:
        angle = 2.0 * np.pi * np.linspace(start, end, round(points * (end - start)) + 1)
        # A chord polygon loses area; a slightly larger radius gives it back.
        radius = disc.radius / np.sqrt(np.sinc(2.0 / points))
        rim = np.stack([np.cos(angle) / ASPECT, np.sin(angle)], 1) * radius
        contour = rim if end - start == 1.0 else np.vstack([[0.0, 0.0], rim])
        contours.append(contour + [disc.x, disc.y])
    return contours


def _draw_outline(canvas: Levels, contours: list[npt.NDArray[np.float64]], level: float) -> None:
    """Fill contours (even-odd) by sub-sampling; whole rows of samples at a time."""
    import cv2

    height, width = canvas.shape
    corners = np.concatenate(contours)
    low = np.floor(corners.min(0) * [width, height]).astype(int)
    high = np.ceil(corners.max(0) * [width, height]).astype(int)
    x0, x1 = max(low[0], 0), min(high[0], width)
    for y0 in range(max(low[1], 0), min(high[1], height), _BAND):
        y1 = min(y0 + _BAND, high[1], height)
        mask = np.zeros(((y1 - y0) * FINE, (x1 - x0) * FINE), dtype=np.uint8)
        # Sub-sample centres lie at whole numbers for OpenCV: shift by half a sub-sample; 8 bits of fraction.
        scaled = [(c * [width, height] - [x0, y0]) * FINE - 0.5 for c in contours]
        cv2.fillPoly(mask, [np.round(c * 256).astype(np.int32) for c in scaled], 255, cv2.LINE_8, 8)
        cover = cv2.resize(mask, (x1 - x0, y1 - y0), interpolation=cv2.INTER_AREA)
        _blend(canvas[y0:y1, x0:x1], cover.astype(np.float32) / 255.0, level)
