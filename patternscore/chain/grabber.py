"""The grabber: samples the lines, each at its own time, and codes them."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.analogue import Spectra, frequencies, lead_samples, line_samples
from patternscore.chain.settings import Chain
from patternscore.frame import Frame, frame_from_codes
from patternscore.standard import code_from_ire

Lines = npt.NDArray[np.float32]


def line_shifts(chain: Chain, random: np.random.Generator) -> npt.NDArray[np.float64]:
    """Shift of each line in us, later positive: jitter line by line and wander of the whole."""
    shifts = np.zeros(chain.lines)
    if chain.jitter_ns:
        shifts = shifts + random.normal(0.0, chain.jitter_ns * 1e-3, chain.lines)
    if chain.wander_ns:
        shifts = shifts + random.normal(0.0, chain.wander_ns * 1e-3)
    return shifts


def sample(chain: Chain, spectra: Spectra, shifts: npt.NDArray[np.float64]) -> Lines:
    """Levels of the samples kept, each line shifted by its own time.

    Where nothing reaches above half the clock, the inverse transform on the sampling clock itself gives the
    samples exactly; else the lines are formed on the oversampled clock, and what lies above folds over.
    """
    import scipy.fft

    per_line = line_samples(chain)
    bins = spectra.shape[1]
    if np.any(shifts):
        turn = np.exp(-2j * np.pi * shifts[:, None] * frequencies(chain)[None, :bins])
        spectra = spectra * turn.astype(np.complex64)
    if bins <= per_line // 2 + 1:
        lines = scipy.fft.irfft(spectra, per_line, axis=1) / chain.oversample
    else:
        lines = scipy.fft.irfft(spectra, per_line * chain.oversample, axis=1)[:, :: chain.oversample]
    first = lead_samples(chain)
    return np.asarray(lines[:, first : first + chain.samples], dtype=np.float32)


def code(chain: Chain, luma: npt.NDArray[Any]) -> Frame:
    """Make a frame of levels, rounded to codes where the chain has a depth."""
    if chain.bits is None:
        luma = np.asarray(luma, dtype=np.float32)
        return Frame(luma, chain.standard, chain.sample_rate, name="grab", levels=chain.levels, code_step=0.0)
    top = 2**chain.bits - 1
    codes = np.clip(np.rint(code_from_ire(luma, chain.levels, chain.bits)), 0, top).astype(np.uint16)
    return frame_from_codes(codes, chain.standard, chain.sample_rate, levels=chain.levels, bits=chain.bits, name="grab")
