"""A smooth map from picture fractions to frame coordinates."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.standard import Raster

Array = npt.NDArray[np.float64]


def _powers(xy: Array, degree: int) -> tuple[Array, Array, Array]:
    """Monomials u^i v^j with i + j <= degree, u and v in -1..1 over the picture, and their slopes in x, y."""
    u, v = 2.0 * xy[:, 0] - 1.0, 2.0 * xy[:, 1] - 1.0
    terms, dx, dy = [], [], []
    for total in range(degree + 1):
        for j in range(total + 1):
            i = total - j
            terms.append(u**i * v**j)
            dx.append(2.0 * i * u ** max(i - 1, 0) * v**j)
            dy.append(2.0 * j * u**i * v ** max(j - 1, 0))
    return np.stack(terms, 1), np.stack(dx, 1), np.stack(dy, 1)


@dataclass(frozen=True, slots=True, eq=False)
class Warp:
    """Polynomial map from picture fractions to frame coordinates.

    Attributes
    ----------
    coefficients : (terms, 2) float64
        One column each for the sample and the line coordinate, terms in the order of ``_powers``.
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
        return np.asarray(_powers(points, self.degree)[0] @ self.coefficients)

    def slopes(self, xy: npt.ArrayLike) -> Array:
        """Jacobian at picture points: (n, 2, 2), [k, a, b] = d frame coordinate a / d picture coordinate b."""
        points = np.atleast_2d(np.asarray(xy, dtype=np.float64))
        _, dx, dy = _powers(points, self.degree)
        return np.stack([dx @ self.coefficients, dy @ self.coefficients], axis=2)


def fit_warp(
    xy: npt.ArrayLike, found: npt.ArrayLike, degree: int, weights: npt.NDArray[Any] | None = None
) -> Warp:
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
    design = _powers(np.asarray(xy, dtype=np.float64), degree)[0]
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
