"""Where to begin the fit of a scan that folds: coarse searches over all that it may be."""

from __future__ import annotations

from itertools import product

import numpy as np
import numpy.typing as npt

from patternscore.measure.foldband import Band
from patternscore.measure.foldmodel import Look, folded
from patternscore.measure.foldview import LEAST, View

Array = npt.NDArray[np.float64]
SHARP_RATIOS = np.geomspace(2.2, 10.5, 27)
BENT_RATIOS = (2.0, 3.0, 4.5, 6.5, 9.5)
BENT_TURNS = (1.2, 3.5, 9.0)  # bars
PER = 8  # points per sample of the mirrored bars


def sharp_starts(view: View, most: int) -> Array:
    """Sharp folds that come nearest to the bands.

    The mirrored bars before a sharp turn are the forward ones squeezed, at a place that follows from where
    the turn is: one table for each ratio serves all turning points.

    Returns
    -------
    (k, 4) float64
        Turning point (coordinate), start, ratio, and a short duration of the turn.
    """
    turning = np.arange(view.start + LEAST * view.bar, max(view.latest, view.start + view.bar), 0.25)
    cost = np.sum([_sharp_cost(view, band, turning) for band in view.bands], axis=0)
    chosen: list[tuple[int, int]] = []
    for flat in np.argsort(cost, axis=None)[:400]:
        ratio, turn = np.unravel_index(int(flat), cost.shape)
        if all(abs(turn - b) > 0.5 * view.bar or abs(int(ratio) - a) > 2 for a, b in chosen):
            chosen.append((int(ratio), int(turn)))
        if len(chosen) == most:
            break
    return np.array([[turning[b], view.start, SHARP_RATIOS[a], 0.1 * view.bar] for a, b in chosen])


def _sharp_cost(view: View, band: Band, turning: Array) -> Array:
    """Sum of squares that sharp folds leave of a band, (ratios, turning points)."""
    ahead = band.content[0] + np.diff(band.content) @ band.shape.at(band.t[None, :] - band.edges[:, None])
    after = np.cumsum((band.level - ahead)[::-1] ** 2)[::-1]
    right = np.append(after, 0.0)[np.searchsorted(band.t, turning)]
    part = (band.t < turning[-1]) & (band.t > (view.start + 2.5 if view.blanked else -1.0))
    t, level = band.t[part], band.level[part]
    bottom = band.position(turning)
    pace = band.slope(bottom)
    # Where the squeezed bars would have their edge x = 0.
    zero = turning[None, :] + (bottom * pace)[None, :] / SHARP_RATIOS[:, None]
    table = _mirrored(band, float(np.mean(pace)), float(zero.max() - t.min()) if t.size else 1.0)
    index = np.clip((zero[:, :, None] - t[None, None, :]) * PER, 0, table.shape[1] - 1).astype(np.int32)
    found = table[np.arange(SHARP_RATIOS.size)[:, None, None], index]
    left = np.where(t[None, None, :] < turning[None, :, None], found - level.astype(np.float32), 0.0)
    return np.asarray(np.einsum("rtn,rtn->rt", left, left) + right[None, :])


def _mirrored(band: Band, pace: float, length: float) -> npt.NDArray[np.float32]:
    """Mirrored bars against the time before their edge x = 0, for each ratio: (ratios, points)."""
    before = np.arange(int(length * PER) + 2) / PER
    places = band.walls[None, :] * (pace / SHARP_RATIOS[:, None])
    values = band.shape.at(places[:, :, None] - before[None, None, :])
    steps = np.diff(band.content)
    return np.asarray(band.content[-1] - np.einsum("k,rkn->rn", steps, values), dtype=np.float32)


def bent_starts(view: View, looks: list[Look], most: int) -> Array:
    """Folds with long turns that come nearest to the bands, as ``sharp_starts``."""
    first = view.start + LEAST * view.bar
    turning = np.arange(first, max(view.latest, first + 0.1), 0.13 * view.bar)
    turns = np.array(BENT_TURNS) * view.bar
    tries = np.array(list(product(turning, [view.start], BENT_RATIOS, turns)))
    target = np.concatenate([band.level for band in view.bands]).astype(np.float32)
    levels = [folded(look, tries, "ramp") for look in looks]
    cost = np.mean((np.concatenate(levels, axis=1) - target) ** 2, axis=1)
    chosen: list[int] = []
    for candidate in np.argsort(cost)[:300]:
        if all(abs(tries[candidate, 0] - tries[other, 0]) > 0.3 * view.bar for other in chosen):
            chosen.append(int(candidate))
        if len(chosen) == most:
            break
    return tries[chosen]
