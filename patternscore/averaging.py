"""The mean of several grabs of one picture, once they have been seen to be that."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import UnscorableFrame, UsageError
from patternscore.frame import Frame

Array = npt.NDArray[np.float32]
_BLOCK = (4, 2)  # samples and lines taken together: noise falls, and a small shift stays small
_FARTHEST = (2.0, 1.0)  # samples along the line, lines down: less is wander, and read as such
_LEAST_LIKE = 0.8  # correlation; two samples of wander, or noise 15 dB under white, leave more
_FLAT = 1.0  # IRE: a picture that varies less has nothing to compare


@dataclass(frozen=True, slots=True)
class Displacement:
    """How one frame lies against another.

    Attributes
    ----------
    along, down : float
        Shift in samples and lines; good for shifts up to some four samples and two lines.
    likeness : float
        Correlation of the two, -1 to 1; it does not mind level or gain.
    """

    along: float
    down: float
    likeness: float


def average(frames: list[Frame]) -> Frame:
    """Mean of several grabs of one picture.

    Parameters
    ----------
    frames : list of Frame
        One at least; frames that are averages themselves count by their number of grabs.

    Raises
    ------
    UnscorableFrame
        When one differs from the first in size, standard or clock, shows another picture, or has moved.
    UsageError
        When there is no frame.
    """
    if not frames:
        raise UsageError("there are no frames to average; name one or more")
    first = frames[0]
    for other in frames[1:]:
        _check_alike(first, other)
    counts = [frame.averaged for frame in frames]
    total = np.zeros(first.luma.shape, dtype=np.float64)
    for frame, count in zip(frames, counts, strict=True):
        total += frame.luma if count == 1 else np.float32(count) * frame.luma
    notes = tuple(dict.fromkeys(note for frame in frames for note in frame.notes))
    return first.with_luma(total / sum(counts), averaged=sum(counts), notes=notes)


def displacement(first: Array, other: Array) -> Displacement:
    """How far a picture has moved against another.

    Parameters
    ----------
    first, other : (rows, samples) float32
        Levels in IRE, of equal shape, 8 lines and 16 samples at least.

    Notes
    -----
    Least squares of the second picture on the slopes of the first (the optical-flow equation of Lucas and
    Kanade, over the whole picture), with gain and level free.
    """
    a, b = _reduced(first), _reduced(other)
    if a.std() < _FLAT and b.std() < _FLAT:
        return Displacement(0.0, 0.0, 1.0)
    down, along = np.gradient(a)
    design = np.stack([along.ravel(), down.ravel(), a.ravel(), np.ones(a.size, dtype=np.float32)])
    normal = (design @ design.T).astype(np.float64)
    solved = np.linalg.lstsq(normal, (design @ b.ravel()).astype(np.float64), rcond=1e-9)[0]
    spread = float(a.std() * b.std())
    like = float(((a - a.mean()) * (b - b.mean())).mean()) / spread if spread else 0.0
    gain = solved[2] if abs(solved[2]) > 1e-3 else 1.0
    return Displacement(float(-solved[0] / gain * _BLOCK[0]), float(-solved[1] / gain * _BLOCK[1]), like)


def _reduced(luma: Array) -> Array:
    import cv2

    size = (luma.shape[1] // _BLOCK[0], luma.shape[0] // _BLOCK[1])
    reduced: npt.NDArray[Any] = cv2.resize(luma, size, interpolation=cv2.INTER_AREA)
    return reduced


def _check_alike(first: Frame, other: Frame) -> None:
    if other.luma.shape != first.luma.shape:
        raise UnscorableFrame(
            f"{other.name}: {other.samples} x {other.rows} cannot be averaged with {first.name}, "
            f"{first.samples} x {first.rows}; give frames of one size"
        )
    for what in ("standard", "sample_rate", "levels"):
        if getattr(other, what) != getattr(first, what):
            raise UnscorableFrame(
                f"{other.name}: its {what.replace('_', ' ')} is not that of {first.name}; read both alike"
            )
    moved = displacement(first.luma, other.luma)
    if moved.likeness < _LEAST_LIKE:
        raise UnscorableFrame(
            f"{other.name}: shows another picture than {first.name}, or one that has moved; "
            "give grabs of one picture that stands still"
        )
    if abs(moved.along) > _FARTHEST[0] or abs(moved.down) > _FARTHEST[1]:
        raise UnscorableFrame(
            f"{other.name}: lies {abs(moved.along):.1f} samples and {abs(moved.down):.1f} lines from "
            f"{first.name}; leave it out, or grab a picture that stands still"
        )
