"""From piled-up edge profiles to the transfer function, with its covariance."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
import numpy.typing as npt

from patternscore.measure.design import Design, Layout
from patternscore.measure.family import Family
from patternscore.measure.stepbasis import BINS, edge_of, step_basis

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

TAP_DECAYS = (2.0, 20.0)  # samples over which echoes may die away
TAP_LEVELS = tuple(10.0**power for power in np.arange(-4.0, -0.4, 0.5))
STEP_PRIOR = 0.1  # how far the step may be from the difference of the plateaus, fraction
ROUGH = 0.0015  # fraction of the step within which the family alone need not follow a profile


@dataclass(frozen=True, slots=True, eq=False)
class Response:
    """A transfer function with all that it may yet be wrong by.

    Attributes
    ----------
    nu : (n,) float64
        Cycles per sample.
    gain : (n,) complex128
        Transfer function, 1 at zero frequency.
    slopes : (p, n) complex128
        Its slopes in the parameters.
    covariance : (p, p) float64
        Of the parameters.
    theta : (q,) float64
        Parameters of the member of the family that it was built on.
    step : float
        Height of the step in units of the profile.
    chi2 : float
        Misfit of the profiles per degree of freedom.
    drift, outer : (k,) and (m, edges, bins) float64
        Values of what else was found in the profiles; its last m belong to steps beyond the clear part.
    """

    nu: Array
    gain: Complex
    slopes: Complex
    covariance: Array
    theta: Array
    step: float
    chi2: float
    drift: Array
    outer: Array


def fit(
    design: Design,
    family: Family,
    taps: npt.NDArray[np.int64],
    *,
    levels: tuple[float, ...] = TAP_LEVELS,
    decays: tuple[float, ...] = TAP_DECAYS,
    steps: int = 12,
) -> Response:
    """Fit a family, then what the family leaves.

    Parameters
    ----------
    taps : (k,) int
        Echoes that may correct the family, bins later than the edge.
    levels, decays : tuple of float
        Prior sigmas of the echoes to choose from, and samples over which they die away.
    steps : int
        Most steps that the family is given.
    """
    layout = design.layout
    columns, allowed = layout.beyond(edge_of(family.shape(family.start)[0], layout.reach(0)))
    side = np.vstack([design.nuisance, layout.rows_of(columns)])
    prior = np.concatenate([family.prior, [STEP_PRIOR], design.allowed, allowed])
    theta, step = _family(design, family, side, prior, steps)
    return _with_echoes(design, family, theta, step, side, prior, taps, levels, decays, columns)


def _project(design: Design, spectra: Complex) -> Array:
    packed = np.hstack([spectra.real, spectra.imag]).astype(np.float32)
    return (packed @ design.matrix.T).astype(np.float64)


def _family(design: Design, family: Family, side: Array, prior: Array, steps: int) -> tuple[Array, float]:
    """Levenberg-Marquardt on the parameters and the step; a weak pull to the start keeps it well posed."""
    theta, extra, damping = family.start.copy(), np.zeros(1 + len(side)), 1e-3
    extra[0] = 1.0
    count = len(theta)
    weight = 1.0 / np.hypot(1.0 / np.maximum(design.weight, 1e-9), ROUGH)
    side, data = side * weight, design.data * weight

    def look(theta: Array, extra: Array) -> tuple[Array, Array, Array, float]:
        gain, slopes = family.shape(theta)
        parts = _project(design, np.vstack([gain[None], slopes]))
        parts[0] += design.constant
        parts *= weight
        rest = data - extra[0] * parts[0] - extra[1:] @ side
        columns = np.vstack([extra[0] * parts[1:], parts[:1], side])
        pull = np.concatenate([theta - family.start, [extra[0] - 1.0], extra[1:]]) / prior
        return columns, rest, pull, float(rest @ rest + pull @ pull)

    columns, rest, pull, cost = look(theta, extra)
    for _ in range(steps):
        scaled = columns * prior[:, None]
        normal = scaled @ scaled.T
        normal.flat[:: len(prior) + 1] += 1.0
        right = scaled @ rest - pull
        # A parameter at its limit that would go beyond it stays there, and the others reckon with that.
        stuck = np.flatnonzero(
            ((theta <= family.lowest) & (right[:count] < 0)) | ((theta >= family.highest) & (right[:count] > 0))
        )
        normal[stuck], normal[:, stuck], right[stuck] = 0.0, 0.0, 0.0
        normal[stuck, stuck] = 1.0
        while True:
            damped = normal.copy()
            damped.flat[:: len(prior) + 1] *= 1.0 + damping
            move = np.linalg.solve(damped, right) * prior
            trial = np.minimum(np.maximum(theta + move[:count], family.lowest), family.highest)
            new = look(trial, extra + move[count:])
            if new[3] < cost or damping > 1e4:
                break
            damping = max(damping * 8.0, 1e-4)
        if new[3] >= cost:
            break
        gained = cost - new[3]
        theta, extra = trial, extra + move[count:]
        columns, rest, pull, cost = new
        damping = max(damping * 0.1, 1e-9)
        if gained < max(0.3, 1e-3 * cost):
            break
    return theta, float(extra[0])


def _with_echoes(
    design: Design,
    family: Family,
    theta: Array,
    step: float,
    side: Array,
    prior: Array,
    taps: npt.NDArray[np.int64],
    levels: tuple[float, ...],
    decays: tuple[float, ...],
    outer: Array,
) -> Response:
    """Correct a member of the family by echoes, as strong as the profile calls for.

    Any response is the family's plus a transversal filter on a sharp edge. The taps are unknown with a prior
    that dies away from the edge; how strong and how long is taken where the profile is most probable (marginal
    likelihood), so that clean profiles are followed exactly and noisy ones kept to the family.
    """
    gain, slopes = family.shape(theta)
    parts = _project(design, np.vstack([gain[None], slopes]))
    parts[0] += design.constant
    fixed = np.vstack([parts[1:], parts[:1], side]) * design.weight
    rest = (design.data - step * parts[0]) * design.weight
    families, count = len(theta), len(theta) + len(taps)
    pull = np.zeros(len(prior) + len(taps))
    pull[:families] = theta - family.start
    pull[count] = step - 1.0
    allowed = np.concatenate([prior[:families], np.zeros(len(taps)), prior[families:]])
    layout, pad = design.layout, int(np.abs(taps).max())
    wide, edge = _wide()
    moved = layout.rows_moved(layout.profiles(edge, pad), np.append(taps, 0), pad)
    echoes = (moved[:-1] - moved[-1]) * design.weight
    columns = np.vstack([fixed[:families], echoes, fixed[families:]])
    normal, right = columns @ columns.T, columns @ rest
    level, decay = _most_probable(normal, right, allowed, pull, slice(families, count), taps, levels, decays)
    allowed[families:count] = level * np.exp(-np.abs(taps / BINS) / decay)
    solved, factor = _solve(normal, right, allowed, pull)
    later = np.exp(-2j * np.pi * np.outer(taps / BINS, step_basis().nu)) - 1.0
    slopes = np.vstack([slopes, wide * later])
    inverse = np.linalg.inv(factor) * allowed
    step = step + float(solved[count])
    after = rest - solved @ columns
    used = max(int(np.count_nonzero(design.weight)) - families - 2, 1)
    return Response(
        nu=step_basis().nu,
        gain=gain + solved[:count] @ slopes / step,
        slopes=slopes,
        covariance=(inverse.T @ inverse)[:count, :count] / step**2,
        theta=theta,
        step=step,
        chi2=float(after @ after) / used,
        drift=solved[count + 1 :],
        outer=outer,
    )


def modelled(response: Response, layout: Layout) -> Array:
    """Profiles that a fitted response makes, with the offsets and what lies beyond: (edges, bins)."""
    edge = edge_of(response.gain, layout.reach(0))
    model = response.step * layout.profiles(edge)
    own = len(response.drift) - len(response.outer)
    model += np.tensordot(response.drift[own:], response.outer, 1)
    model += (response.drift[2 : own - 1] + response.drift[own - 1] * layout.signs)[:, None]
    return np.asarray(model)


@cache
def _wide() -> tuple[Complex, Array]:
    """Sharp edge for the echoes: its response, flat to 0.35 cycles per sample and gone at 0.65, and profile.

    That is what echoes 3/4 of a sample apart can hold.
    """
    fall = np.minimum(np.maximum((step_basis().nu - 0.35) / 0.3, 0.0), 1.0)
    gain: Complex = np.asarray(0.5 + 0.5 * np.cos(np.pi * fall), dtype=np.complex128)
    return gain, edge_of(gain)


def _most_probable(
    normal: Array,
    right: Array,
    allowed: Array,
    pull: Array,
    own: slice,
    taps: npt.NDArray[np.int64],
    levels: tuple[float, ...],
    decays: tuple[float, ...],
) -> tuple[float, float]:
    """Level and decay of the echoes where the marginal likelihood is largest.

    All but the echoes is eliminated first; then the eigenvalues for one decay serve every level.
    """
    others = np.ones(len(allowed), dtype=bool)
    others[own] = False
    scale = allowed[others]
    inner = normal[np.ix_(others, others)] * np.outer(scale, scale)
    inner.flat[:: len(scale) + 1] += 1.0
    cross = normal[others, own] * scale[:, None]
    target = right[others] * scale - pull[others] / scale
    solved = np.linalg.solve(inner, np.column_stack([cross, target]))
    rest = normal[own, own] - cross.T @ solved[:, :-1]
    aim = right[own] - cross.T @ solved[:, -1]
    envelope = np.exp(-np.abs(taps / BINS)[None, :] / np.array(decays)[:, None])
    values, vectors = np.linalg.eigh(rest * envelope[:, :, None] * envelope[:, None, :])
    seen = np.einsum("dij,di->dj", vectors, envelope * aim) ** 2
    size = np.array(levels)[:, None, None] ** 2
    grown = 1.0 + size * np.maximum(values, 0.0)
    evidence = (size * seen / grown - np.log(grown)).sum(axis=2) / 2.0
    at = np.unravel_index(int(np.argmax(evidence)), evidence.shape)
    return float(levels[at[0]]), float(decays[at[1]])


def _solve(normal: Array, right: Array, allowed: Array, pull: Array) -> tuple[Array, Array]:
    """Most probable values, and the Cholesky factor of their precision in units of ``allowed``.

    Units of what the prior allows (its sigmas) keep the matrix well posed.
    """
    whole = normal * np.outer(allowed, allowed)
    whole.flat[:: len(allowed) + 1] += 1.0
    factor: Array = np.asarray(np.linalg.cholesky(whole), dtype=np.float64)
    solved = np.linalg.solve(whole, right * allowed - pull / allowed) * allowed
    return solved, factor
