"""What the beam picks up: levels of the picture along every line, before any electrical stage."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.scanmap import picture_points
from patternscore.chain.settings import Chain

Lines = npt.NDArray[np.float32]
Axis = npt.NDArray[np.float64]

# The pixels of a picture (a box) and linear interpolation between them (a triangle, which is two boxes) lose
# sinc(w / 2 pi)^3 at w radians per pixel; these taps gain 1 + w^2 / 8 + 17 w^4 / 1920, its inverse up to w^4.
_PIXEL_INVERSE = np.array([0.0192708333, -0.2020833333, 1.365625, -0.2020833333, 0.0192708333])
_ROUNDING = 1e-6


def scan(chain: Chain, picture: Lines, times: Axis, lines: Axis) -> Lines:
    """Levels on a time axis: picture with gain and setup while the beam is on, 0 IRE in blanking.

    Parameters
    ----------
    picture : (h, w) float32
        IRE.
    times : (n,) float64
        us from the start of active line time, evenly spaced.
    lines : (rows,) float64
        From the top of the raster.

    Returns
    -------
    (rows, n) float32
        IRE. What blanking or the picture's end cuts within a step of ``times``, or within a line, counts in part.
    """
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    step = times[1] - times[0]
    on_line = _covered(times / step, chain.standard.active_us / step)
    on_field = _covered(lines, raster.height_lines)
    along, down = np.nonzero(on_line)[0], np.nonzero(on_field)[0]
    first, last, top, bottom = along[0], along[-1] + 1, down[0], down[-1] + 1

    seen = _seen(
        chain,
        picture,
        (np.clip(times[first:last], 0.0, chain.standard.active_us), step, on_line[first:last]),
        (lines[top:bottom], on_field[top:bottom, None]),
    )
    levels = np.zeros((len(lines), len(times)), dtype=np.float32)
    levels[top:bottom, first:last] = seen
    return levels


def _seen(chain: Chain, picture: Lines, along: tuple[Axis, float, Lines], down: tuple[Axis, Lines]) -> Lines:
    """Levels while the beam is on; ``along`` and ``down`` are places, (step) and share not blanked."""
    import cv2

    height, width = picture.shape
    times, step, on_line = along
    lines, on_field = down
    x, y = picture_points(chain, times, lines)
    shape = np.broadcast_shapes(x.shape, y.shape)
    columns = np.broadcast_to(x * np.float32(width) - np.float32(0.5), shape)
    rows = np.broadcast_to(y * np.float32(height) - np.float32(0.5), shape)
    spotted = _spotted(chain, picture)
    remapped = cv2.remap(spotted, columns, rows, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    seen = np.asarray(remapped, dtype=np.float32)
    if chain.gamma != 1.0:
        seen = 100.0 * np.asarray(cv2.pow(np.maximum(seen / np.float32(100.0), 0.0), chain.gamma), dtype=np.float32)
    _cut(seen.T, x.T, chain.standard.active_us / step, on_line[:, None])
    _cut(seen, y, chain.standard.raster(chain.lines, chain.samples, chain.sample_rate).height_lines, on_field)
    if chain.gain != 1.0:
        seen *= np.float32(chain.gain)
    if chain.setup != 0.0:
        seen += np.float32(chain.setup)
    seen *= on_line
    seen *= on_field
    return seen


def _cut(seen: Lines, place: Lines, steps: float, unblanked: Lines) -> None:
    """Set to black, in place, what lies outside the picture along the first axis.

    ``steps`` of that axis make the picture's size; a step across its end counts by its share that shows
    the picture, of the part that is not blanked anyway.
    """
    margin = 0.5 / steps - _ROUNDING
    near = np.nonzero((place.min(1) < margin) | (place.max(1) > 1.0 - margin))[0]
    if len(near):
        share = _covered(place[near] * np.float32(steps), steps)
        seen[near] *= np.minimum(share / np.maximum(unblanked[near], 1e-6), np.float32(1.0))


def _covered(place: npt.NDArray[Any], length: float) -> Lines:
    """Share of an interval of 1 about each place that lies between 0 and ``length``."""
    start = np.clip(place + 0.5, 0.0, 1.0)
    return np.asarray(np.minimum(start, np.clip(length + 0.5 - place, 0.0, 1.0)), dtype=np.float32)


def _spotted(chain: Chain, picture: Lines) -> Lines:
    """Picture as the spot sees it; what pixels and interpolation lose is made good beforehand."""
    import cv2

    height, width = picture.shape
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    across = np.convolve(_gaussian_taps(chain.spot_us / chain.standard.active_us * width), _PIXEL_INVERSE)
    down = np.convolve(_gaussian_taps(chain.spot_lines / raster.height_lines * height), _PIXEL_INVERSE)
    seen = cv2.sepFilter2D(picture, cv2.CV_32F, across, down, borderType=cv2.BORDER_REPLICATE)
    return np.asarray(seen, dtype=np.float32)


def _gaussian_taps(sigma: float) -> npt.NDArray[np.float64]:
    """Weights of a Gaussian of this sigma in pixels; three weights of the same variance where it is small."""
    if sigma < 0.6:
        return np.array([sigma**2 / 2, 1.0 - sigma**2, sigma**2 / 2])
    reach = int(np.ceil(4.5 * sigma))
    weights = np.exp(-0.5 * (np.arange(-reach, reach + 1) / sigma) ** 2)
    return np.asarray(weights / weights.sum())
