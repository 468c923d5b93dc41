"""A scanner that shares nothing with the package's chain model: any place x(t), area sampling, its own filter."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from scipy.signal import fftconvolve, firwin

from patternscore.chart import render
from patternscore.frame import Frame, frame_from_codes
from patternscore.layout import chart_plan
from patternscore.locate import locate
from patternscore.measure.scan import read_scan
from patternscore.reading import Findings
from patternscore.standard import STANDARD_525, Standard

Array = np.ndarray
OVER = 8
CLOCK = 13.5


def scan_by_hand(
    place: Callable[[Array], Array],
    standard: Standard = STANDARD_525,
    *,
    cutoff_mhz: float = 5.75,
    noise_db: float | None = None,
    seed: int = 0,
) -> Frame:
    """Frame of 720 samples whose lines show the chart at picture fraction ``place(t)``, t in us.

    t runs from the start of the active line; beyond the picture all is black, outside the active line blanked.
    """
    rows, samples, margin = standard.coded_lines, 720, 60
    picture = render(standard, 3600, rows)
    raster = standard.raster(rows, samples, CLOCK)
    borders = (np.arange((samples + 2 * margin) * OVER + 1) - 0.5) / OVER - margin - 0.5 + 0.5 / OVER
    times = (borders - raster.left) / CLOCK
    x = place(times)
    # Area sampling: differences of the running integral of each line.
    integral = np.concatenate([np.zeros((rows, 1)), np.cumsum(picture, axis=1)], axis=1) / picture.shape[1]
    inside = np.clip(x, 0.0, 1.0) * picture.shape[1]
    cell = np.minimum(inside.astype(int), picture.shape[1] - 1)
    total = integral[:, cell] + (inside - cell) * picture[:, cell] / picture.shape[1]
    across = np.diff(x)
    still = np.abs(across) < 1e-9
    lines = np.diff(total, axis=1) / np.where(still, 1.0, across)
    middle = (times[1:] + times[:-1]) / 2
    lines[:, still | (middle < 0) | (middle > standard.active_us)] = 0.0
    taps = firwin(16 * OVER + 1, cutoff_mhz, fs=CLOCK * OVER, window=("kaiser", 6.0))
    lines = fftconvolve(lines, taps[None, :], mode="same", axes=1)
    first = margin * OVER + OVER // 2
    luma = (lines[:, first::OVER] + lines[:, first - 1 :: OVER][:, : lines[:, first::OVER].shape[1]]) / 2
    luma = luma[:, :samples]
    if noise_db is not None:
        luma = luma + np.random.default_rng(seed).normal(0.0, 100.0 * 10 ** (-noise_db / 20), luma.shape)
    codes = np.clip(np.rint(16 + 2.19 * luma), 0, 255).astype(np.uint8)
    return frame_from_codes(codes, standard, CLOCK)


def read(frame: Frame) -> Findings:
    """Locate the chart and read the scan."""
    return read_scan(frame, locate(frame, chart_plan(frame.standard)))


def values(findings: Findings) -> dict[str, float]:
    """Values by key."""
    return {reading.key: reading.value for reading in findings.readings}


def sigmas(findings: Findings) -> dict[str, float]:
    """Standard deviations by key."""
    return {reading.key: reading.sigma for reading in findings.readings}
