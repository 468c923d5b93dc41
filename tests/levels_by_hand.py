"""Frames of the chart made without the chain model: its own levels, laid over the whole frame, changed by hand."""

from __future__ import annotations

import numpy as np

from patternscore.chart import render
from patternscore.frame import Frame, frame_from_codes
from patternscore.layout import chart_plan
from patternscore.located import Located, RasterEdges
from patternscore.standard import STANDARD_525, Raster
from patternscore.warp import raster_warp

ROWS, SAMPLES = 480, 720


def chart_levels(standard=STANDARD_525, rows=ROWS, samples=SAMPLES):
    """Levels of the chart, float64 IRE, to be changed at will."""
    return render(standard, samples, rows).astype(np.float64)


def coded(levels, standard=STANDARD_525, full=False, bits=8):
    """Frame of these levels, coded as BT.601 says (or over the full range), rounded and clipped."""
    top = 2**bits - 1
    low, span = (0.0, top) if full else (16.0 * 2 ** (bits - 8), 219.0 * 2 ** (bits - 8))
    codes = np.clip(np.rint(low + span * levels / 100.0), 0, top).astype(np.uint16)
    return frame_from_codes(codes, standard, 13.5, levels="full" if full else "video", bits=bits)


def uncoded(levels, standard=STANDARD_525):
    return Frame(levels.astype(np.float32), standard, 13.5, code_step=0.0)


def laid(frame, plan=None):
    """Where the chart lies in such a frame: it fills it."""
    whole = Raster(-0.5, frame.samples - 0.5, -0.5, frame.rows - 0.5)
    warp = raster_warp(whole)
    return Located(plan or chart_plan(frame.standard), warp, None, RasterEdges(None, None, None, None), 0.0)


def readings(findings):
    return {reading.key: reading for reading in findings.readings}
