"""Line and field timing of 525/59.94 and 625/50, and the unit conversions that follow from it.

Times are in us, frequencies along the line in MHz, levels in IRE.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from patternscore.errors import UsageError

Levels = Literal["video", "full"]
FloatArray = npt.NDArray[np.floating]

LUMA_CLOCK_MHZ = 13.5  # ITU-R BT.601: luma sampling, both standards
ASPECT = 4.0 / 3.0


@dataclass(frozen=True, slots=True)
class Raster:
    """Where a picture lies in a frame.

    Coordinates are frame coordinates: the centre of the first sample (line) is 0.0, so a picture that
    covers n lines exactly reaches from -0.5 to n - 0.5.
    """

    left: float
    right: float
    top: float
    bottom: float

    @property
    def width_samples(self) -> float:
        """Width in samples."""
        return self.right - self.left

    @property
    def height_lines(self) -> float:
        """Height in lines."""
        return self.bottom - self.top


@dataclass(frozen=True, slots=True)
class Standard:
    """Timing of one scanning standard.

    Attributes
    ----------
    line_us, blanking_us : float
        Line period and line blanking.
    field_hz : float
        Field rate; a frame is two fields.
    lines : int
        Lines of a frame, blanking included.
    picture_lines, coded_lines : int
        Lines that carry picture in the analogue signal, and in a digital frame (BT.601).
    luma_mhz : float
        Luma bandwidth of the standard.
    """

    name: str
    line_us: float
    blanking_us: float
    field_hz: float
    lines: int
    picture_lines: int
    coded_lines: int
    luma_mhz: float
    first_field: Literal["top", "bottom"]

    @property
    def active_us(self) -> float:
        """Part of a line that carries picture, us."""
        return self.line_us - self.blanking_us

    @property
    def field_us(self) -> float:
        """Duration of a field, us."""
        return 1e6 / self.field_hz

    def raster(self, rows: int, samples: int, sample_rate: float) -> Raster:
        """Nominal place of the 4:3 picture in a frame of this size.

        Along the line the active line is centred on the frame (BT.601 puts it there within half a
        sample). Down the frame the picture fills all lines, at most ``picture_lines`` where the frame
        has more than the coded ones; with more lines than the standard has, it was scaled and fills all.
        """
        half = self.active_us * sample_rate / 2
        middle = (samples - 1) / 2
        spare = max(self.coded_lines, self.picture_lines) < rows <= self.lines
        tall = self.picture_lines if spare else rows
        centre = (rows - 1) / 2
        return Raster(middle - half, middle + half, centre - tall / 2, centre + tall / 2)

    def tvl_from_mhz(self, mhz: float) -> float:
        """TV lines per picture height of a luma frequency: 2 f T_active / (4/3)."""
        return 2.0 * mhz * self.active_us / ASPECT

    def mhz_from_tvl(self, tvl: float) -> float:
        """Luma frequency in MHz that gives a number of TV lines per picture height."""
        return tvl * ASPECT / (2.0 * self.active_us)


# SMPTE ST 170M and ITU-R BT.470: 4.5 MHz / 286; blanking 10.9 us; luma 4.2 MHz. BT.601: 480 coded lines.
STANDARD_525 = Standard("525", 286 / 4.5, 10.9, 4.5e6 / 286 / 262.5, 525, 485, 480, 4.2, "bottom")
# ITU-R BT.470 (B, G): 15 625 Hz; blanking 12.05 us; luma 5 MHz. BT.601: 576 coded lines.
STANDARD_625 = Standard("625", 64.0, 12.05, 50.0, 625, 575, 576, 5.0, "top")
STANDARDS = {"525": STANDARD_525, "625": STANDARD_625}

# Frame sizes known without being told: (samples, rows) -> standard, sample clock in MHz.
# 13.5 MHz: BT.601. The square-pixel clocks of 640 and 768 samples: common practice, from memory.
KNOWN_SIZES = {
    (720, 480): ("525", LUMA_CLOCK_MHZ),
    (720, 486): ("525", LUMA_CLOCK_MHZ),
    (704, 480): ("525", LUMA_CLOCK_MHZ),
    (704, 486): ("525", LUMA_CLOCK_MHZ),
    (640, 480): ("525", 135 / 11),
    (720, 576): ("625", LUMA_CLOCK_MHZ),
    (704, 576): ("625", LUMA_CLOCK_MHZ),
    (768, 576): ("625", 14.75),
}


def standard_named(name: str) -> Standard:
    """Find a standard by its name, "525" or "625"."""
    try:
        return STANDARDS[name]
    except KeyError:
        raise UsageError(f"{name} is no scanning standard; name 525 or 625") from None


def us_from_samples(samples: float, sample_rate: float) -> float:
    """Duration in us of a number of samples at a clock in MHz."""
    return samples / sample_rate


def samples_from_us(us: float, sample_rate: float) -> float:
    """Samples at a clock in MHz that a duration in us takes."""
    return us * sample_rate


def code_range(levels: Levels, bits: int = 8) -> tuple[float, float]:
    """Codes of 0 and 100 IRE: 16 and 235 at 8 bits (BT.601), or the whole range."""
    if levels == "video":
        return 16.0 * 2 ** (bits - 8), 235.0 * 2 ** (bits - 8)
    return 0.0, 2.0**bits - 1.0


def ire_from_code(code: FloatArray | float, levels: Levels = "video", bits: int = 8) -> FloatArray | float:
    """Level in IRE of a luma code."""
    low, high = code_range(levels, bits)
    return (code - low) * (100.0 / (high - low))


def code_from_ire(ire: FloatArray | float, levels: Levels = "video", bits: int = 8) -> FloatArray | float:
    """Luma code, not rounded, of a level in IRE."""
    low, high = code_range(levels, bits)
    return low + ire * ((high - low) / 100.0)


def millivolts_from_ire(ire: float, standard: Standard) -> float:
    """Level in mV: 714 mV to 100 IRE in 525 (1 V is 140 IRE), 700 mV in 625."""
    return ire * (1000.0 / 140.0 if standard.name == "525" else 7.0)


def decibels(ratio: float) -> float:
    """Voltage ratio in dB."""
    return float(20.0 * np.log10(ratio))
