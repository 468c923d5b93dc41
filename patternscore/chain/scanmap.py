"""Which point of the picture each instant of each line shows."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from numpy.polynomial import chebyshev as cheb

from patternscore.chain.settings import Chain
from patternscore.standard import ASPECT

Map = npt.NDArray[Any]
_NODES = 12
_SPAN = 1.6  # picture fractions, about the middle, over which the inverse is tabulated
_REACH = (0.5 - _SPAN / 2, 0.5 + _SPAN / 2)


def has_distortion(chain: Chain) -> bool:
    """Whether anything but the two sweeps moves the picture."""
    terms = (chain.rotation, chain.skew, chain.trapezoid_h, chain.trapezoid_v, chain.bow_h, chain.bow_v)
    return any(term != 0 for term in terms)


def distort(chain: Chain, x: Map, y: Map) -> tuple[Map, Map]:
    """Where a picture point (fractions) appears on an otherwise perfect raster."""
    u, v = 2 * x - 1, 2 * y - 1
    wide = 0.5 * u * (1 + chain.trapezoid_h / 200 * v + chain.bow_h / 50 * (1 - v * v))
    tall = 0.5 * v * (1 + chain.trapezoid_v / 200 * u + chain.bow_v / 50 * (1 - u * u))
    lean, turn = np.tan(np.radians(chain.skew)), np.radians(chain.rotation)
    wide = wide * ASPECT - tall * lean
    across = wide * np.cos(turn) - tall * np.sin(turn)
    down = wide * np.sin(turn) + tall * np.cos(turn)
    return 0.5 + across / ASPECT, 0.5 + down


def undistort(chain: Chain, x: Map, y: Map, rounds: int = 30) -> tuple[Map, Map]:
    """Inverse of ``distort``, by fixed-point iteration (the distortions are small)."""
    px, py = x, y
    for _ in range(rounds):
        qx, qy = distort(chain, px, py)
        px, py = px + (x - qx), py + (y - qy)
    return px, py


def _undistorted_raster(chain: Chain, along: Map, down: Map) -> tuple[Map, Map]:
    """Inverse over a whole raster of columns ``along`` and rows ``down``.

    The inverse is smooth: it is tabulated at Chebyshev nodes and is then a product of three matrices.
    """
    nodes = cheb.chebpts1(_NODES)
    x, y = np.meshgrid(_SPAN / 2 * nodes + 0.5, _SPAN / 2 * nodes + 0.5)
    to_series = np.linalg.inv(cheb.chebvander(nodes, _NODES - 1))
    basis_x = cheb.chebvander((np.clip(along, *_REACH) - 0.5) * 2 / _SPAN, _NODES - 1).astype(np.float32)
    basis_y = cheb.chebvander((np.clip(down, *_REACH) - 0.5) * 2 / _SPAN, _NODES - 1).astype(np.float32)
    tables = (to_series @ part @ to_series.T for part in undistort(chain, x, y))
    px, py = (basis_y @ table.astype(np.float32) @ basis_x.T for table in tables)
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
    along = chain.sweep_h.position(times, chain.standard.active_us).astype(np.float32)
    down = chain.sweep_v.position(lines, raster.height_lines).astype(np.float32)
    if has_distortion(chain):
        return _undistorted_raster(chain, along, down)
    return along[None, :], down[:, None]
