"""What a band looks like where the scan folds back.

A folded scan runs backwards, turns and then goes forward. About the turning point its speed changes in
proportion to time until it has its full value: the forward speed, or ``ratio`` times that backwards.
How the backward speed settles tells the kinds of turn apart: a ramp, the quarter sine of a resonant flyback,
an exponential approach, or the quarter sine that ends at the turning point, where the forward scan sets in at
once. A short turn of any kind is a sharp fold.

The spot acts on the picture and the electrical response on the signal, so the mirrored bars, scanned fast,
lose less to the spot than the forward ones. How the response seen on the forward bars is shared between the
two is not known beforehand: ``Look`` stands for one way of sharing it.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from patternscore.measure.foldband import Band

Array = npt.NDArray[np.float64]
Turn = Literal["ramp", "sine", "soft", "arch"]
TURNS: tuple[Turn, ...] = ("ramp", "sine", "soft", "arch")
PER = 4  # stretches of time per sample over which the picture is averaged
BEYOND = 6  # samples before and after the band that the response reaches
OUTSIDE = 0.12  # picture fraction before the edge that the table of the picture holds
CELLS = 16  # of the picture per sample of forward scan
NARROWEST = 0.15  # samples: spot below which the picture is taken as it is


def with_turn(parameters: Array, length: float) -> Array:
    """Give the parameters another duration of the turn, and leave the mirrored bars where they are.

    The straight stretches before and after the turn stay; the turning point moves between them.
    """
    ratio = parameters[..., 2]
    moved = parameters.copy()
    moved[..., 0] += 0.5 * (length - parameters[..., 3]) * (ratio - 1.0) / (ratio + 1.0)
    moved[..., 3] = length
    return moved


@dataclass(frozen=True, slots=True, eq=False)
class Look:
    """A band prepared for scanning it in many ways with one spot and one response.

    Attributes
    ----------
    borders : (f + 1,) float64
        Coordinates between the stretches of time.
    ahead : (f + 1,) float64
        Place of the forward scan at them.
    smear : (f, n) float64
        Weight of each stretch in each sample.
    scale : float
        Cells of the picture per picture fraction.
    level, total : (cells,) float64
        The picture as the spot sees it, and its running sum.
    black : float
        Level of blanking.
    blanked : bool
        Whether the step from blanking is seen.
    """

    band: Band
    borders: Array
    ahead: Array
    smear: Array
    scale: float
    level: Array
    total: Array
    black: float
    blanked: bool


def look_at(band: Band, share: float, blanked: bool) -> Look:
    """Prepare a band.

    Parameters
    ----------
    band : Band
        The band.
    share : float
        Part, 0 to 1, of the width of the step seen on forward bars that is the spot's.
    blanked : bool
        Whether the step from blanking is seen through the response, as along the line.
    """
    spot = max(share * band.shape.width, NARROWEST)
    response = band.shape.without_spot(spot, limited=blanked) if share > 0 else band.shape
    first, last = float(band.t[0]) - BEYOND, float(band.t[-1]) + BEYOND
    borders = np.arange(int((last - first) * PER) + 1) / PER + first
    away = band.t[None, :] - borders[:, None]
    reached = response.at(away)
    reached[0], reached[-1] = 1.0, 0.0  # the band's own ends run on before and after it
    pace = float(band.slope(0.05))
    level = _picture(band, pace, spot)
    total = np.concatenate([[0.0], np.cumsum((level[1:] + level[:-1]) / 2.0)])
    ahead = _forward_place(band, borders)
    return Look(band, borders, ahead, reached[:-1] - reached[1:], pace * CELLS, level, total, band.content[0], blanked)


def _picture(band: Band, pace: float, spot: float) -> Array:
    """Levels of the picture along the band as a Gaussian spot sees them, from ``OUTSIDE`` before the edge."""
    shift = band.late * np.sign(np.diff(band.content)) / pace  # as clipping widens light bars
    cells = (band.walls + shift + OUTSIDE) * pace * CELLS
    count = int(cells[-1] + 20 * CELLS)
    steps = np.zeros(count)
    whole = np.floor(cells).astype(np.int64)
    part = cells - whole
    np.add.at(steps, whole, np.diff(band.content) * (1.0 - part))
    np.add.at(steps, whole + 1, np.diff(band.content) * part)
    reach = int(4.0 * spot * CELLS) + 1
    weights = np.exp(-0.5 * (np.arange(-reach, reach + 1) / (spot * CELLS)) ** 2)
    return np.asarray(band.content[0] + np.cumsum(np.convolve(steps, weights / weights.sum(), "same")))


def _forward_place(band: Band, t: Array) -> Array:
    """Place of the forward scan: through the walls where they were read, along the parabola elsewhere."""
    read = np.flatnonzero(band.read)
    place = band.position(t)
    if read.size < 2:
        return place
    off = band.walls[read] - band.position(band.met[read])
    return np.asarray(place + np.interp(t, band.met[read], off))


def _way(turn: Turn, time: Array) -> Array:
    """Way made backwards in units of the settling, against time before the turn in the same units."""
    if turn == "ramp":
        return np.where(time < 1.0, 0.5 * time * time, time - 0.5)
    if turn in ("sine", "arch"):
        quarter = np.pi / 2
        return np.where(time < quarter, 1.0 - np.cos(np.minimum(time, quarter)), 1.0 + time - quarter)
    return np.asarray(time + np.expm1(-time))


def lowest(look: Look, parameters: Array, turn: Turn) -> tuple[Array, Array, Array]:
    """Where the folded scan turns (picture fraction), its forward speed there, and how long it takes to reach it.

    All are columns, (c, 1); speeds are picture fractions per sample.
    """
    turning, ratio, length = parameters[:, :1], parameters[:, 2:3], parameters[:, 3:]
    lead = length / (1.0 + ratio) if turn != "arch" else np.zeros_like(turning)
    joined = np.interp(turning + lead, look.borders, look.ahead)
    speed = 1.0 / look.band.slope(joined)
    return joined - 0.5 * speed * lead, speed, lead


def places(look: Look, parameters: Array, turn: Turn) -> Array:
    """Places of folded scans at the borders of the stretches, (c, f + 1)."""
    bottom, speed, lead = lowest(look, parameters, turn)
    turning, ratio = parameters[:, :1], parameters[:, 2:3]
    rise = parameters[:, 3:] / (1.0 + ratio)
    since = look.borders[None, :] - turning
    settle = ratio * rise
    way = speed * ratio * settle * _way(turn, np.maximum(-since, 0.0) / settle)
    gain = np.maximum(since, 0.0)
    turned = bottom + np.where(since < 0, way, 0.5 * speed / rise * gain * gain)
    return np.where(since < lead, turned, look.ahead[None, :])


def folded(look: Look, parameters: Array, turn: Turn) -> Array:
    """Levels with a fold, for several sets of parameters at once.

    Parameters
    ----------
    look : Look
        The band, prepared.
    parameters : (c, 4) float64
        Turning point and start of the active line (coordinates), retrace ratio, and duration of the turn
        from full backward to full forward speed were the speed to change evenly.
    turn : str
        Kind of the turn.

    Returns
    -------
    (c, n) float64
    """
    where = (places(look, parameters, turn) + OUTSIDE) * look.scale
    where = np.clip(where, 0.0, look.level.size - 1.001)
    cell = where.astype(np.int64)
    part = where - cell
    level = look.level[cell]
    rise = look.level[cell + 1] - level
    total = look.total[cell] + part * (level + 0.5 * part * rise)
    level = level + part * rise
    across = np.diff(where, axis=1)
    # Average over each stretch of time; where the scan all but stands, the level itself.
    still = np.abs(across) < 0.2
    mean = np.where(still, (level[:, 1:] + level[:, :-1]) / 2.0, np.diff(total, axis=1) / np.where(still, 1.0, across))
    if look.blanked:
        shown = np.clip((look.borders[None, 1:] - parameters[:, 1:2]) * PER, 0.0, 1.0)
        mean = look.black + shown * (mean - look.black)
    return np.clip(mean @ look.smear, *look.band.limits)
