"""Frames of slanted edges made without the package's chain: any step response, sampled and coded."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

from patternscore.frame import Frame, frame_from_codes
from patternscore.located import Located, RasterEdges
from patternscore.plan import Edge, Plan
from patternscore.standard import STANDARD_525
from patternscore.warp import Warp, raster_warp

Array = npt.NDArray[np.float64]
StepResponse = Callable[[Array], Array]  # us after the edge -> level, 0 to 1
LINES, FIRST = 136, 172
SLANT = 0.0927  # samples from line to line
CENTRES = (293.2, 337.6, 382.1, 426.5)  # samples at the middle line, the spacing of two bars
DARK, LIGHT = 55.0 / 2.19, 163.0 / 2.19  # codes 71 and 179 of BT.601, as on the chart
CLOCK = 13.5


def edge_frame(
    response: StepResponse,
    *,
    noise: float = 0.0,
    jitter_us: float = 0.0,
    seed: int = 0,
    levels: tuple[float, float] = (DARK, LIGHT),
    centres: tuple[float, ...] = CENTRES,
    bits: int = 8,
) -> Frame:
    """Lines across slanted edges, each the sum of the responses to its steps; ``noise`` is in IRE."""
    random = np.random.default_rng(seed)
    luma = np.full((480, 720), 50.0)
    rows = np.arange(LINES)
    shifts = random.normal(0.0, jitter_us, LINES) if jitter_us else np.zeros(LINES)
    samples = np.arange(720)
    lines = np.full((LINES, 720), levels[0])
    for number, centre in enumerate(centres):
        place = centre - SLANT * (rows - LINES / 2)
        times = (samples[None, :] - place[:, None]) / CLOCK - shifts[:, None]
        lines += (levels[1] - levels[0]) * (1 if number % 2 == 0 else -1) * response(times)
    luma[FIRST : FIRST + LINES] = lines
    luma += noise * random.standard_normal(luma.shape)
    scale = 2 ** (bits - 8)
    codes = np.clip(np.rint((16.0 + 2.19 * luma) * scale), scale, 254 * scale)
    return frame_from_codes(codes.astype(np.uint16), STANDARD_525, CLOCK, bits=bits)


def edge_located(frame: Frame, *, centres: tuple[float, ...] = CENTRES, off: float = 0.8) -> Located:
    """A plan of these edges, laid on the frame ``off`` samples beside where they are."""
    raster = frame.raster

    def fraction(sample: float, line: float) -> tuple[float, float]:
        return (sample - raster.left) / raster.width_samples, (line - raster.top) / raster.height_lines

    lean = SLANT * LINES / 2
    edges = tuple(
        Edge(
            name=f"edge {number}",
            axis="h",
            start=fraction(centre + lean, FIRST),
            end=fraction(centre - lean, FIRST + LINES),
            before=DARK,
            after=LIGHT,
            clear_before=0.04,
            clear_after=0.04,
            place="centre",
            block="centre",
        )
        for number, centre in enumerate(centres)
    )
    warp = raster_warp(raster)
    moved = warp.coefficients.copy()
    moved[0] += (off, 0.4)
    plan = Plan("edges", "525", edges=edges)
    return Located(plan, Warp(moved, warp.degree), None, RasterEdges(None, None, None, None), 0.0)


def response_of(gain: Callable[[Array], npt.NDArray[np.complex128]]) -> StepResponse:
    """Step response of a transfer function of MHz, by a long transform on a fine grid."""
    count, step = 2**17, 0.0005
    impulse = np.roll(np.fft.irfft(gain(np.fft.rfftfreq(count, step)), count), count // 2)
    levels = np.cumsum(impulse) - impulse / 2
    times = (np.arange(count) - count // 2) * step
    return lambda t: np.interp(t, times, levels)
