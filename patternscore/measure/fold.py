"""Whether the scan folds back at an edge of the picture, and for how long.

Where the forward code of the rulers runs up to blanking, or stops at a black border, there is no fold. Where
something else stands before the forward code begins, a scan that folds there is fitted to the whole strip. It
is believed only if it explains the strip far better than a scan that does not fold.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.measure.foldband import unfolded_misfit
from patternscore.measure.foldfit import fit_fold
from patternscore.measure.foldview import LEAST, View
from patternscore.measure.rulerband import Axis
from patternscore.reading import Estimate

Array = npt.NDArray[np.float64]
# rms misfit, of the bars' contrast, up to which the unfolded scan is taken as it is. Down the field it is larger:
# lines are sampled without a filter.
PLAIN: dict[Axis, float] = {"h": 0.105, "v": 0.17}
BETTER = 0.4  # part of the unfolded scan's misfit that the folded one may leave
MISFIT = 0.11  # rms misfit that a folded scan may leave to be believed


@dataclass(frozen=True, slots=True, eq=False)
class Fold:
    """A fold, or its absence.

    Attributes
    ----------
    length : Estimate
        Samples or lines; 0 where the scan does not fold.
    turning, ratio : float
        Coordinate of the turning point from that edge of the frame, and backward over forward speed; 0 where
        the scan does not fold.
    misfit : (float, float)
        rms departure, of the bars' contrast, from a scan that does not fold and from the one believed.
    """

    length: Estimate
    turning: float = 0.0
    ratio: float = 0.0
    misfit: tuple[float, float] = (0.0, 0.0)


def suspect(view: View) -> float:
    """How far the strip before the forward code departs from a scan that does not fold.

    Returns
    -------
    float
        Largest rms over the length of a bar, of the bars' contrast; there is no reason to think of a fold
        where it is below ``PLAIN``.
    """
    view = _strip(view)
    energy = np.mean([unfolded_misfit(band, view.black_until) ** 2 for band in view.bands], axis=0)
    energy = energy[view.bands[0].t < view.certified]
    bar = int(np.ceil(view.bar))
    run = np.convolve(np.pad(energy, bar), np.full(bar, 1.0 / bar), "valid")
    return float(np.sqrt(run.max()))


def no_fold(plain: float, edge_sigma: float) -> Fold:
    """Give the absence of a fold; ``edge_sigma`` is how well a bar edge is known, samples or lines."""
    return Fold(Estimate(0.0, max(edge_sigma, 1e-3)), misfit=(plain, plain))


def find_fold(view: View, plain: float, *, final: bool = True) -> Fold:
    """Measure the fold of an edge that is under suspicion.

    Parameters
    ----------
    view : View
        The edge of the picture.
    plain : float
        What ``suspect`` found.
    final : bool
        Whether to judge it, too.

    Raises
    ------
    Unreadable
        If something stands before the forward code that no fold explains.
    """
    fit = fit_fold(_strip(view))
    if final and (fit.misfit > min(BETTER * plain, MISFIT) or fit.length.value < LEAST * view.bar):
        raise Unreadable("what stands before the forward code is neither black nor folded picture")
    return Fold(fit.length, fit.turning, fit.ratio, (plain, fit.misfit))


def _strip(view: View) -> View:
    """Cut the bands to what a fold may touch."""
    ahead = view.start - 0.8 * view.bar if view.blanked else view.start + 0.6
    low = max(0, math.ceil(ahead))
    high = int(max(view.latest, view.certified + view.bar) + 1.5 * view.bar) + 1
    if not view.blanked:  # a wall that close to the first line could not be read
        hidden = [wall for band in view.bands for wall in band.met[1:3] if abs(wall - view.start) < 2.5]
        low = max([low, *(math.ceil(wall + 1.6) for wall in hidden)])
    return replace(view, bands=tuple(band.between(low, high) for band in view.bands))
