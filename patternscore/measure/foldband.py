"""A ruler's band at an edge of the picture, and how far it is from a scan that does not fold.

All is seen from the edge inwards: for the right and the bottom edge the band is reversed, so that "before"
always means nearer to blanking. Coordinates t are samples (lines) from the first (last) of the frame,
x picture fractions from that edge.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from patternscore.measure.stepshape import StepShape

Array = npt.NDArray[np.float64]
LIGHTEST = 0.05  # of the bars' contrast above dark bars: black that is taken for black
SHARPER = 0.85  # part of the width of the bars' steps that may be the spot's
EDGE_DOUBT = 1.2  # samples by which the picture's edge may come off the pace of the bars
DELAY = 2.2  # samples by which the picture's end may come off nominal, as filters delay the signal


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
    read : (m,) bool
        Where it was read.
    late : float
        How much later than the scan's place rising steps come, and earlier falling ones.
    sigma : float
        Standard deviation of ``level`` from noise.
    limits : (float, float)
        Lowest and highest level along the whole band: coding and clipping let nothing beyond.
    """

    t: Array
    level: Array
    walls: Array
    content: Array
    shape: StepShape
    forward: Array
    met: Array
    read: npt.NDArray[np.bool_]
    late: float
    sigma: float
    limits: tuple[float, float]

    @property
    def edges(self) -> Array:
        """Coordinates at which the level changes in the forward scan."""
        return self.met + self.late * np.sign(np.diff(self.content))

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
        return replace(
            self,
            walls=self.walls[:keep],
            content=self.content[: keep + 1],
            met=self.met[:keep],
            read=self.read[:keep],
        )

    def between(self, low: int, high: int) -> Band:
        """Return the band with the samples from ``low`` up to but not including ``high`` only."""
        return replace(self, t=self.t[low:high], level=self.level[low:high])


def unfolded_misfit(band: Band, start: float) -> Array:
    """Departures, (n,), of a band from the scan that does not fold and comes nearest to it.

    That scan is black up to where the picture begins: at ``start``, or where the pace of the bars puts its
    edge x = 0; then it meets the walls where they were read.
    """
    t, walls = band.t, band.edges[1:]
    earliest = max(start, float(t[0]))
    edge = float(band.met[0])
    slack = EDGE_DOUBT + 0.1 * float(band.met[band.read][0] - edge) if band.read.any() else EDGE_DOUBT
    first = max(earliest - DELAY, edge - slack)
    begins = np.arange(first, max(edge + slack, earliest + DELAY), 0.25)[:, None]
    steps = np.diff(band.content)[1:]
    later = walls > begins[-1, 0]
    beyond = steps[later] @ band.shape.at(t[None, :] - walls[later, None])
    # Walls that the picture's beginning may hide fall in with it.
    early = np.maximum(walls[None, ~later], begins)
    hidden = np.einsum("k,ckn->cn", steps[~later], band.shape.at(t[None, None, :] - early[:, :, None]))
    rest = band.level - beyond - hidden
    # The spot is on the picture and not on blanking: the step from it may be sharper than those of the bars.
    sharper = band.shape.without_spot(SHARPER * band.shape.width, limited=True)
    left = np.concatenate([_beginning(band, rest, shape.at(t[None, :] - begins)) for shape in (band.shape, sharper)])
    return np.asarray(left[np.argmin(np.sum(left * left, axis=1))])


def _beginning(band: Band, rest: Array, shown: Array) -> Array:
    """What is left where the picture is shown to the parts ``shown``, (c, n), and black elsewhere."""
    rest = rest - shown * band.content[1]
    dark = 1.0 - shown
    # Black is what it is found to be, but never lighter than the dark bars.
    black = np.sum(dark * rest, axis=1) / np.maximum(np.sum(dark * dark, axis=1), 1e-3)
    return np.asarray(rest - dark * np.minimum(black, LIGHTEST)[:, None])
