"""Step response of any transfer function, as a matrix that is made once.

All times are in samples (lines across the picture) and frequencies in cycles per sample, so that one matrix
serves every sample clock and both directions.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import numpy.typing as npt

Array = npt.NDArray[np.float64]

BINS = 4  # bins to the sample: fine enough for edges that reach beyond half the sample clock
REACH = 190  # samples each way that the matrix covers: an edge and what its neighbours leave there


@dataclass(frozen=True, slots=True, eq=False)
class StepBasis:
    """Matrix from a transfer function to its step response.

    Attributes
    ----------
    nu : (n,) float64
        Frequencies at which the transfer function is given; between them it runs straight.
    times : (m,) float64
        Samples, ``BINS`` to the sample, 0 in the middle.
    matrix : (m, 2 n) float32
        Step response, less one half, from the real parts followed by the imaginary parts.
    coarse : (m, 2 n) float32
        The same as a mean over the sample around each time.
    """

    nu: Array
    times: Array
    matrix: npt.NDArray[np.float32]
    coarse: npt.NDArray[np.float32]

    @property
    def origin(self) -> int:
        """Row of time 0."""
        return len(self.times) // 2


def edge_of(spectra: npt.NDArray[np.complex128], reach: int = REACH) -> Array:
    """Response to a step, less one half.

    Parameters
    ----------
    spectra : (n,) or (k, n) complex
        Transfer functions at the frequencies of the basis.
    reach : int
        Samples each way from the edge.

    Returns
    -------
    (2 reach BINS + 1,) or (k, ...) float64
        At every bin, time 0 in the middle.
    """
    basis = step_basis()
    reach = min(reach, REACH) * BINS
    matrix = basis.matrix[basis.origin - reach : basis.origin + reach + 1]
    packed = np.concatenate([spectra.real, spectra.imag], axis=-1).astype(np.float32)
    return np.asarray(packed @ matrix.T, dtype=np.float64)


def _frequencies() -> Array:
    """Close where slow ringing makes the response bend, wider where only the edge itself has content."""
    return np.concatenate(
        [
            np.arange(0.0, 0.16, 0.002),
            np.arange(0.16, 0.56, 0.004),
            np.arange(0.56, 1.0, 0.04),
            np.arange(1.0, 2.0, 0.1),
            np.geomspace(2.0, 16.0, 8),
        ]
    )


@cache
def step_basis() -> StepBasis:
    """Matrix for the step response at every bin.

    Notes
    -----
    E(t) = 1/2 + 1/pi * integral of (Re H sin(2 pi f t) + Im H cos(2 pi f t)) / f over f > 0 (inversion of the
    Fourier transform of a step). With H straight between frequencies every part of it is a difference of
    sine and cosine integrals, so that it holds at any time, however coarse the frequencies.
    """
    nu = _frequencies()
    half = np.arange(0, REACH * BINS + 1) / BINS
    sine, cosine = _parts(nu, half)
    # Sine parts are odd in time, cosine parts even.
    sine = np.concatenate([-sine[:0:-1], sine])
    cosine = np.concatenate([cosine[:0:-1], cosine])
    times = np.concatenate([-half[:0:-1], half])
    matrix = np.ascontiguousarray(np.hstack([sine, cosine]) / np.pi).astype(np.float32)
    return StepBasis(nu, times, matrix, sample_mean(matrix))


def sample_mean(fine: npt.NDArray[Any], axis: int = 0) -> npt.NDArray[Any]:
    """Mean over the ``BINS`` + 1 bins about each bin, the outer two counting half; the ends are left as they are."""
    fine = np.moveaxis(fine, axis, 0)
    mean, half = fine.copy(), BINS // 2
    total = (fine[: -2 * half] + fine[2 * half :]) / 2
    for shift in range(1, 2 * half):
        total = total + fine[shift : len(fine) - 2 * half + shift]
    mean[half:-half] = total / BINS
    return np.moveaxis(mean, 0, axis)


def _parts(nu: Array, times: Array) -> tuple[Array, Array]:
    """Weight of each node's real part and imaginary part at times >= 0: two of (times, nodes)."""
    from scipy.special import sici

    w = 2.0 * np.pi * np.maximum(times, 1e-7)[:, None]
    first = nu.copy()
    first[0] = 1e-9  # the integrand is finite at 0: Im H vanishes there
    si, ci = sici(w * first)
    low, high, gap = nu[:-1], nu[1:], np.diff(nu)
    si, ci = np.diff(si, axis=1), np.diff(ci, axis=1)
    cos, sin = -np.diff(np.cos(w * nu), axis=1) / w, np.diff(np.sin(w * nu), axis=1) / w
    return _hats(high * si - cos, cos - low * si, gap), _hats(high * ci - sin, sin - low * ci, gap)


def _hats(falling: Array, rising: Array, gap: Array) -> Array:
    """Sum the two flanks of each node's triangle."""
    nodes = np.zeros((falling.shape[0], falling.shape[1] + 1))
    nodes[:, :-1] += falling / gap
    nodes[:, 1:] += rising / gap
    return nodes
