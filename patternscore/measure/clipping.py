"""Samples piled up at the ends of the coding range."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
_STRAY = 2e-5  # share of the samples that may lie beyond the end of a converter's range
_DITHER = 0.3  # rms noise in codes that carries levels over to the neighbouring codes
_NEIGHBOURS = 5  # codes beside the end; their median, since one may hold a flat area of the pattern
_RIM = 2  # samples and lines left out inside the picture's sides, where blanking rings


@dataclass(frozen=True, slots=True)
class Pile:
    """Samples at one end of the coding range.

    Attributes
    ----------
    level : float
        The end, IRE.
    share : Estimate
        % of the picture's samples beyond what the neighbouring codes explain.
    """

    level: float
    share: Estimate


def read_piles(frame: Frame, located: Located, noise: float, held: tuple[float | None, float | None]) -> list[Pile]:
    """Piles at the lower and the upper end of the coding range.

    Parameters
    ----------
    noise : float
        rms, IRE.
    held : (low, high) float or None
        Levels that several steps of the staircase share, IRE.

    Returns
    -------
    list of Pile
        The lower and the upper.

    Notes
    -----
    A converter may hold levels at 0 and 100 IRE inside a wider code range; those are the ends then. As the
    pattern's own black and white lie just there, a pile is one only where noise ought to have carried samples
    beyond, or where steps of the staircase are held at that level.
    """
    inside = _inside(frame, located)
    if inside.size == 0:
        return [Pile(end, Estimate(0.0, 0.0)) for end in (frame.code_floor, frame.code_ceiling)]
    import cv2

    # Codes of eight bits, whatever the depth; a byte each is also what is counted fastest.
    step = (frame.code_ceiling - frame.code_floor) / 255.0
    codes = cv2.convertScaleAbs(inside, alpha=1.0 / step, beta=-frame.code_floor / step)
    tally = cv2.calcHist([codes], [0], None, [256], [0, 256]).ravel()
    black, white = -frame.code_floor / step, (frame.code_ceiling - 100.0) / step
    ends = [None if level is None else (level - frame.code_floor) / step for level in held]
    low, lower = _pile(tally, round(black), noise / step, ends[0])
    high, upper = _pile(tally[::-1], round(white), noise / step, None if ends[1] is None else 255.0 - ends[1])
    return [Pile(frame.code_floor + low * step, lower), Pile(frame.code_ceiling - high * step, upper)]


def _inside(frame: Frame, located: Located) -> Array:
    """Samples of the picture without its rim, a view."""
    corners = located.warp.to_frame([(0.0, 0.0), (1.0, 0.0), (0.0, 1.0), (1.0, 1.0)])
    left, right = max(corners[0, 0], corners[2, 0], 0.0), min(corners[1, 0], corners[3, 0], frame.samples - 1.0)
    top, bottom = max(corners[0, 1], corners[1, 1], 0.0), min(corners[2, 1], corners[3, 1], frame.rows - 1.0)
    rows = slice(int(np.ceil(top)) + _RIM, int(bottom) + 1 - _RIM)
    return np.asarray(frame.luma[rows, int(np.ceil(left)) + _RIM : int(right) + 1 - _RIM])


def _pile(tally: Array, black: int, noise: float, held: float | None) -> tuple[int, Estimate]:
    """Code of the lower end and % of the samples piled up there; the upper end is handed in turned round.

    Parameters
    ----------
    tally : (256,) array
        Samples of each code.
    black : int
        Code of nominal black.
    noise, held : float
        In codes.
    """
    total = float(tally.sum())
    end = 0
    if black > 0 and tally[:black].sum() <= _STRAY * total < tally[black]:
        end = black
    own, near = float(tally[end]), float(np.median(tally[end + 1 : end + 1 + _NEIGHBOURS]))
    natural = end == black and noise < _DITHER and (held is None or abs(held - end) > 1.0)
    pile = 0.0 if natural else max(own - near, 0.0)
    return end, Estimate(100.0 * pile / total, 100.0 * float(np.sqrt(own + near + 1.0)) / total)
