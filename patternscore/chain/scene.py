"""What the beam picks up: levels of the picture along every line, before any electrical stage."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.optics import Picture, filtered, sampled_rows, spot_taps
from patternscore.chain.scanmap import picture_points
from patternscore.chain.settings import Chain

Lines = npt.NDArray[np.float32]
Axis = npt.NDArray[np.float64]

_ROUNDING = 1e-6


def scan(chain: Chain, picture: Picture, times: Axis, lines: Axis) -> Lines:
    """Levels on a time axis: picture with gain and setup while the beam is on, 0 IRE in blanking.

    Parameters
    ----------
    picture : Picture
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


def _seen(chain: Chain, picture: Picture, along: tuple[Axis, float, Lines], down: tuple[Axis, Lines]) -> Lines:
    """Levels while the beam is on; ``along`` and ``down`` are places, (step) and share not blanked."""
    times, step, on_line = along
    lines, on_field = down
    x, y = picture_points(chain, times, lines)
    seen = _looked_up(chain, picture, x, y)
    if chain.gamma != 1.0:
        import cv2

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


def _looked_up(chain: Chain, picture: Picture, x: Lines, y: Lines) -> Lines:
    """Levels of the picture, seen by the spot, at points (fractions)."""
    import cv2

    width, height = picture.size
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    across = spot_taps(
        chain.spot_us / chain.standard.active_us * width,
        chain.standard.active_us / width,
        chain.sample_rate * chain.oversample,
    )
    sigma = chain.spot_lines / raster.height_lines * height
    rows = y * np.float32(height) - np.float32(0.5)
    if rows.shape[1] == 1 and sigma > 0.6:  # each line of the frame lies along a row: its spot can be exact
        source = sampled_rows(picture, across, tuple(rows[:, 0].tolist()), sigma)
        rows = np.arange(len(rows), dtype=np.float32)[:, None]
    else:
        source = filtered(picture, across, spot_taps(sigma))
    shape = np.broadcast_shapes(x.shape, rows.shape)
    columns = np.broadcast_to(x * np.float32(width) - np.float32(0.5), shape)
    seen = cv2.remap(source, columns, np.broadcast_to(rows, shape), cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    return np.asarray(seen, dtype=np.float32)


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
