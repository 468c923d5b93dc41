"""From pixels to luma: the depth that was really used, BT.601 weights, and what looks wrong about the codes."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.decode import Picture
from patternscore.errors import UnscorableFrame
from patternscore.standard import Levels, code_range

LUMA_WEIGHTS = (0.299, 0.587, 0.114)  # ITU-R BT.601: luma from R, G, B
_VEILED = "A transparency channel hides part of the picture; it was ignored."
_LOOKS_FULL = "Whole areas lie at the lowest and the highest code: if the file is full-range, say --levels full."
_LOOKS_VIDEO = "Codes reach from 16 to 235 and no further: if the file is video-range, leave out --levels full."
_PILED_LOW, _PILED_HIGH = 0.002, 0.001  # of all samples, in flat areas
_SPARED = 3.0  # codes by which a level may miss the end of the video range and still be taken to lie there


@dataclass(frozen=True, slots=True, eq=False)
class Codes:
    """Luma codes of one picture.

    Attributes
    ----------
    luma : (rows, samples) array
        Codes of ``bits`` bits; integers, or float32 where they were weighted from RGB.
    bits : int
        Depth that was really used, 8 to 16.
    notes : tuple of str
        What was noticed.
    """

    luma: npt.NDArray[Any]
    bits: int
    notes: tuple[str, ...]


def luma_codes(picture: Picture, name: str, levels: Levels) -> Codes:
    """Luma of a picture.

    Parameters
    ----------
    picture : Picture
        Grey or RGB, with or without alpha, uint8 or uint16.
    name : str
        For messages.
    levels : {"video", "full"}
        How its codes are to be read; only for the note when they look otherwise.

    Raises
    ------
    UnscorableFrame
        When the picture has channels that are neither grey nor RGB.
    """
    pixels, notes = picture.pixels, picture.notes
    channels = 1 if pixels.ndim == 2 else pixels.shape[2]
    if channels > 4:
        raise UnscorableFrame(f"{name}: has {channels} channels; export it as grey or RGB")
    if channels in (2, 4) and int(pixels[..., -1].min()) < np.iinfo(pixels.dtype).max:
        notes = (*notes, _VEILED)
    colours = pixels if pixels.ndim == 2 else pixels[..., 0] if channels <= 2 else pixels[..., :3]
    colours, bits = (colours, 8) if colours.dtype == np.uint8 else used_depth(colours)
    luma = colours
    if channels >= 3:
        # The green weight is what the others leave of 1, so that greys keep their codes exactly.
        red, green, blue = (colours[..., channel].astype(np.float32) for channel in range(3))
        luma = green + np.float32(LUMA_WEIGHTS[0]) * (red - green) + np.float32(LUMA_WEIGHTS[2]) * (blue - green)
    return Codes(luma, bits, (*notes, *range_notes(luma, levels, bits)))


def used_depth(codes: npt.NDArray[Any]) -> tuple[npt.NDArray[Any], int]:
    """Codes at the depth they were made with, and that depth.

    A converter that puts 8 or 10 bits into 16 either shifts them up, or repeats their upper bits in the lower
    places so that full scale stays full scale.

    Parameters
    ----------
    codes : (...) uint16

    Returns
    -------
    (...) uint16, int
        Codes and their bits, 8 to 16.
    """
    for bits in (8, 10, 12):
        own = codes >> (16 - bits)
        if np.array_equal(codes, (own << (16 - bits)) | (own >> (2 * bits - 16))):
            return own, bits
    low = int(np.bitwise_or.reduce(codes, axis=None))
    spare = min((low & -low).bit_length() - 1, 8) if low else 0
    return codes >> spare, 16 - spare


def range_notes(luma: npt.NDArray[Any], levels: Levels, bits: int) -> tuple[str, ...]:
    """Sentences where codes do not look like the range they are said to have.

    Parameters
    ----------
    luma : (rows, samples) array
        Codes of ``bits`` bits.
    """
    scale = 2.0 ** (bits - 8)
    if bits == 16 and 0 < luma.max() < 4096:
        held = 10 if luma.max() < 1024 else 12
        return (f"All codes lie in the lowest {held} of 16 bits: shift them up by {16 - held} when saving.",)
    if levels == "video":
        low, high = luma < 0.5 * scale, luma > 2.0**bits - 1 - 0.5 * scale
        return (_LOOKS_FULL,) if _piled(low, _PILED_LOW) and _piled(high, _PILED_HIGH) else ()
    black, white = code_range("video", bits)
    darkest, lightest = np.percentile(luma[::2, ::2], [0.5, 99.5])
    near = max(abs(darkest - black), abs(lightest - white)) < _SPARED * scale
    return (_LOOKS_VIDEO,) if near else ()


def _piled(mask: npt.NDArray[np.bool_], share: float) -> bool:
    """Whether more than a share of the samples lie in areas of the mask: flat ones, and not ringing.

    An area is where half a neighbourhood belongs to it (half, as noise at a clipped level goes one way
    only); the neighbourhood is a microsecond wide at 13.5 MHz.
    """
    if mask.mean() <= share:
        return False
    import cv2

    side = 2 * (mask.shape[1] // 110) + 1
    return float((cv2.blur(mask.astype(np.float32), (side, side)) > 0.45).mean()) > share
