"""Line-to-line timing error, from the verticals of a crosshatch."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.plan import Plan
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
_CLEAR = 0.14  # of a cell, kept from the horizontals at both ends of a vertical
_REACH = 8  # samples on each side of a vertical
_PERIODS = (6.0, 8.0, 11.0, 15.0)  # samples; of the wave whose phase tells the place
_FEWEST = 40  # lines
_OUTLIER = 6.0


@dataclass(frozen=True, slots=True, eq=False)
class LineShifts:
    """Places of the crosshatch verticals, line by line, about their smooth course.

    Attributes
    ----------
    lines : (n, m) int
        Frame line of each value; a row is a stretch of one vertical between two horizontals.
    shift : (n, m) float64
        Samples, later positive.
    spared : float
        Share of a line's shift that is left when the smooth course is taken out.
    """

    lines: Array
    shift: Array
    spared: float


def read_jitter(frame: Frame, located: Located) -> Estimate:
    """Line-to-line timing error (rms) from the verticals of the crosshatch.

    Returns
    -------
    Estimate
        ns.

    Raises
    ------
    Unreadable
        When the pattern has no crosshatch, or fewer than 40 lines of it cross two clear verticals.

    Notes
    -----
    What two verticals do together on a line is jitter, what each does alone is noise: the mean product of the
    shifts of different verticals on one line is the variance of the jitter, with no noise in it.
    """
    found = line_shifts(frame, located)
    usable = np.isfinite(found.shift)
    at, shift = found.lines[usable], found.shift[usable]
    count = np.bincount(at, minlength=frame.rows).astype(np.float64)
    together = np.bincount(at, shift, minlength=frame.rows)
    alone = np.bincount(at, shift**2, minlength=frame.rows)
    kept = count >= 2
    if np.count_nonzero(kept) < _FEWEST:
        raise Unreadable("too few lines cross two clear verticals of a crosshatch")
    count, together, alone = count[kept], together[kept], alone[kept]
    each = (together**2 - alone) / (count * (count - 1.0))  # mean product of two verticals, line by line
    pairs = count * (count - 1.0)
    own = float(np.average(each, weights=pairs))
    noise = max(float(alone.sum() / count.sum()) - own, 1e-9)
    weight = 1.0 / (np.maximum(own, 0.0) + noise / np.sqrt(pairs)) ** 2
    weight /= weight.sum()
    whole = max(float((weight * each).sum()), 0.0)
    spread = float((2.0 * weight**2 * ((whole + noise / count) ** 2 + noise**2 / (count * pairs))).sum())
    spread = float(np.sqrt(spread / found.spared)) / found.spared
    value = float(np.sqrt(whole / found.spared))
    sigma = spread / (2.0 * max(value, np.sqrt(spread)))
    scale = 1e3 / frame.sample_rate
    return Estimate(value * scale, float(sigma) * scale)


@lru_cache(maxsize=8)
def _verticals(plan: Plan) -> Array:
    """Stretches of vertical that run clear from one horizontal to the next: (n, 3) of x, y from, y to."""
    grid = plan.grid
    if grid is None:
        return np.zeros((0, 3))
    arms = dict(zip(grid.shown, grid.arms, strict=True))
    found = []
    for (column, row), clear in arms.items():
        if "d" in clear and "u" in arms.get((column, row + 1), ""):
            top, bottom = grid.rows[row], grid.rows[row + 1]
            rim = _CLEAR * (bottom - top)
            found.append((grid.columns[column], top + rim, bottom - rim))
    return np.array(found).reshape(-1, 3)


def line_shifts(frame: Frame, located: Located) -> LineShifts:
    """Measure where each line crosses the verticals.

    Raises
    ------
    Unreadable
        When there are no two clear stretches of vertical in the frame.
    """
    stretches = _verticals(located.plan)
    if len(stretches) < 2:
        raise Unreadable("the pattern has no crosshatch with clear verticals")
    ends = located.warp.to_frame(np.concatenate([stretches[:, :2], stretches[:, ::2]])).reshape(2, -1, 2)
    lines, middle = _lines_of(ends, frame)
    block = _windows(frame, lines, middle)
    place, gain = _phase_places(block)
    shift, spared = _about_course(middle + place / gain, lines)
    return LineShifts(lines, shift, spared)


def _lines_of(ends: Array, frame: Frame) -> tuple[Array, Array]:
    """Lines and nearest samples of each stretch, all stretches cut to one number of lines."""
    (x0, y0), (x1, y1) = ends[0].T, ends[1].T
    inside = (np.minimum(x0, x1) > _REACH + 4) & (np.maximum(x0, x1) < frame.samples - _REACH - 5)
    inside &= (y0 >= 0) & (y1 <= frame.rows - 1) & (y1 - y0 >= 10)
    if np.count_nonzero(inside) < 2:
        raise Unreadable("too little of the crosshatch lies in the frame")
    tall = y1 - y0
    inside &= tall >= 0.6 * np.median(tall[inside])
    x0, x1, y0, y1, tall = (part[inside] for part in (x0, x1, y0, y1, tall))
    count = int(tall.min())
    first = np.ceil((y0 + y1 - count) / 2.0).astype(np.int64)
    lines = first[:, None] + np.arange(count)
    middle = np.rint(x0[:, None] + (lines - y0[:, None]) * ((x1 - x0) / tall)[:, None]).astype(np.int64)
    return lines, middle


def _windows(frame: Frame, lines: Array, middle: Array) -> Array:
    """Samples about the verticals, three more on each side than the window holds: (n, m, samples)."""
    at = (lines * frame.samples + middle)[..., None] + np.arange(-_REACH - 3, _REACH + 4)
    return np.take(np.ascontiguousarray(frame.luma).ravel(), at)


def _phase_places(block: Array) -> tuple[Array, float]:
    """Place of the vertical in each window in samples from its middle, not yet divided by the gain.

    The gain is what a shift of the mean line by one sample changes the place by; the window, which does not
    shift, makes it a little less than 1.
    """
    at = np.arange(-_REACH, _REACH + 1)
    taper = 0.5 + 0.5 * np.cos(np.pi * at / (_REACH + 1))
    profile = block.mean((0, 1), dtype=np.float64)
    slope = (45.0 * (profile[4:-2] - profile[2:-4]) - 9.0 * (profile[5:-1] - profile[1:-5])) / 60.0
    slope += (profile[6:] - profile[:-6]) / 60.0
    best, found = -1.0, None
    for period in _PERIODS:
        turn = 2.0 * np.pi / period
        wave = taper * np.exp(-1j * turn * at)
        wave -= taper * (wave.sum() / taper.sum())
        moment = wave @ profile[3:-3]
        strength = turn * abs(moment) / float(np.linalg.norm(wave))
        if strength > best:
            best, found = strength, (wave, turn, moment)
    assert found is not None
    wave, turn, moment = found
    gain = -float(np.imag(-(wave @ slope) / moment)) / turn
    if best < 1.0 or not 0.3 < gain < 2.0:
        raise Unreadable("the verticals of the crosshatch are too faint")
    seen = block[..., 3:-3] @ wave.astype(np.complex64)
    return -np.angle(seen) / turn, gain


def _about_course(place: Array, lines: Array) -> tuple[Array, float]:
    """Shift about a level for each field, a slope and a bend along each stretch; outliers are NaN."""
    count = lines.shape[1]
    at = (np.arange(count) - (count - 1) / 2.0) / count
    odd = np.arange(count) % 2
    basis = np.linalg.qr(np.stack([1.0 - odd, odd, at, at**2], 1))[0]
    # Fields alternate along every stretch, whichever comes first, so one basis serves all.
    shift = place - (place @ basis) @ basis.T
    usual = 1.4826 * float(np.median(np.abs(shift)))
    shift[np.abs(shift) > _OUTLIER * usual + 0.02] = np.nan
    return shift, 1.0 - basis.shape[1] / count
