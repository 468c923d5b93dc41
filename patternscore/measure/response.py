"""From piled-up edge profiles to the transfer function, with its covariance."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patternscore.measure.design import Design
from patternscore.measure.family import Family
from patternscore.measure.stepbasis import BINS, step_basis

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

TAP_DECAYS = (2.0, 6.0, 20.0)  # samples over which echoes may die away
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
    model : (edges, bins) float64
        Modelled profiles.
    chi2 : float
        Misfit of the profiles per degree of freedom.
    """

    nu: Array
    gain: Complex
    slopes: Complex
    covariance: Array
    theta: Array
    step: float
    model: Array
    chi2: float
    hyper: tuple[float, ...] = ()


def edge_of(gain: Complex) -> Array:
    """Response to a step at every bin of the basis, less one half."""
    packed = np.concatenate([gain.real, gain.imag]).astype(np.float32)
    return np.asarray(step_basis().matrix @ packed, dtype=np.float64)


def fit(
    design: Design,
    family: Family,
    taps: npt.NDArray[np.int64],
    *,
    levels: tuple[float, ...] = TAP_LEVELS,
    decays: tuple[float, ...] = TAP_DECAYS,
    wide: bool = True,
    steps: int = 12,
) -> Response:
    """Fit a family, then what the family leaves.

    Parameters
    ----------
    taps : (k,) int
        Echoes that may correct the family, bins later than the edge.
    levels, decays : tuple of float
        Prior sigmas of the echoes to choose from, and samples over which they die away.
    wide : bool
        Whether echoes of a sharp edge are tried beside those of the family's own.
    steps : int
        Most steps that the family is given.
    """
    columns, allowed = design.beyond(edge_of(family.shape(family.start)[0]))
    still = np.zeros(1, dtype=np.int64)
    outer = np.stack([design.rows_of(column, still, 0)[0] for column in columns])
    side = np.vstack([design.nuisance, outer])
    prior = np.concatenate([family.prior, [STEP_PRIOR], design.allowed, allowed])
    theta, step = _family(design, family, side, prior, steps)
    bases = (None, _wide(step_basis().nu)) if wide else (None,)
    found = _with_echoes(design, family, theta, step, side, prior, taps, bases, levels, decays)
    return _finished(design, found, columns)


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
        while True:
            damped = normal.copy()
            damped.flat[:: len(prior) + 1] *= 1.0 + damping
            move = np.linalg.solve(damped, right) * prior
            trial = np.clip(theta + move[:count], family.lowest, family.highest)
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
        if gained < max(0.02, 1e-4 * cost):
            break
    return theta, float(extra[0])


@dataclass(frozen=True, slots=True, eq=False)
class _Corrected:
    """A member of a family with its correction, and the values of the nuisance."""

    theta: Array
    gain: Complex
    slopes: Complex
    covariance: Array
    step: float
    drift: Array
    chi2: float
    hyper: tuple[float, ...]


def _with_echoes(
    design: Design,
    family: Family,
    theta: Array,
    step: float,
    side: Array,
    prior: Array,
    taps: npt.NDArray[np.int64],
    bases: tuple[Complex | None, ...],
    levels: tuple[float, ...],
    decays: tuple[float, ...],
) -> _Corrected:
    """Correct a member of the family by echoes, as strong as the profile calls for.

    Any response is the family's plus a transversal filter on an edge of known shape: the family's own, which
    lets in no more noise than the response does, or a wide one, which can mend what the family cuts off. The
    taps are unknown with a prior that dies away from the edge; how strong, how long and of which edge is
    taken where the profile is most probable (marginal likelihood), so that clean profiles are followed
    exactly and noisy ones kept to the family.
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
    best = None
    for base in bases:
        pad = int(np.abs(taps).max())
        spread = edge_of(gain if base is None else base)
        moved = design.rows_of(design.profiles(spread, pad), np.append(taps, 0), pad)
        echoes = (moved[:-1] - moved[-1]) * design.weight
        columns = np.vstack([fixed[:families], echoes, fixed[families:]])
        normal, right = columns @ columns.T, columns @ rest
        for decay in decays:
            envelope = np.exp(-np.abs(taps / BINS) / decay)
            for level in levels:
                allowed[families:count] = level * envelope + 1e-9
                found = _evidence(normal, right, allowed, pull)
                if best is None or found[0] > best[0][0]:
                    best = found, allowed.copy(), base, columns, (level, decay, float(base is not None))
    assert best is not None
    (_, solved, factor), allowed, base, columns, hyper = best
    later = np.exp(-2j * np.pi * np.outer(taps / BINS, step_basis().nu)) - 1.0
    slopes = np.vstack([slopes, (gain if base is None else base) * later])
    inverse = np.linalg.inv(factor) * allowed
    step = step + float(solved[count])
    after = rest - solved @ columns
    used = max(np.count_nonzero(design.weight) - families - 2, 1)
    return _Corrected(
        theta=theta,
        gain=gain + solved[:count] @ slopes / step,
        slopes=slopes,
        covariance=(inverse.T @ inverse)[:count, :count] / step**2,
        step=step,
        drift=solved[count + 1 :],
        chi2=float(after @ after) / used,
        hyper=hyper,
    )


def _finished(design: Design, found: _Corrected, outer: Array) -> Response:
    """Add the modelled profiles."""
    own = len(design.allowed)
    drift = found.drift
    model = found.step * design.profiles(edge_of(found.gain)) + np.tensordot(drift[own:], outer, 1)
    model += (drift[2 : own - 1] + drift[own - 1] * design.signs)[:, None]
    return Response(
        step_basis().nu, found.gain, found.slopes, found.covariance, found.theta, found.step, model, found.chi2,
        found.hyper,
    )  # fmt: skip


def _wide(nu: Array) -> Complex:
    return 0.5 + 0.5 * np.cos(np.pi * np.clip((nu - 0.35) / 0.3, 0.0, 1.0)) + 0j


def _evidence(normal: Array, right: Array, allowed: Array, pull: Array) -> tuple[float, Array, Array]:
    """Log of the marginal likelihood up to a constant, the solution, and the Cholesky factor.

    Everything is in units of what the prior allows (``allowed``, its sigmas), which keeps the matrix well posed.
    """
    whole = normal * np.outer(allowed, allowed)
    whole.flat[:: len(allowed) + 1] += 1.0
    factor = np.linalg.cholesky(whole)
    half = np.linalg.solve(factor, right * allowed - pull / allowed)
    solved = np.linalg.solve(factor.T, half) * allowed
    return float(half @ half / 2 - np.log(np.diag(factor)).sum()), solved, factor
