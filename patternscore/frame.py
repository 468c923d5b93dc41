"""A frame: one picture as grabbed, luma in IRE, with its scanning standard and sample clock."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.standard import Levels, Raster, Standard, ire_from_code


@dataclass(frozen=True, slots=True, eq=False)
class Frame:
    """One picture as grabbed.

    Attributes
    ----------
    luma : (rows, samples) float32
        Levels in IRE.
    standard : Standard
        Its scanning standard.
    sample_rate : float
        Sample clock along the line, MHz.
    name, sha256 : str
        What it is called, and the digest of the file it came from (empty for a frame that came from none).
    levels : {"video", "full"}
        How codes stood for levels.
    code_step : float
        IRE between neighbouring codes; 0 where the frame was never coded.
    code_floor, code_ceiling : float
        IRE of the lowest and highest code that the format can hold.
    averaged : int
        Number of grabs of one picture that this frame is the mean of.
    notes : tuple of str
        What was noticed while reading (plain sentences for the card's remarks).
    """

    luma: npt.NDArray[np.float32]
    standard: Standard
    sample_rate: float
    name: str = "frame"
    sha256: str = ""
    levels: Levels = "video"
    code_step: float = 100.0 / 219.0
    code_floor: float = -1600.0 / 219.0
    code_ceiling: float = 23900.0 / 219.0
    averaged: int = 1
    notes: tuple[str, ...] = ()

    @property
    def rows(self) -> int:
        """Number of lines in the frame."""
        return int(self.luma.shape[0])

    @property
    def samples(self) -> int:
        """Number of samples in a line."""
        return int(self.luma.shape[1])

    @property
    def raster(self) -> Raster:
        """Nominal place of the picture in this frame."""
        return self.standard.raster(self.rows, self.samples, self.sample_rate)

    def with_luma(self, luma: npt.NDArray[Any], **changes: Any) -> Frame:
        """Return the same frame with other levels."""
        return replace(self, luma=np.asarray(luma, dtype=np.float32), **changes)

    def field(self, parity: int) -> Frame:
        """One field, 0 holding the lines 0, 2, 4 ... and 1 the lines 1, 3, 5 ... as a frame of half the rows."""
        return replace(self, luma=np.ascontiguousarray(self.luma[parity::2]))


def frame_from_codes(
    codes: npt.NDArray[np.integer[Any]],
    standard: Standard,
    sample_rate: float,
    *,
    levels: Levels = "video",
    bits: int = 8,
    name: str = "frame",
    sha256: str = "",
) -> Frame:
    """Make a frame from luma codes.

    Parameters
    ----------
    codes : (rows, samples) unsigned integers
        Luma codes of ``bits`` bits.
    """
    top = float(2**bits - 1)
    return Frame(
        luma=np.asarray(ire_from_code(codes.astype(np.float32), levels, bits), dtype=np.float32),
        standard=standard,
        sample_rate=sample_rate,
        name=name,
        sha256=sha256,
        levels=levels,
        code_step=float(ire_from_code(1.0, levels, bits) - ire_from_code(0.0, levels, bits)),
        code_floor=float(ire_from_code(0.0, levels, bits)),
        code_ceiling=float(ire_from_code(top, levels, bits)),
    )
