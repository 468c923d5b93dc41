"""The profiles of parallel edges as a linear function of the transfer function."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.measure.profile import Pile, slope_of
from patternscore.measure.stepbasis import BINS, sample_mean, step_basis
from patternscore.measure.strip import Strip

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Single = npt.NDArray[np.float32]
Index = npt.NDArray[np.int64]

NEAR = 6 * BINS  # bins each side of an edge that are taken one by one; further off whole samples will do
FILLED = 0.9  # part of the bins that have to hold samples
OFFSET = 0.007  # prior sigma of a profile's offset, fraction of the step: tilt, hum, an error of the levels
FINELY = 60 * BINS  # lag in bins beyond which so little of an edge is left that the nearest bin will do
FLOOR = 1e-5  # fraction of the step: what is left out of the model anyway
MIDDLE = 0.05  # prior sigma of the error of the middle between the levels, which shows with the edges' polarity
BEYOND = 0.3  # prior sigma of what the pattern does beyond the clear part, steps
BEFORE, AFTER = (5, 12, 24), (5, 12)  # where that may be, samples from the end of the window


@dataclass(frozen=True, slots=True)
class Neighbour:
    """An edge that leaves something in another's window: ``lag`` bins before it, ``factor`` times its step."""

    edge: int
    lag: float
    factor: float


@dataclass(frozen=True, slots=True, eq=False)
class Layout:
    """Which rows stand for the profiles of some strips, and what each edge's neighbours leave in its profile.

    Rows are, first, fine bins about the edge, a mean over all edges; then bins of a sample further off, edge by
    edge, for there neighbours leave something else in each.

    Attributes
    ----------
    first, bins : int
        Bin of the first value of a profile, and their number.
    near, coarse : (k,) int
        Places in the profile of the fine bins, and of the middles of the coarse ones.
    share : (edges, near) float64
        Weight of each edge in the fine rows.
    signs, lags : (edges,) float64
        Polarity of each edge, and bins from the first of its block.
    """

    first: int
    bins: int
    near: Index
    coarse: Index
    share: Array
    neighbours: tuple[Neighbour, ...]
    signs: Array
    lags: Array

    @property
    def even(self) -> bool:
        """Whether every edge counts alike in the fine rows."""
        return bool(np.ptp(self.share) == 0.0)

    def reach(self, pad: int) -> int:
        """Samples each way from an edge that profiles padded by some bins ask for."""
        side = max(-self.first, self.first + self.bins) + pad
        longest = max((abs(part.lag) for part in self.neighbours), default=0.0)
        return int(np.ceil((side + max(longest, max(*BEFORE, *AFTER) * BINS + np.ptp(self.lags))) / BINS)) + 1

    def rows_of(self, profiles: Array) -> Array:
        """Rows of some sets of profiles, (k, edges, bins): (k, rows)."""
        fine = np.einsum("eb,keb->kb", self.share, profiles[..., self.near])
        return np.hstack([fine, sample_mean(profiles, axis=2)[..., self.coarse].reshape(len(profiles), -1)])

    def rows_moved(self, profiles: Array, moves: Index, pad: int) -> Array:
        """Rows of profiles shifted later by some bins.

        Parameters
        ----------
        profiles : (edges, pad + bins + pad) array
        moves : (k,) int
            At most ``pad``.

        Returns
        -------
        (k, rows) float64
        """
        mean = sample_mean(profiles, axis=1)
        near = self.near[None, :] + pad - moves[:, None]
        coarse = self.coarse[None, :] + pad - moves[:, None]
        if self.even:
            return np.hstack([profiles.mean(axis=0)[near], self._far(mean[:, coarse])])
        fine = np.einsum("eb,ekb->kb", self.share, profiles[:, near])
        return np.hstack([fine, self._far(mean[:, coarse])])

    @staticmethod
    def _far(coarse: Array) -> Array:
        return coarse.transpose(1, 0, 2).reshape(coarse.shape[1], -1)

    def profiles(self, edge: Array, pad: int = 0) -> Array:
        """Profiles about each edge, from the response to one edge (``edge_of``).

        Parameters
        ----------
        edge : (..., n) array

        Returns
        -------
        (..., edges, pad + bins + pad) float64
        """
        bins = np.arange(self.bins + 2 * pad) + (edge.shape[-1] // 2 + self.first - pad)
        total = np.repeat(edge[..., None, bins], len(self.signs), axis=-2)
        if self.neighbours:
            lags = np.array([part.lag for part in self.neighbours])
            factors = np.zeros((len(self.signs), len(lags)))
            for k, part in enumerate(self.neighbours):
                factors[part.edge, k] = part.factor
            total += factors @ (_at(edge, bins, lags) - 0.5 * np.sign(lags)[:, None])
        return total

    def beyond(self, edge: Array) -> tuple[Array, Array]:
        """Profiles that steps beyond the clear part would leave, (k, edges, bins), and their prior sigmas."""
        bins = np.arange(self.bins) + (len(edge) // 2 + self.first)
        left, right = -self.first, self.first + self.bins - 1
        lags = np.concatenate(
            [
                self.lags + left + BINS * np.array(BEFORE)[:, None],
                self.lags - self.lags[-1] - right - BINS * np.array(AFTER)[:, None],
            ]
        )
        columns = _at(edge, bins, lags.ravel()) - 0.5 * np.sign(lags.ravel())[:, None]
        columns = columns.reshape(*lags.shape, -1) * self.signs[:, None]
        return columns, np.full(len(lags), BEYOND)


@dataclass(frozen=True, slots=True, eq=False)
class Design:
    """Profiles as data, with the matrix that models them.

    Attributes
    ----------
    data, weight : (rows,) float64
        Fraction of the step about its middle; root of the inverse variance.
    matrix : (rows, 2 n) float32
        From the real and imaginary parts of the transfer function.
    constant : (rows,) float64
        What is added to that.
    nuisance : (k, rows) float64
        What else may lie in the profiles, with prior sigmas ``allowed`` (k,).
    """

    layout: Layout
    data: Array
    weight: Array
    matrix: Single
    constant: Array
    nuisance: Array
    allowed: Array


def _at(edge: Array, bins: Index, lags: Array) -> Array:
    """Values some lags later, (..., lags, bins); between bins on a straight line, the plateau where the edge ends."""
    whole = np.floor(lags)
    part = (lags - whole)[:, None]
    low = bins + whole.astype(np.int64)[:, None]
    np.maximum(low, 0, out=low)
    np.minimum(low, edge.shape[-1] - 2, out=low)
    return np.asarray(edge[..., low] * (1.0 - part) + edge[..., low + 1] * part)


def lay_out(strips: list[Strip], pile: Pile, *, neighbours: bool = True) -> Layout:
    """Choose the rows for some strips."""
    bins = pile.mean.shape[1]
    side = min(-pile.first, bins - 1 + pile.first)
    # An upright edge without jitter shows few phases: then there are no whole samples to take together.
    span = side if np.count_nonzero(pile.count) < FILLED * pile.count.size else min(NEAR, side)
    half = BINS // 2
    near = np.arange(-span, span + 1) - pile.first
    before = np.arange(-span - 1 - half - pile.first, half - 1, -BINS)[::-1]
    after = np.arange(span + 1 + half - pile.first, bins - half, BINS)
    sound = ((pile.count > 0) & ~pile.clipped)[:, near]
    share = sound / np.maximum(sound.sum(axis=0), 1)
    found, signs, lags = _neighbours(strips)
    return Layout(
        pile.first, bins, near, np.concatenate([before, after]), share, found if neighbours else (), signs, lags
    )


def design(layout: Layout, pile: Pile, code: float, residue: float, before: Design | None = None) -> Design:
    """Set up the fit of profiles.

    Parameters
    ----------
    code : float
        One code, fraction of the step.
    residue : float
        Share of the variance of rounding that is still in the profiles.
    before : Design, optional
        An earlier one of the same strips, whose matrix may do.
    """
    data, weight = _rows(layout, pile, code, residue)
    if before is None or not _alike(before.layout, layout):
        matrix, constant = _matrix(layout)
    else:
        matrix, constant = before.matrix, before.constant
    nuisance, allowed = _nuisance(layout, pile, code)
    return Design(layout, data, weight, matrix, constant, nuisance, allowed)


def _alike(one: Layout, other: Layout) -> bool:
    return (
        one.bins == other.bins
        and np.array_equal(one.share, other.share)
        and all(
            abs(a.lag - b.lag) < 0.05 and abs(a.factor - b.factor) < 1e-3
            for a, b in zip(one.neighbours, other.neighbours, strict=True)
        )
    )


def _neighbours(strips: list[Strip]) -> tuple[tuple[Neighbour, ...], Array, Array]:
    """Neighbours in each block, polarity of each edge, and its distance in bins from the first of its block."""
    found, signs, lags, done = [], [], [], 0
    for strip in strips:
        place = strip.position.mean(axis=1) * BINS
        height = strip.sign * strip.step
        for j in range(len(place)):
            found += [
                Neighbour(done + j, float(place[j] - place[i]), float(height[i] / height[j]))
                for i in range(len(place))
                if i != j
            ]
        signs.append(strip.sign)
        lags.append(place - place[0])
        done += len(place)
    return tuple(found), np.concatenate(signs), np.concatenate(lags)


def _coarse_sum(values: npt.NDArray[Any], coarse: Index) -> Any:
    """Sum over the sample about each coarse bin, the outer bins counting half."""
    half = BINS // 2
    total = (values[:, coarse - half] + values[:, coarse + half]) / 2
    for shift in range(1 - half, half):
        total = total + values[:, coarse + shift]
    return total


def _rows(layout: Layout, pile: Pile, code: float, residue: float) -> tuple[Array, Array]:
    """Data and weights of all rows."""
    near, coarse, share = layout.near, layout.coarse, layout.share
    sound = (pile.count > 0) & ~pile.clipped
    whole: Array = np.maximum(pile.count, 1.0)
    fine = (pile.mean[:, near] * share).sum(axis=0)
    worth = 1.0 / np.maximum((share**2 / whole[:, near]).sum(axis=0), 1e-9)
    rise = slope_of(fine) / (BINS * max(code, 1e-9))
    far = _coarse_sum(pile.mean, coarse) / BINS
    far_worth = BINS**2 / _coarse_sum(1.0 / whole, coarse)
    far_rise = slope_of(far) / (BINS * max(code, 1e-9))
    keep = np.concatenate([share.sum(axis=0) > 0, (_coarse_sum(sound * 1.0, coarse) > BINS - 0.1).ravel()])
    count = np.concatenate([worth, far_worth.ravel()])
    if pile.rounding is None:
        # Over a bin in which the level runs through several codes rounding errors cancel, but no further than its
        # samples are many; edges alike are rounded alike.
        rise = np.concatenate([rise, far_rise.ravel()])
        apart = np.concatenate([np.full(len(near), len(share)), np.ones(far.size)]) / count
        rounding = residue * code**2 / 12.0 * (1.0 / (1.0 + rise**2) + apart)
    else:
        fine_rounding = (pile.rounding[:, near] * share).sum(axis=0)
        rounding = np.concatenate([fine_rounding, (_coarse_sum(pile.rounding, coarse) / BINS / 2.0).ravel()])
    noise = max(pile.noise, 0.1 * code) if pile.rounding is None else 0.05 * code
    variance = noise**2 / count + rounding + FLOOR**2
    return np.concatenate([fine, far.ravel()]), np.where(keep, 1.0 / np.sqrt(variance), 0.0)


def _matrix(layout: Layout) -> tuple[Single, Array]:
    basis = step_basis()
    near, coarse, share = layout.near, layout.coarse, layout.share
    origin = basis.origin + layout.first
    edges, nodes = len(share), basis.matrix.shape[1]
    fine = basis.matrix[near[0] + origin : near[-1] + origin + 1] * share.sum(axis=0)[:, None].astype(np.float32)
    far = np.repeat(basis.coarse[coarse + origin][None], edges, axis=0)
    fine_constant, far_constant = np.zeros(len(near)), np.zeros((edges, len(coarse)))
    for part in layout.neighbours:
        plateau = 0.5 * np.sign(part.lag) * part.factor
        fine_constant -= plateau * share[part.edge]
        far_constant[part.edge] -= plateau
        for whole, amount in _split(part.lag):
            at = coarse + (origin + whole)
            if at[0] >= 0 and at[-1] < len(basis.times):
                far[part.edge] += basis.coarse[at] * np.float32(amount * part.factor)
    for lag, factor in _near_parts(layout):
        for whole, amount in _split(lag):
            start = int(near[0]) + origin + whole
            if start >= 0 and start + len(near) <= len(basis.times):
                fine += basis.matrix[start : start + len(near)] * (amount * factor).astype(np.float32)[:, None]
    constant = np.concatenate([fine_constant, far_constant.ravel()])
    return np.vstack([fine, far.reshape(-1, nodes)]), constant


def _split(lag: float) -> tuple[tuple[int, float], ...]:
    """Bins, and how much of each, for a place between them."""
    if abs(lag) > FINELY:
        return ((round(lag), 1.0),)
    whole = int(np.floor(lag))
    return (whole, 1.0 - (lag - whole)), (whole + 1, lag - whole)


def _near_parts(layout: Layout) -> list[tuple[float, Array]]:
    """Lag, and share in every fine row, of what neighbours leave there; neighbours at about one lag together."""
    groups: dict[int, list[Neighbour]] = {}
    for part in layout.neighbours:
        groups.setdefault(round(part.lag / 2.0), []).append(part)
    return [
        (
            float(np.mean([part.lag for part in group])),
            np.sum([part.factor * layout.share[part.edge] for part in group], axis=0),
        )
        for group in groups.values()
    ]


def _nuisance(layout: Layout, pile: Pile, code: float) -> tuple[Array, Array]:
    """Plateaus within one code, which are off by part of it; offset of each profile; error of the middle."""
    near, coarse, share = layout.near, layout.coarse, layout.share
    edges, flat = len(share), pile.flat.astype(np.float64)
    columns = []
    rising = layout.signs[:, None] > 0
    before = (pile.times < 0)[None, :]
    for dark in (True, False):
        # The dark level lies before a rising edge and, as the profile of a falling one is reversed, after that.
        held = flat * np.where(rising == dark, before, ~before) * np.where(rising, 1.0, -1.0)
        columns.append(np.concatenate([(held[:, near] * share).sum(axis=0), held[:, coarse].ravel()]))
    own = np.zeros((edges, len(near) + edges * len(coarse)))
    own[:, : len(near)] = share
    for edge in range(edges):
        first = len(near) + edge * len(coarse)
        own[edge, first : first + len(coarse)] = 1.0
    columns += [*own, layout.signs @ own]
    allowed = [code / np.sqrt(12.0) + 1e-9] * 2 + [OFFSET] * edges + [MIDDLE]
    return np.stack(columns), np.array(allowed)
