"""The two fields of a frame: whether they lie where they should and have the same level."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.reading import Estimate

Array = npt.NDArray[Any]


@dataclass(frozen=True, slots=True)
class FieldDifference:
    """How the lines 1, 3, 5 ... lie against the lines 0, 2, 4 ...

    Attributes
    ----------
    down : Estimate
        Shift down the picture, frame lines.
    along : Estimate
        Shift along the line, samples.
    level : Estimate
        Difference in level, IRE.
    """

    down: Estimate
    along: Estimate
    level: Estimate

    def sentences(self) -> tuple[str, ...]:
        """Plain words for what is more than noise and large enough to matter."""
        said = []
        if abs(self.down.value) > max(0.15, 5 * self.down.sigma):
            way = "down" if self.down.value > 0 else "up"
            said.append(
                f"The second field lies {abs(self.down.value):.2f} lines too far {way}: interlace is off, and "
                "readings across the lines are of both fields together."
            )
        if abs(self.along.value) > max(0.25, 5 * self.along.sigma):
            said.append(
                f"The fields are {abs(self.along.value):.2f} samples apart along the line: the picture moved "
                "between them, or line timing differs."
            )
        if abs(self.level.value) > max(0.5, 5 * self.level.sigma):
            said.append(f"The fields differ in level by {abs(self.level.value):.1f} IRE.")
        return tuple(said)


def field_difference(luma: Array) -> FieldDifference:
    """Compare the fields by least squares.

    Parameters
    ----------
    luma : (rows, samples) float32, IRE

    Returns
    -------
    FieldDifference

    Notes
    -----
    Each odd line less the mean of its neighbours is a level difference plus shift times slope; the
    curvature that lines in between show anyway is fitted along.
    """
    inner = luma[4:-4, 4:-4]
    rows = (inner.shape[0] - 5) // 2 * 2 + 5
    inner = inner[:rows]
    odd = inner[3:-2:2]
    above, below = inner[2:-3:2], inner[4:-1:2]
    before, after = inner[0:-5:2], inner[6::2]
    count = min(len(odd), len(before), len(after), len(below))
    odd, above, below, before, after = (part[:count, ::2] for part in (odd, above, below, before, after))
    rise = (below - above) / 2.0
    slope_along = np.gradient((above + below) / 2.0, axis=1) / 2.0
    curve = (before + after - above - below) / 8.0
    target = odd - (above + below) / 2.0
    # Steep places say where the lines are; the steepest are curved and would mislead.
    design = np.stack(
        [-rise.ravel(), -slope_along.ravel(), np.ones(target.size, np.float32), curve.ravel()], 1
    )
    normal = (design.T @ design).astype(np.float64) + 1e-6 * np.eye(4)
    solved = np.linalg.solve(normal, (design.T @ target.ravel()).astype(np.float64))
    left = target.ravel() - design @ solved.astype(np.float32)
    spread = np.sqrt(np.diag(np.linalg.inv(normal)) * float(np.mean(left.astype(np.float64) ** 2)))
    down, along, level = (Estimate(float(v), float(s)) for v, s in zip(solved[:3], spread[:3], strict=True))
    return FieldDifference(down, along, level)
