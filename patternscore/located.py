"""Where a plan's features lie in one frame: what locate hands to the measures."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patternscore.plan import Plan
from patternscore.warp import Warp


@dataclass(frozen=True, slots=True, eq=False)
class Crossings:
    """Crosshatch crossings found in a frame.

    Attributes
    ----------
    index : (n, 2) int
        Column and row of each crossing in the plan's grid.
    xy : (n, 2) float64
        Where the plan has it, picture fractions.
    found : (n, 2) float64
        Frame coordinates (sample, line), the centre of the first sample (line) being 0.0.
    sigma : (n, 2) float64
        One standard deviation of ``found``.
    """

    index: npt.NDArray[np.int64]
    xy: npt.NDArray[np.float64]
    found: npt.NDArray[np.float64]
    sigma: npt.NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class RasterEdges:
    """Where the picture ends against blanking, frame coordinates; None where no blanking is seen there.

    ``sigmas`` are one standard deviation of each, in the order of the fields.
    """

    left: float | None
    right: float | None
    top: float | None
    bottom: float | None
    sigmas: tuple[float, float, float, float] = (0.03, 0.03, 0.03, 0.03)


@dataclass(frozen=True, slots=True, eq=False)
class Located:
    """A plan laid on a frame.

    Attributes
    ----------
    warp : Warp
        Picture fractions to frame coordinates, good to a sample or so over the whole picture.
    crossings : Crossings or None
        Crossings measured to a fraction of a sample; None where the plan has no grid.
    edges : RasterEdges
        Picture against blanking.
    misfit : float
        rms distance in samples of the points used from the warp.
    """

    plan: Plan
    warp: Warp
    crossings: Crossings | None
    edges: RasterEdges
    misfit: float
