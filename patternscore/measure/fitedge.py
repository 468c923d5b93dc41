"""From a frame to the fitted response of the edges at one place."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.measure.align import Alignment, refine, settle
from patternscore.measure.design import design, lay_out
from patternscore.measure.family import Family, Start, around, nearest, pole_frequency
from patternscore.measure.profile import Coding, Pile, coding_of, pile_up
from patternscore.measure.response import Response, fit, modelled
from patternscore.measure.stepbasis import BINS, edge_of
from patternscore.measure.strip import Run, Strip, cut_strip
from patternscore.reading import Estimate

Array = npt.NDArray[np.float64]
NOISIEST = 0.4  # rms of a sample, fraction of the step, from which nothing is read
MISFIT = 2.5  # chi2 per degree of freedom above which another round is worth its time
FAR = 0.25  # samples of a move after which another is made: the step was no longer a small one
ROUNDS, ROUNDS_ACROSS = 3, 2


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
    poles : Estimate or None
        Frequency of the pole pair of the fitted family, cycles per sample, if it has one that rings.
    slant : float
        Samples an edge moves from line to line (along), or lines from sample to sample (across).
    """

    strips: tuple[Strip, ...]
    pile: Pile
    alignment: Alignment
    response: Response
    poles: Estimate | None
    slant: float

    @property
    def left(self) -> int:
        """Whole samples before an edge."""
        return self.strips[0].left

    @property
    def right(self) -> int:
        """Whole samples after an edge."""
        return self.strips[0].right


def fit_edges(frame: Frame, blocks: list[list[Run]], *, across: bool) -> FittedEdge:
    """Fit the edges of one place and axis.

    Parameters
    ----------
    blocks : list of list of Run
        The edges of each block.
    across : bool
        Whether they show the response across the lines.

    Raises
    ------
    Unreadable
        If they are not there, cut off or too faint.

    Notes
    -----
    Edges are first brought into step by their areas, then by the nearest of a library of profiles. Where the
    code is coarse against the noise, or the fit leaves too much, it is done again with what has been learnt.
    """
    coding = coding_of(frame)
    strips = _strips(frame, blocks, coding)
    scale = float(np.mean(np.concatenate([strip.step for strip in strips])))
    pile = pile_up(strips, coding)
    start = _begin(strips, pile, across=across)
    family = _family(start, across=across)
    layout = lay_out(strips, pile, neighbours=not across)
    model = layout.profiles(edge_of(family.shape(family.start)[0], layout.reach(0)))
    alignment = _refine(strips, model, jitter=not across)
    if alignment.noise > NOISIEST:
        raise Unreadable("the edge is lost in the noise")
    coding = coding.with_noise(pile.noise * scale)
    pile = pile_up(strips, coding, model)
    layout = lay_out(strips, pile, neighbours=not across)
    posed = design(layout, pile, coding.step / scale, coding.left_by_noise)
    taps = _taps(strips[0], across=across)
    rounds = ROUNDS_ACROSS if across else ROUNDS
    response = fit(posed, family, taps)
    for _ in range(rounds - 1):
        if response.chi2 < MISFIT:
            break
        model = modelled(response, layout)
        alignment = _refine(strips, model, jitter=not across)
        pile = pile_up(strips, coding, model)
        layout = lay_out(strips, pile, neighbours=not across)
        posed = design(layout, pile, coding.step / scale, coding.left_by_noise, posed)
        response = fit(posed, _again(family, response), taps)
    poles = None if across else _poles(response, start.scale)
    return FittedEdge(tuple(strips), pile, alignment, response, poles, _slant(strips))


def _poles(response: Response, scale: float) -> Estimate | None:
    found = pole_frequency(response.theta, scale)
    if found is None:
        return None
    value, slopes = found
    covariance = response.covariance[: len(slopes), : len(slopes)] * max(response.chi2, 1.0)
    return Estimate(value, float(np.sqrt(max(float(slopes @ covariance @ slopes), 0.0))))


def _strips(frame: Frame, blocks: list[list[Run]], coding: Coding) -> list[Strip]:
    """Strips of the blocks that can be read, all with the same window."""
    strips, reason = [], "the pattern has no edge for it"
    for runs in blocks:
        try:
            strip = cut_strip(frame, runs)
            settle(strip, coding.limits)
            strips.append(strip)
        except Unreadable as failed:
            reason = failed.reason
    if not strips:
        raise Unreadable(reason)
    left, right = min(strip.left for strip in strips), min(strip.right for strip in strips)
    for strip in strips:
        strip.narrow(left, right)
    return strips


def _refine(strips: list[Strip], model: Array, *, jitter: bool) -> Alignment:
    """Bring every strip into step with its part of the modelled profiles."""
    found, done = [], 0
    for strip in strips:
        count = len(strip.position)
        part = model[done : done + count]
        alignment = refine(strip, part, jitter=jitter)
        if alignment.moved > FAR:
            alignment = refine(strip, part, jitter=jitter)
        found.append(alignment)
        done += count
    return found[0]


def _begin(strips: list[Strip], pile: Pile, *, across: bool) -> Start:
    """Member of the library nearest to the mean profile."""
    profile, sound = pile.whole()
    return nearest(profile, strips[0].left, strips[0].right, used=sound, across=across)


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
    rates = [abs(np.mean(strip.position[:, -1] - strip.position[:, 0])) / np.ptp(strip.rows) for strip in strips]
    return float(np.mean(rates))
