"""A smooth map from picture fractions to frame coordinates."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.standard import Raster

Array = npt.NDArray[np.float64]


@cache
def _exponents(degree: int) -> tuple[npt.NDArray[np.int64], npt.NDArray[np.int64]]:
    """Exponents i, j of the monomials u^i v^j with i + j <= degree, lowest degrees first."""
    pairs = [(total - j, j) for total in range(degree + 1) for j in range(total + 1)]
    i, j = np.array(pairs, dtype=np.int64).T
    return i, j


def _tables(xy: Array, degree: int) -> tuple[Array, Array]:
    """Powers 0 to ``degree`` of u and of v, both -1 to 1 over the picture."""
    uv = 2.0 * xy - 1.0
    powers = np.ones((len(xy), 2, degree + 1))
    np.cumprod(np.broadcast_to(uv[:, :, None], (len(xy), 2, degree)), axis=2, out=powers[:, :, 1:])
    return powers[:, 0], powers[:, 1]


def _monomials(xy: Array, degree: int) -> Array:
    """Monomials at picture points, (n, terms)."""
    (i, j), (u, v) = _exponents(degree), _tables(xy, degree)
    return np.asarray(u[:, i] * v[:, j])


def _monomial_slopes(xy: Array, degree: int) -> tuple[Array, Array]:
    """Derivatives of the monomials by x and by y, (n, terms) each."""
    (i, j), (u, v) = _exponents(degree), _tables(xy, degree)
    return 2.0 * i * u[:, np.maximum(i - 1, 0)] * v[:, j], 2.0 * j * u[:, i] * v[:, np.maximum(j - 1, 0)]


@dataclass(frozen=True, slots=True, eq=False)
class Warp:
    """Polynomial map from picture fractions to frame coordinates.

    Attributes
    ----------
    coefficients : (terms, 2) float64
        One column each for the sample and the line coordinate, terms in the order of ``_exponents``.
    degree : int
        Largest sum of the exponents.
    """

    coefficients: Array
    degree: int

    def to_frame(self, xy: npt.ArrayLike) -> Array:
        """Frame coordinates of picture points.

        Parameters
        ----------
        xy : (n, 2) array
            Points in picture fractions.

        Returns
        -------
        (n, 2) float64
            Sample and line coordinate; the centre of the first sample (line) is 0.0.
        """
        points = np.atleast_2d(np.asarray(xy, dtype=np.float64))
        return np.asarray(_monomials(points, self.degree) @ self.coefficients)

    def slopes(self, xy: npt.ArrayLike) -> Array:
        """Jacobian at picture points: (n, 2, 2), [k, a, b] = d frame coordinate a / d picture coordinate b."""
        points = np.atleast_2d(np.asarray(xy, dtype=np.float64))
        dx, dy = _monomial_slopes(points, self.degree)
        return np.stack([dx @ self.coefficients, dy @ self.coefficients], axis=2)


def fit_warp(xy: npt.ArrayLike, found: npt.ArrayLike, degree: int, weights: npt.NDArray[Any] | None = None) -> Warp:
    """Least-squares warp through correspondences.

    Parameters
    ----------
    xy : (n, 2) array
        Picture fractions.
    found : (n, 2) array
        Frame coordinates.
    degree : int
        1 is affine; n must be at least the number of terms, (degree + 1)(degree + 2) / 2.
    weights : (n,) array, optional
        Square root of the inverse variance of each point.
    """
    design = _monomials(np.asarray(xy, dtype=np.float64), degree)
    target = np.asarray(found, dtype=np.float64)
    if weights is not None:
        design, target = design * weights[:, None], target * weights[:, None]
    coefficients, *_ = np.linalg.lstsq(design, target, rcond=None)
    return Warp(np.asarray(coefficients, dtype=np.float64), degree)


def raster_warp(raster: Raster) -> Warp:
    """Make the warp of an undistorted picture that fills a raster."""
    corners = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 1.0], [1.0, 1.0]])
    found = np.array([raster.left, raster.top]) + corners * [raster.width_samples, raster.height_lines]
    return fit_warp(corners, found, 1)
