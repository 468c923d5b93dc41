"""The profiles of parallel edges as a linear function of the transfer function."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.measure.profile import Pile, Strip
from patternscore.measure.stepbasis import BINS, sample_mean, step_basis

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]
Single = npt.NDArray[np.float32]

NEAR = 6 * BINS  # bins each side of an edge that are taken one by one; further off whole samples will do
OFFSET = 0.007  # prior sigma of a profile's offset, fraction of the step: tilt, hum, an error of the levels
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
class Design:
    """Profiles as data, with the matrix that models them.

    Rows are, first, fine bins about the edge, a mean over all edges; then bins of a sample further off, edge by
    edge, for there neighbours leave something else in each.

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

    first: int
    bins: int
    near: npt.NDArray[np.int64]
    coarse: npt.NDArray[np.int64]
    share: Array
    neighbours: tuple[Neighbour, ...]
    data: Array
    weight: Array
    matrix: Single
    constant: Array
    nuisance: Array
    allowed: Array
    signs: Array
    lags: Array

    @property
    def edges(self) -> int:
        """Number of edges."""
        return len(self.share)

    def rows_of(self, profiles: Array, moves: npt.NDArray[np.int64], pad: int) -> Array:
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
        fine = np.einsum("eb,ekb->kb", self.share, profiles[:, near])
        return np.hstack([fine, mean[:, coarse].transpose(1, 0, 2).reshape(len(moves), -1)])

    def profiles(self, edge: Array, pad: int = 0) -> Array:
        """Profiles about each edge, from the response to one edge on all bins of the basis."""
        origin = step_basis().origin + self.first - pad
        reach = np.arange(self.bins + 2 * pad) + origin
        total = np.repeat(edge[reach][None], self.edges, axis=0)
        for part in self.neighbours:
            total[part.edge] += part.factor * (_at(edge, reach, part.lag) - 0.5 * np.sign(part.lag))
        return total

    def beyond(self, edge: Array) -> tuple[Array, Array]:
        """Profiles that steps beyond the clear part would leave, (k, edges, bins), and their prior sigmas."""
        reach = np.arange(self.bins) + step_basis().origin + self.first
        left, right = -self.first, self.first + self.bins - 1
        places = [self.lags + left + d * BINS for d in BEFORE]
        places += [self.lags - self.lags[-1] - right - d * BINS for d in AFTER]
        columns = np.zeros((len(places), self.edges, self.bins))
        for k, lags in enumerate(places):
            for e, lag in enumerate(lags):
                columns[k, e] = self.signs[e] * (_at(edge, reach, lag) - 0.5 * np.sign(lag))
        return columns, np.full(len(places), BEYOND)


def _at(edge: Array, bins: npt.NDArray[np.int64], lag: float) -> Array:
    """Values some bins later, between bins on a straight line; the plateau where the basis ends."""
    whole = int(np.floor(lag))
    part = lag - whole
    low = np.clip(bins + whole, 0, len(edge) - 2)
    return np.asarray((1.0 - part) * edge[low] + part * edge[low + 1])


def design(strips: list[Strip], pile: Pile, code: float, residue: float) -> Design:
    """Set up the fit of profiles.

    Parameters
    ----------
    code : float
        One code, fraction of the step.
    residue : float
        Share of the variance of rounding that is still in the profiles.
    """
    bins = pile.mean.shape[1]
    side = min(-pile.first, bins - 1 + pile.first)
    span = min(NEAR, side)
    near = np.arange(-span, span + 1) - pile.first
    half = BINS // 2
    low, high = -span - 1 - half, span + 1 + half
    coarse = np.concatenate(
        [np.arange(low - pile.first, half - 1, -BINS)[::-1], np.arange(high - pile.first, bins - half, BINS)]
    )
    sound = (pile.count > 0) & ~pile.clipped
    share = sound[:, near] / np.maximum(sound[:, near].sum(axis=0), 1)
    neighbours, signs, lags = _neighbours(strips)
    data, weight = _rows(pile, sound, near, coarse, share, code, residue)
    matrix, constant = _matrix(pile.first, near, coarse, share, neighbours)
    nuisance, allowed = _nuisance(pile, near, coarse, share, signs, code)
    return Design(
        pile.first, bins, near, coarse, share, neighbours, data, weight, matrix, constant, nuisance, allowed,
        signs, lags,
    )  # fmt: skip


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


def _coarse_weights(values: Array, coarse: npt.NDArray[np.int64]) -> Any:
    """Sum over the sample about each coarse bin, the outer bins counting half."""
    half = BINS // 2
    total = (values[:, coarse - half] + values[:, coarse + half]) / 2
    for shift in range(1 - half, half):
        total = total + values[:, coarse + shift]
    return total


def _rows(
    pile: Pile, sound: Any, near: Any, coarse: Any, share: Array, code: float, residue: float
) -> tuple[Array, Array]:
    """Data and weights of all rows."""
    whole = np.maximum(pile.count, 1.0)
    fine = (pile.mean[:, near] * share).sum(axis=0)
    worth = 1.0 / np.maximum((share**2 / whole[:, near]).sum(axis=0), 1e-9)
    rise = np.abs(np.gradient(fine)) / max(code, 1e-9)
    far = _coarse_weights(pile.mean, coarse) / BINS
    far_worth = BINS**2 / _coarse_weights(1.0 / whole, coarse)
    far_rise = np.abs(np.gradient(far, axis=1)) / max(code, 1e-9)
    keep = np.concatenate([share.sum(axis=0) > 0, (_coarse_weights(sound * 1.0, coarse) > BINS - 0.1).ravel()])
    data = np.concatenate([fine, far.ravel()])
    count = np.concatenate([worth, far_worth.ravel()])
    # Over a bin in which the level runs through several codes, rounding errors cancel.
    rounding = residue * code**2 / 12.0 / (1.0 + np.concatenate([rise, far_rise.ravel()]) ** 2)
    variance = max(pile.noise, 0.1 * code) ** 2 / count + rounding + 1e-10
    return data, np.where(keep, 1.0 / np.sqrt(variance), 0.0)


def _matrix(
    first: int, near: Any, coarse: Any, share: Array, neighbours: tuple[Neighbour, ...]
) -> tuple[Single, Array]:
    basis = step_basis()
    origin = basis.origin + first
    edges, nodes = len(share), basis.matrix.shape[1]
    fine = basis.matrix[near + origin] * share.sum(axis=0)[:, None].astype(np.float32)
    far = np.repeat(basis.coarse[coarse + origin][None], edges, axis=0)
    fine_constant, far_constant = np.zeros(len(near)), np.zeros((edges, len(coarse)))
    last = len(basis.times) - 2
    for part in neighbours:
        whole = int(np.floor(part.lag))
        later = part.lag - whole
        plateau = 0.5 * np.sign(part.lag) * part.factor
        fine_constant -= plateau * share[part.edge]
        far_constant[part.edge] -= plateau
        for step, amount in ((whole, 1.0 - later), (whole + 1, later)):
            scale = np.float32(amount * part.factor)
            at = np.clip(near + (origin + step), 0, last)
            fine += basis.matrix[at] * (scale * share[part.edge].astype(np.float32))[:, None]
            far[part.edge] += basis.coarse[np.clip(coarse + (origin + step), 0, last)] * scale
    constant = np.concatenate([fine_constant, far_constant.ravel()])
    return np.vstack([fine, far.reshape(-1, nodes)]), constant


def _nuisance(pile: Pile, near: Any, coarse: Any, share: Array, signs: Array, code: float) -> tuple[Array, Array]:
    """Offset of each profile, and plateaus within one code, which are off by part of it."""
    edges = len(share)
    times = pile.times
    flat = pile.flat.astype(np.float64)
    columns = []
    for side in (times < 0, times > 0):
        held = flat * side
        columns.append(np.concatenate([(held[:, near] * share).sum(axis=0), held[:, coarse].ravel()]))
    for edge in range(edges):
        far = np.zeros((edges, len(coarse)))
        far[edge] = 1.0
        columns.append(np.concatenate([share[edge], far.ravel()]))
    far = np.repeat(signs[:, None], len(coarse), axis=1)
    columns.append(np.concatenate([signs @ share, far.ravel()]))
    allowed = [code / np.sqrt(12.0) + 1e-9] * 2 + [OFFSET] * edges + [MIDDLE]
    return np.stack(columns), np.array(allowed)
