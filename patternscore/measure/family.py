"""A family of transfer functions: Gaussian spot, aperture, two poles and a zero, delay, and a band limit."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache, partial

import numpy as np
import numpy.typing as npt

from patternscore.measure.stepbasis import BINS, step_basis

Array = npt.NDArray[np.float64]
Complex = npt.NDArray[np.complex128]

# theta: 0 Gaussian, 1 and 2 pole pair, 3 zero, 4 delay (samples), 5 band limit, 6 its width (cycles per sample),
# 7 square of the aperture
PRIOR = np.array([2.0, 2.0, 2.0, 2.0, 2.0, 0.1, 0.06, 0.5])  # how far from the start each may well go
LOWEST = np.array([0.0, 0.0, 0.0, -4.0, -20.0, 0.04, 0.003, 0.0])
HIGHEST = np.array([20.0, 20.0, 20.0, 20.0, 20.0, 2.0, 0.5, 20.0])
GRABBER = (0.455, 0.1)  # a usual anti-alias filter: its middle and width, cycles per sample
UNUSUAL = 1.5  # how many times better a member must fit without the band limit that a grabber usually has
DAMPED = 0.85  # damping ratio from which a pole pair is not seen to ring
OPEN = (2.0, 0.1)  # none to speak of


@dataclass(frozen=True, slots=True, eq=False)
class Start:
    """A member of the family to start from: parameters and the frequency that scales them."""

    theta: Array
    scale: float


@dataclass(frozen=True, slots=True, eq=False)
class Family:
    """Transfer functions of some parameters.

    Attributes
    ----------
    shape : callable
        Parameters -> transfer function (n,) and its slopes in them (p, n).
    start, prior, lowest, highest : (p,) float64
        Where to begin; how far from there each may well go (sigma); limits.
    """

    shape: Callable[[Array], tuple[Complex, Complex]]
    start: Array
    prior: Array
    lowest: Array
    highest: Array


def around(start: Start, free: tuple[int, ...] = tuple(range(8))) -> Family:
    """Give the family about a member, some of its parameters free."""
    moving = np.array(free)
    nu = step_basis().nu
    if free == (0, 4) and not start.theta[[1, 2, 3, 7]].any() and start.theta[5] >= OPEN[0]:
        return Family(partial(_spot, start.scale), start.theta[moving], PRIOR[moving], LOWEST[moving], HIGHEST[moving])

    def shape(part: Array) -> tuple[Complex, Complex]:
        theta = start.theta.copy()
        theta[moving] = part
        gain, slopes = transfer(theta, start.scale, nu)
        return gain, slopes if len(moving) == len(slopes) else slopes[moving]

    return Family(shape, start.theta[moving], PRIOR[moving], LOWEST[moving], HIGHEST[moving])


def _spot(scale: float, part: Array) -> tuple[Complex, Complex]:
    """Gaussian and delay alone, which is all that is free across the lines; as ``transfer`` without a limit."""
    nu = step_basis().nu
    square, turn = (nu / scale) ** 2, -2j * np.pi * nu
    gain = np.exp(turn * float(part[1]) - float(part[0]) * square)
    return gain, np.stack([-square * gain, turn * gain])


def pole_frequency(theta: Array, scale: float) -> tuple[float, Array] | None:
    """Frequency at which the pole pair of a member swings, cycles per sample, and its slopes in ``theta``.

    None where the poles are real, or so well damped that nothing is seen to swing.
    """
    a1, a2 = float(theta[1]), float(theta[2])
    inside = 4.0 * a2 - a1**2
    if a2 <= 0.0 or inside <= 0.0 or a1 > 2.0 * DAMPED * np.sqrt(a2):
        return None
    root = np.sqrt(inside)
    slopes = np.zeros(len(theta))
    slopes[1], slopes[2] = -a1 / (2.0 * a2 * root), 1.0 / (a2 * root) - root / (2.0 * a2**2)
    return scale * root / (2.0 * a2), scale * slopes


def spotted(gain: Complex, spots: Array) -> Complex:
    """Known transfer function with spots of other sizes: (spots, n); see ``relative``."""
    square = np.minimum((step_basis().nu / 0.25) ** 2, 4.0)
    return np.asarray(gain * np.exp(-spots[:, None] * square))


def relative(gain: Complex) -> Family:
    """Give what a known transfer function becomes by a spot of other size (Gaussian) and a delay."""
    nu = step_basis().nu
    square = np.minimum((nu / 0.25) ** 2, 4.0)

    def shape(part: Array) -> tuple[Complex, Complex]:
        whole = gain * np.exp(-part[0] * square - 2j * np.pi * nu * part[1])
        return whole, np.stack([-square * whole, -2j * np.pi * nu * whole])

    return Family(shape, np.zeros(2), np.array([0.5, 1.0]), np.array([-0.5, -5.0]), np.array([20.0, 5.0]))


def transfer(theta: Array, scale: float, nu: Array) -> tuple[Complex, Complex]:
    """Transfer function and its slopes in the parameters.

    Parameters
    ----------
    theta : (8,) array
        c, a1, a2, b, t0, middle and width of the band limit, q.
    scale : float
        Frequency that g = nu / scale is in units of, cycles per sample.
    nu : (n,) array
        Frequencies, cycles per sample.

    Returns
    -------
    (n,) and (8, n) complex

    Notes
    -----
    H = exp(-c g^2) sinc(sqrt(q) g) (1 + j b g) / (1 + j a1 g - a2 g^2) exp(-2 pi j nu t0), times a half cosine
    from 1 to 0. The coefficients of the polynomials, not the poles, are the parameters: a pole that is not
    needed goes to infinity where its coefficient goes to nought, and nothing becomes singular on the way.
    """
    c, a1, a2, b, t0, middle, width, square = (float(value) for value in theta)
    g = nu / scale
    turn = -2j * np.pi * nu
    upper, lower = 1.0 + (1j * b) * g, 1.0 + (1j * a1) * g - a2 * g**2
    angle = np.pi * np.minimum(np.maximum((nu - middle) / width + 0.5, 0.0), 1.0)
    limit = 0.5 + 0.5 * np.cos(angle)
    fall = (-0.5 * np.pi / width) * np.sin(angle)
    through, opening = _aperture(square, g)
    bare = np.exp(turn * t0 - c * g**2) / lower
    shaped = bare * upper * through
    whole = shaped * limit
    slopes = np.empty((8, len(nu)), dtype=np.complex128)
    g_square = g**2
    slopes[0] = -g_square * whole
    slopes[1] = whole / lower
    slopes[2] = slopes[1] * g_square
    slopes[1] *= -1j * g
    slopes[3] = bare * (through * limit) * (1j * g)
    slopes[4] = turn * whole
    slopes[5] = -fall * shaped
    slopes[6] = slopes[5] * ((nu - middle) / width)
    slopes[7] = bare * upper * (opening * limit)
    return whole, slopes


def _aperture(square: float, g: Array) -> tuple[Array, Array]:
    """Response of an aperture of a width whose square is given, and its slope in that."""
    x = np.pi * np.sqrt(max(square, 1e-6)) * g
    through = np.sinc(x / np.pi)
    return through, (np.cos(x) - through) / (2.0 * max(square, 1e-6))


@dataclass(frozen=True, slots=True, eq=False)
class Library:
    """Members of the family spread over all that a chain may be, with their step responses.

    ``edges`` and ``slopes`` are (members, bins) on the window, less one half; ``unlimited`` tells which members have
    no band limit.
    """

    starts: tuple[Start, ...]
    edges: Array
    slopes: Array
    gram: Array
    unlimited: npt.NDArray[np.bool_]


@lru_cache(maxsize=16)
def library(left: int, right: int, *, across: bool = False) -> Library:
    """Library on a window of whole samples before and after the edge."""
    basis = step_basis()
    starts = tuple(_across() if across else _along())
    spectra = np.stack([transfer(start.theta, start.scale, basis.nu)[0] for start in starts])
    rows = slice(basis.origin - left * BINS, basis.origin + right * BINS + 1)
    edges = np.hstack([spectra.real, spectra.imag]) @ basis.matrix[rows].T
    slopes = np.gradient(edges, 1.0 / BINS, axis=1)
    unlimited: npt.NDArray[np.bool_] = np.array([start.theta[5] >= OPEN[0] and not across for start in starts])
    return Library(starts, edges, slopes, _gram(edges, slopes), unlimited)


def _gram(edges: Array, slopes: Array) -> Array:
    columns = np.stack([np.ones_like(edges), edges, slopes], axis=1)
    return columns @ columns.transpose(0, 2, 1)


def nearest(window: Array, left: int, right: int, *, used: npt.NDArray[np.bool_], across: bool = False) -> Start:
    """Member of the library that fits a profile best, offset, step and delay free.

    Parameters
    ----------
    window : (bins,) array
        Profile on the window, fraction of the step about its middle.
    used : (bins,) bool
        Bins to go by.

    Returns
    -------
    Start
        The member, its delay put right.
    """
    shelf = library(left, right, across=across)
    gram = shelf.gram if used.all() else _gram(shelf.edges[:, used], shelf.slopes[:, used])
    seen = np.where(used, window, 0.0)
    inner = np.stack([np.full(len(shelf.starts), seen.sum()), shelf.edges @ seen, shelf.slopes @ seen], axis=1)
    found = np.linalg.solve(gram, inner[..., None])[..., 0]
    misfit: Array = float(seen @ seen) - np.asarray(np.einsum("ka,ka->k", found, inner))
    misfit = np.where(shelf.unlimited, UNUSUAL * misfit, misfit)
    best = int(np.argmin(misfit))
    _, step, shift = found[best]
    start = shelf.starts[best]
    theta = start.theta.copy()
    theta[4] -= np.clip(shift / step, -1.0, 1.0) if step > 0 else 0.0
    return Start(theta, start.scale)


def _member(
    scale: float, c: float, a1: float, a2: float, b: float, limit: tuple[float, float], square: float = 0.0
) -> Start:
    # Its delay puts the middle of the area under its line spread at time 0, as the edges are set at first.
    return Start(np.array([c, a1, a2, b, -(a1 - b) / (2 * np.pi * scale), *limit, square]), scale)


def _along() -> list[Start]:
    shapes = [(0.69, 0.0, 0.0, 0.0), (0.1, 1.0, 0.0, 0.0), (0.1, 2.0, 1.0, 0.0), (0.1, 2.0, 1.0, 1.2)]
    shapes += [(0.35, 0.8, 0.25, 0.0), (0.15, 1.3, 0.6, 0.0)]
    shapes += [(0.1, 2 * damping, 1.0, 0.0) for damping in (0.2, 0.3, 0.45, 0.65)]
    shapes += [(0.05, 2 * damping, 1.0, lead) for damping in (0.4, 0.6) for lead in (0.8, 1.6)]
    found = [
        _member(scale, *shape, limit)
        for scale in np.geomspace(0.05, 0.6, 15)
        for shape in shapes
        for limit in (GRABBER, OPEN)
    ]
    found += [
        _member(scale, 0.05, 0.0, 0.0, 0.0, limit, 0.36)
        for scale in np.geomspace(0.05, 0.6, 25)
        for limit in (GRABBER, OPEN)
    ]
    found += [_member(0.5, 0.0, 0.0, 0.0, 0.0, (middle, 0.02)) for middle in np.geomspace(0.06, 0.5, 50)]
    found += [_member(0.5, 0.0, 0.0, 0.0, 0.0, (middle, 0.3 * middle)) for middle in np.geomspace(0.06, 0.5, 18)]
    return found


def _across() -> list[Start]:
    return [_member(scale, 0.69, 0.0, 0.0, 0.0, OPEN) for scale in np.geomspace(0.04, 1.2, 30)]
