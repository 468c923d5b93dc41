"""What a ruler's band looks like at an edge of the picture, without and with fold-back.

All is seen from the edge inwards: for the right and the bottom edge the band is reversed, so that "before"
always means nearer to blanking. Coordinates t are samples (lines) from the first (last) of the frame,
x picture fractions from that edge.

A folded scan runs backwards, turns and then goes forward. About the turning point its speed changes in
proportion to time until it has its full value: the forward speed, or ``ratio`` times that backwards.
How the backward speed settles tells the kinds of turn apart: a ramp, the quarter sine of a resonant flyback,
or an exponential approach. A short turn of any kind is a sharp fold.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from typing import Literal

import numpy as np
import numpy.typing as npt

from patternscore.measure.stepshape import StepShape

Array = npt.NDArray[np.float64]
Turn = Literal["ramp", "sine", "soft"]
TURNS: tuple[Turn, ...] = ("ramp", "sine", "soft")
LIGHTEST = 0.05  # of the bars' contrast above dark bars: black that is taken for black
DELAY = 2.2  # samples by which the picture's end may come off nominal, as filters delay the signal
CELLS = 2000  # of the picture, in which a coarse look tells content apart
_ROOTS = np.linspace(0.0, 16.0, 1601)


@dataclass(frozen=True, slots=True, eq=False)
class Band:
    """One ruler's band near an edge of the picture.

    Attributes
    ----------
    t : (n,) float64
        Coordinates at which the samples were taken, rising by one from sample to sample or nearly so.
    level : (n,) float64
        Levels, 0 for dark bars and 1 for light ones.
    walls : (m,) float64
        Picture fractions at which the level changes, the first being the edge itself, 0.
    content : (m + 1,) float64
        Level before the first wall (black), between walls, and after the last.
    shape : StepShape
        Common step of the band, seen from the edge.
    forward : (3,) float64
        Coordinate at which the forward scan reaches x, as a parabola: lowest power first.
    met : (m,) float64
        Coordinate at which the forward scan meets each wall: as read, or from the parabola.
    late : float
        How much later than the scan's place rising steps come, and earlier falling ones.
    sigma : float
        Standard deviation of ``level`` from noise.
    """

    t: Array
    level: Array
    walls: Array
    content: Array
    shape: StepShape
    forward: Array
    met: Array
    late: float
    sigma: float

    def reach(self, x: npt.ArrayLike) -> Array:
        """Coordinate at which the forward scan reaches x."""
        x = np.asarray(x, dtype=np.float64)
        return np.asarray(self.forward[0] + x * (self.forward[1] + x * self.forward[2]))

    def position(self, t: npt.ArrayLike) -> Array:
        """Place x of the forward scan at coordinate t."""
        c, b, a = self.forward[0] - np.asarray(t, dtype=np.float64), self.forward[1], self.forward[2]
        root = np.sqrt(np.maximum(b * b - 4.0 * a * c, 0.01 * b * b))
        return np.asarray(-2.0 * c / (b + root))

    def slope(self, x: npt.ArrayLike) -> Array:
        """Coordinates per picture fraction of the forward scan."""
        return np.asarray(self.forward[1] + 2.0 * self.forward[2] * np.asarray(x, dtype=np.float64))

    def shallower(self, depth: float) -> Band:
        """Return the band without the walls beyond a depth."""
        keep = int(np.searchsorted(self.walls, depth)) + 1
        return replace(self, walls=self.walls[:keep], content=self.content[: keep + 1], met=self.met[:keep])

    def between(self, low: int, high: int) -> Band:
        """Return the band with the samples from ``low`` up to but not including ``high`` only."""
        return replace(self, t=self.t[low:high], level=self.level[low:high])


def unfolded_misfit(band: Band, start: float) -> Array:
    """Departures, (n,), of a band from the scan that does not fold and comes nearest to it.

    That scan is black up to where the picture begins, near ``start`` or later, as it is shifted, delayed or
    crushed; then it meets the walls where they were read.
    """
    t, walls = band.t, band.met[1:]
    first = max(start, float(t[0])) - DELAY
    begins = np.arange(first, max(float(walls[0]) - 1.0, first + 2 * DELAY), 0.25)[:, None]
    steps = np.diff(band.content)[1:]
    later = walls > begins[-1, 0]
    beyond = steps[later] @ band.shape.at(t[None, :] - walls[later, None])
    shown = band.shape.at(t[None, :] - begins)
    # Walls that the picture's beginning may hide fall in with it.
    early = np.maximum(walls[None, ~later], begins)
    hidden = np.einsum("k,ckn->cn", steps[~later], band.shape.at(t[None, None, :] - early[:, :, None]))
    rest = band.level - beyond - hidden - shown * band.content[1]
    dark = 1.0 - shown
    # Black is what it is found to be, but never lighter than the dark bars.
    black = np.sum(dark * rest, axis=1) / np.maximum(np.sum(dark * dark, axis=1), 1e-3)
    left = rest - dark * np.minimum(black, LIGHTEST)[:, None]
    return np.asarray(left[np.argmin(np.sum(left * left, axis=1))])


@lru_cache
def _settling(turn: Turn) -> tuple[Array, Array]:
    """Way made, as the root of twice the way, against time since the turn, both in units of the settling."""
    time = np.linspace(0.0, 1.0, 1200) ** 1.5 * 140.0
    if turn == "ramp":
        way = np.where(time < 1.0, 0.5 * time * time, time - 0.5)
    elif turn == "sine":
        quarter = np.pi / 2
        way = np.where(time < quarter, 1.0 - np.cos(time), 1.0 + time - quarter)
    else:
        way = time + np.expm1(-time)
    return np.interp(_ROOTS, np.sqrt(2.0 * way), time), np.sqrt(2.0 * way)


def _time_of_way(turn: Turn, way: Array) -> Array:
    """Time since the turn that a way takes, units of the settling."""
    table = _settling(turn)[0]
    where = np.sqrt(2.0 * way) * 100.0
    cell = np.minimum(where.astype(np.int64), _ROOTS.size - 2)
    lower = table[cell]
    return np.asarray(lower + (where - cell) * (table[cell + 1] - lower))


@dataclass(frozen=True, slots=True, eq=False)
class Folding:
    """Several folded scans of one band: columns (c, 1) of what follows from their parameters."""

    turning: Array
    joined: Array
    bottom: Array
    speed: Array
    ratio: Array
    rate: Array


def folding(band: Band, parameters: Array) -> Folding:
    """Work out folded scans.

    Parameters
    ----------
    band : Band
        The band.
    parameters : (c, 4) float64
        Turning point and start of the active line (coordinates), retrace ratio, and duration of the turn
        from full backward to full forward speed were the speed to change evenly.
    """
    turning, _, ratio, turn = (column[:, None] for column in parameters.T)
    rise = turn / (1.0 + ratio)  # from the turning point to full forward speed
    joined = band.position(turning + rise)
    speed = 1.0 / band.slope(joined)
    return Folding(turning, joined, joined - 0.5 * speed * rise, speed, ratio, 1.0 / rise)


def folded(band: Band, parameters: Array, turn: Turn, blanked: bool = True) -> Array:
    """Levels with a fold, for several sets of parameters at once.

    Parameters
    ----------
    band : Band
        The band.
    parameters : (c, 4) float64
        As for ``folding``.
    turn : str
        Kind of the turn.
    blanked : bool
        Whether the step from blanking is seen.

    Returns
    -------
    (c, n) float64
    """
    scan = folding(band, parameters)
    start = parameters[:, 1:2] if blanked else np.full((parameters.shape[0], 1), -1e3)
    height = band.walls[None, :] - scan.bottom
    met = height > 0
    height = np.maximum(height, 0.0)
    curved = np.sqrt(2.0 * height / (scan.speed * scan.rate))
    beyond = band.walls[None, :] > scan.joined
    forward = np.where(band.met[None, :] > scan.turning + 1.0 / scan.rate, band.met, band.reach(band.walls))
    later = np.where(beyond, forward, scan.turning + curved)
    settle = scan.ratio / scan.rate
    earlier = scan.turning - settle * _time_of_way(turn, height / (scan.speed * scan.ratio * settle))
    steps = np.diff(band.content)[None, :] * met
    late = band.late * np.sign(steps)
    earlier, later = earlier - late, np.where(later == band.met, later, later + late)
    places = np.concatenate([start, np.maximum(earlier, start), later], axis=1)
    inner = np.full(start.shape, band.content[-1] - band.content[0])
    sizes = np.concatenate([inner, -steps, steps], axis=1)
    values = band.shape.at(band.t[None, None, :] - places[:, :, None])
    return np.asarray(band.content[0] + np.einsum("ck,ckn->cn", sizes, values))


def folded_coarsely(
    band: Band, parameters: Array, blanked: bool = True, per: int = 4
) -> npt.NDArray[np.float32]:
    """As ``folded`` with a ramp, from content looked up ``per`` times a sample: quick, for a search.

    All parameters must share one start of the active line.
    """
    t = band.t
    fine = (np.arange(t.size * per) - (per - 1) / 2) / per + t[0]
    scan = folding(band, parameters)
    since = fine[None, :] - scan.turning
    settle = scan.ratio / scan.rate
    back = np.maximum(-since, 0.0) / settle
    way = scan.speed * scan.ratio * settle * np.where(back < 1.0, 0.5 * back * back, back - 0.5)
    ahead = scan.bottom + 0.5 * scan.speed * scan.rate * since * since
    place = np.where(since < 0, scan.bottom + way, np.where(since * scan.rate < 1.0, ahead, 0.0))
    place = np.where(since * scan.rate >= 1.0, band.position(fine)[None, :], place)
    table = band.content[np.searchsorted(band.walls, (np.arange(-1, CELLS) + 0.5) / CELLS, side="right")]
    level = table.astype(np.float32)[np.clip(place * CELLS + 1.0, 0, CELLS).astype(np.int64)]
    if blanked:
        level[:, fine < parameters[0, 1]] = band.content[0]
    away = t[None, :] - fine[:, None]
    upper, lower = band.shape.at(away + 0.5 / per), band.shape.at(away - 0.5 / per)
    upper[0], lower[-1] = 1.0, 0.0  # the stretch's own ends run on before and after it
    return np.asarray(level @ (upper - lower).astype(np.float32))
