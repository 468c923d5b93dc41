"""From a frame to the fitted response of the edges at one place."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.align import Alignment, refine, settle
from patternscore.measure.design import Design, design
from patternscore.measure.family import Family, Start, around, nearest, relative
from patternscore.measure.profile import Coding, Pile, Strip, coding_of, cut_strip, pile_up
from patternscore.measure.response import Response, edge_of, fit
from patternscore.measure.stepbasis import BINS
from patternscore.plan import Edge

Array = npt.NDArray[np.float64]
ROUNDING_LEFT = 0.05  # share of the variance of rounding that stays when it has been taken out by a model
MISFIT = 2.5  # chi2 per degree of freedom above which another round is worth its time
ROUNDS = 3
CORNER_LEVELS = (1e-3, 1e-2, 1e-1)


@dataclass(frozen=True, slots=True, eq=False)
class FittedEdge:
    """The edges of one place with their response.

    Attributes
    ----------
    strips : tuple of Strip
        Windows of the edges, in step.
    pile : Pile
        Their profiles.
    alignment : Alignment
        Of the first strip.
    response : Response
        What they show, in cycles per sample (along) or per line (across).
    slant : float
        Samples an edge moves from line to line (along), or lines from sample to sample (across).
    """

    strips: tuple[Strip, ...]
    pile: Pile
    alignment: Alignment
    response: Response
    slant: float

    @property
    def left(self) -> int:
        """Whole samples before an edge."""
        return self.strips[0].left

    @property
    def right(self) -> int:
        """Whole samples after an edge."""
        return self.strips[0].right


def fit_along(frame: Frame, located: Located, blocks: list[list[Edge]]) -> FittedEdge:
    """Fit near-vertical edges.

    Raises
    ------
    Unreadable
        If they are not there, cut off or too faint.
    """
    return _fit(frame, located, blocks, across=False)


def fit_across(frame: Frame, located: Located, blocks: list[list[Edge]]) -> FittedEdge:
    """Fit near-horizontal edges.

    Raises
    ------
    Unreadable
        If they are not there, cut off or too faint.
    """
    return _fit(frame, located, blocks, across=True)


def fit_corner(frame: Frame, located: Located, blocks: list[list[Edge]], centre: FittedEdge) -> FittedEdge:
    """Fit near-vertical edges as a change from those at the centre.

    Raises
    ------
    Unreadable
        If they are not there, cut off or too faint.
    """
    strips = _strips(frame, located, blocks)
    coding = coding_of(frame)
    family = relative(centre.response.gain)
    first = -strips[0].left * BINS
    pile = pile_up(strips, coding)
    alignment = None
    for _ in range(2):
        model = _design(strips, pile, coding, 1.0).profiles(edge_of(family.shape(family.start)[0]))
        alignment = _refine(strips, first, model, jitter=True)
        pile = pile_up(strips, coding)
    assert alignment is not None
    coding = coding.with_noise(pile.noise * float(strips[0].step.mean()))
    taps = np.array([-3, -2, -1, 1, 2, 3]) * BINS
    response = fit(
        _design(strips, pile, coding, coding.left_by_noise), family, taps, levels=CORNER_LEVELS, decays=(2.0,),
        wide=False, steps=6,
    )  # fmt: skip
    return FittedEdge(tuple(strips), pile, alignment, response, _slant(strips))


def _strips(frame: Frame, located: Located, blocks: list[list[Edge]]) -> list[Strip]:
    """Strips of the blocks that can be read, all with the same window."""
    strips, reason = [], "the pattern has no edge for it"
    for edges in blocks:
        try:
            strip = cut_strip(frame, located, edges)
            settle(strip)
            strips.append(strip)
        except Unreadable as failed:
            reason = failed.reason
    if not strips:
        raise Unreadable(reason)
    left, right = min(strip.left for strip in strips), min(strip.right for strip in strips)
    for strip in strips:
        strip.left, strip.right = left, right
    return strips


def _design(strips: list[Strip], pile: Pile, coding: Coding, residue: float) -> Design:
    code = coding.step / float(np.mean(np.concatenate([strip.step for strip in strips])))
    return design(strips, pile, code, residue)


def _refine(strips: list[Strip], first: int, model: Array, *, jitter: bool) -> Alignment:
    """Bring every strip into step with its part of the modelled profiles."""
    found, done = [], 0
    for strip in strips:
        count = len(strip.position)
        found.append(refine(strip, first, model[done : done + count], jitter=jitter))
        done += count
    return found[0]


def _begin(strips: list[Strip], pile: Pile, *, across: bool) -> Start:
    """Member of the library nearest to the mean profile."""
    profile, sound = pile.whole()
    return nearest(profile, strips[0].left, strips[0].right, used=sound, across=across)


def _fit(frame: Frame, located: Located, blocks: list[list[Edge]], *, across: bool) -> FittedEdge:
    strips = _strips(frame, located, blocks)
    coding = coding_of(frame)
    first = -strips[0].left * BINS
    pile = pile_up(strips, coding)
    for _ in range(2):
        family = _family(_begin(strips, pile, across=across), across=across)
        model = _design(strips, pile, coding, 1.0).profiles(edge_of(family.shape(family.start)[0]))
        alignment = _refine(strips, first, model, jitter=not across)
        pile = pile_up(strips, coding)
    taps = _taps(strips[0], across=across)
    family = _family(_begin(strips, pile, across=across), across=across)
    response = fit(_design(strips, pile, coding, coding.left_by_noise), family, taps)
    for _ in range(ROUNDS - 1):
        coding = coding.with_noise(pile.noise * float(strips[0].step.mean()))
        alignment = _refine(strips, first, response.model, jitter=not across)
        pile = pile_up(strips, coding, response.model)
        posed = _design(strips, pile, coding, ROUNDING_LEFT * coding.left_by_noise)
        response = fit(posed, _again(family, response), taps)
        if not coding.coarse and response.chi2 < MISFIT:
            break
    return FittedEdge(tuple(strips), pile, alignment, response, _slant(strips))


def _family(start: Start, *, across: bool) -> Family:
    return around(start, (0, 4)) if across else around(start)


def _again(family: Family, response: Response) -> Family:
    return Family(family.shape, response.theta, family.prior, family.lowest, family.highest)


def _taps(strip: Strip, *, across: bool) -> npt.NDArray[np.int64]:
    """Echoes close to the edge, and wider further off: across the lines the response is short."""
    if across:
        half = np.arange(2, 4 * BINS + 1, 2)
    else:
        reach = (min(strip.left, strip.right) - 2) * BINS
        half = np.concatenate([np.arange(3, 37, 3), np.arange(42, reach + 1, 6)])
    return np.concatenate([-half[::-1], half])


def _slant(strips: list[Strip]) -> float:
    """Mean rate at which the edges move from row to row."""
    rates = [abs(np.polyfit(strip.rows, strip.position.mean(axis=0), 1)[0]) for strip in strips]
    return float(np.mean(rates))
