"""Which point of the picture each instant of each line shows."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from numpy.polynomial import chebyshev as cheb

from patternscore.chain.settings import Chain
from patternscore.standard import ASPECT

Map = npt.NDArray[Any]
_NODES = 14


def has_distortion(chain: Chain) -> bool:
    """Whether anything but the two sweeps moves the picture."""
    terms = (chain.rotation, chain.skew, chain.trapezoid_h, chain.trapezoid_v, chain.bow_h, chain.bow_v)
    return any(term != 0 for term in terms)


def _swelling(chain: Chain, u: Map, v: Map) -> tuple[Map, Map]:
    """Factors on width and height at a point (-1 to 1), from trapezoid and bow."""
    wide = 1 + chain.trapezoid_h / 200 * v + chain.bow_h / 50 * (1 - v * v)
    tall = 1 + chain.trapezoid_v / 200 * u + chain.bow_v / 50 * (1 - u * u)
    return wide, tall


def distort(chain: Chain, x: Map, y: Map) -> tuple[Map, Map]:
    """Where a picture point (fractions) appears on an otherwise perfect raster.

    Trapezoid and bow act first, then skew (it tilts the verticals), then turn.
    """
    u, v = 2 * x - 1, 2 * y - 1
    wide, tall = _swelling(chain, u, v)
    across, down = 0.5 * u * wide * ASPECT, 0.5 * v * tall
    across = across - down * np.tan(np.radians(chain.skew))
    cosine, sine = np.cos(np.radians(chain.rotation)), np.sin(np.radians(chain.rotation))
    return 0.5 + (across * cosine - down * sine) / ASPECT, 0.5 + across * sine + down * cosine


def undistort(chain: Chain, x: Map, y: Map, rounds: int = 60) -> tuple[Map, Map]:
    """Inverse of ``distort``: turn and skew exactly, trapezoid and bow by fixed-point iteration."""
    across, down = (x - 0.5) * ASPECT, y - 0.5
    cosine, sine = np.cos(np.radians(chain.rotation)), np.sin(np.radians(chain.rotation))
    across, down = across * cosine + down * sine, down * cosine - across * sine
    across = across + down * np.tan(np.radians(chain.skew))
    u = flat_u = across * 2 / ASPECT
    v = flat_v = down * 2
    for _ in range(rounds):
        wide, tall = _swelling(chain, u, v)
        u, v = flat_u / wide, flat_v / tall
    return 0.5 + u / 2, 0.5 + v / 2


def _undistorted_raster(chain: Chain, along: Map, down: Map) -> tuple[Map, Map]:
    """Inverse over a whole raster of columns ``along`` and rows ``down``.

    The inverse is smooth: it is tabulated at Chebyshev nodes and is then a product of three matrices.
    """
    nodes = cheb.chebpts1(_NODES)
    to_series = np.linalg.inv(cheb.chebvander(nodes, _NODES - 1))
    middles, halves, bases = [], [], []
    for places in (along, down):
        middles.append((places.max() + places.min()) / 2)
        halves.append((places.max() - places.min()) / 2)
        basis = cheb.chebvander((places - middles[-1]) / halves[-1], _NODES - 1)
        bases.append(basis.astype(np.float32))
    x, y = np.meshgrid(middles[0] + halves[0] * nodes, middles[1] + halves[1] * nodes)
    tables = (to_series @ part @ to_series.T for part in undistort(chain, x, y))
    px, py = (bases[1] @ table.astype(np.float32) @ bases[0].T for table in tables)
    return px, py


def picture_points(chain: Chain, times: Map, lines: Map) -> tuple[Map, Map]:
    """Picture fractions shown at times (us from active start) on lines (from the top of the raster).

    Parameters
    ----------
    times : (n,) array
    lines : (rows,) array

    Returns
    -------
    x, y : float32
        (rows, n) each, or (1, n) and (rows, 1) where they are all that the sweeps give.
    """
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    along = chain.sweep_h.position(times, chain.standard.active_us)
    down = chain.sweep_v.position(lines, raster.height_lines)
    if has_distortion(chain):
        return _undistorted_raster(chain, along, down)
    return along[None, :].astype(np.float32), down[:, None].astype(np.float32)
