"""Edges away from the centre, as a change from the centre's response."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.measure.align import refine, settle
from patternscore.measure.design import lay_out
from patternscore.measure.family import relative, spotted
from patternscore.measure.fitedge import FittedEdge
from patternscore.measure.profile import Pile, coding_of, pile_up, slope_of
from patternscore.measure.response import Response
from patternscore.measure.stepbasis import edge_of, step_basis
from patternscore.measure.strip import Run, Strip, cut_strip

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
# Sizes of the spot that are tried; see ``relative``. Between them the profiles are interpolated.
SPOTS = np.array([-0.3, -0.2, -0.1, 0.0, 0.1, 0.2, 0.35, 0.55, 0.8, 1.2, 1.8, 2.7, 4.0, 6.0])

SHAKY = 0.05  # samples of jitter from which lines are brought into step one by one


@dataclass(frozen=True, slots=True, eq=False)
class _Shelf:
    """Mean profiles for all sizes of the spot, (spots, bins), with their slopes in time and size."""

    profiles: Array
    rates: Array
    changes: Array
    gram: Array


def fit_corners(frame: Frame, blocks: dict[str, list[Run]], centre: FittedEdge) -> dict[str, Response]:
    """Fit the near-vertical edges of some blocks as the centre's with another spot.

    Parameters
    ----------
    blocks : dict of list of Run
        The edges of each block, by place.

    Returns
    -------
    dict of Response
        By place, those that can be read; their parameter is the size of the spot.

    Notes
    -----
    Lines are brought into step one by one only where there is much jitter at the centre; what a little does to
    the profile is part of the model.
    """
    strips: dict[str, Strip] = {}
    coding = coding_of(frame)
    for place, runs in blocks.items():
        try:
            strip = cut_strip(frame, runs)
            settle(strip, coding.limits)
        except Unreadable:
            continue
        strips[place] = strip
    if not strips:
        return {}
    left, right = (min(getattr(strip, side) for strip in strips.values()) for side in ("left", "right"))
    for strip in strips.values():
        strip.narrow(left, right)
    gain = centre.response.gain
    shelf: _Shelf | None = None
    found = {}
    shaky = centre.alignment.jitter > SHAKY
    for place, strip in strips.items():
        pile = pile_up([strip], coding)
        if shelf is None:
            shelf = _shelf(strip, pile, gain, 0.0 if shaky else centre.alignment.jitter)
        if shaky:
            model = shelf.profiles[[_nearest(pile, shelf)] * len(strip.position)]
            for _ in range(2):
                refine(strip, model, jitter=True)
            pile = pile_up([strip], coding)
        found[place] = _fit(pile, shelf, gain)
    return found


def _shelf(strip: Strip, pile: Pile, gain: Complex, jitter: float) -> _Shelf:
    nu = step_basis().nu
    blurred = gain * np.exp(-2.0 * (np.pi * nu * jitter) ** 2)
    layout = lay_out([strip], pile)
    edges = edge_of(spotted(blurred, SPOTS), layout.reach(0))
    profiles = layout.profiles(edges).mean(axis=1)
    rates = slope_of(profiles)
    columns = np.stack([np.ones_like(profiles), profiles, rates], axis=1)
    gram = columns @ columns.transpose(0, 2, 1)
    return _Shelf(profiles, rates, np.gradient(profiles, SPOTS, axis=0), gram)


def _fit(pile: Pile, shelf: _Shelf, gain: Complex) -> Response:
    """Find the nearest size, then one step of least squares on size, delay, step and offset."""
    profile, sound = pile.whole()
    spot = float(SPOTS[_nearest(pile, shelf)])
    weight = np.sqrt(np.where(sound, 1.0 / np.maximum((1.0 / np.maximum(pile.count, 1.0)).mean(axis=0), 1e-9), 0.0))
    weight *= np.sqrt(len(pile.count)) / max(pile.noise, 1e-3)
    for _ in range(2):
        model, change, rate = _between(shelf, spot)
        columns = np.stack([change, model, rate, np.ones_like(model)]) * weight
        normal = columns @ columns.T
        normal.flat[::5] *= 1.0 + 1e-9
        solved = np.linalg.solve(normal, columns @ (profile * weight))
        spot = float(np.clip(spot + solved[0] / max(solved[1], 0.1), SPOTS[0], SPOTS[-1]))
    rest = profile * weight - solved @ columns
    chi2 = float(rest @ rest) / max(int(np.count_nonzero(sound)) - 4, 1)
    variance = float(np.linalg.inv(normal)[0, 0]) / solved[1] ** 2
    whole, slopes = relative(gain).shape(np.array([spot, 0.0]))
    return Response(
        nu=step_basis().nu,
        gain=whole,
        slopes=slopes[:1],
        covariance=np.array([[variance]]),
        theta=np.array([spot]),
        step=float(solved[1]),
        chi2=chi2,
        drift=solved[2:],
        outer=np.zeros((0, 1, len(model))),
    )


def _nearest(pile: Pile, shelf: _Shelf) -> int:
    """Size on the shelf that fits best with any delay, step and offset."""
    profile, sound = pile.whole()
    held = np.where(sound, profile, 0.0)
    target = np.stack([np.full(len(SPOTS), held.sum()), shelf.profiles @ held, shelf.rates @ held], axis=1)
    fitted = np.linalg.solve(shelf.gram, target[..., None])[..., 0]
    return int(np.argmax(np.einsum("ka,ka->k", fitted, target)))


def _between(shelf: _Shelf, spot: float) -> tuple[Array, Array, Array]:
    """Profile for a size between those on the shelf, a cubic in it; its slopes in size and in time."""
    k = int(np.clip(np.searchsorted(SPOTS, spot) - 1, 0, len(SPOTS) - 2))
    width = SPOTS[k + 1] - SPOTS[k]
    u = (spot - SPOTS[k]) / width
    low, high = shelf.profiles[k], shelf.profiles[k + 1]
    first, last = shelf.changes[k] * width, shelf.changes[k + 1] * width
    model = low + u * (first + u * ((3 * (high - low) - 2 * first - last) + u * (2 * (low - high) + first + last)))
    change = (
        first + u * (2 * (3 * (high - low) - 2 * first - last) + 3 * u * (2 * (low - high) + first + last))
    ) / width
    return model, change, slope_of(model)
