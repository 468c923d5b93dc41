"""The signal on its way to the grabber: electrical response, tilt, hum, clipping."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import scipy.fft

from patternscore.chain.optics import Picture
from patternscore.chain.scene import scan
from patternscore.chain.settings import Chain
from patternscore.standard import Raster

Lines = npt.NDArray[np.float32]
Axis = npt.NDArray[np.float64]
Spectra = npt.NDArray[np.complex64]
_NOTHING = 1e-7  # gain of a filter that lets nothing pass


def line_samples(chain: Chain) -> int:
    """Samples of a whole line, blanking included."""
    return round(chain.standard.line_us * chain.sample_rate)


def lead_samples(chain: Chain) -> int:
    """Samples of a whole line before the first one kept."""
    return (line_samples(chain) - chain.samples) // 2


def frequencies(chain: Chain) -> Axis:
    """Frequencies in MHz of the spectrum of a line on the oversampled clock."""
    count = line_samples(chain) * chain.oversample
    return np.asarray(np.fft.rfftfreq(count, 1.0 / (chain.sample_rate * chain.oversample)))


def line_spectra(chain: Chain, picture: Picture) -> Spectra:
    """Spectrum of each line as it reaches the sampler, before jitter, wander, bounce and noise.

    Parameters
    ----------
    picture : Picture

    Returns
    -------
    (rows, m) complex64
        Up to the highest frequency at which the grabber's filter lets anything pass.
    """
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    count = line_samples(chain) * chain.oversample
    times = (np.arange(count) / chain.oversample - lead_samples(chain) - raster.left) / chain.sample_rate
    lines = _line_places(chain, raster)
    frequency = frequencies(chain)
    kept = _passed(chain, frequency)

    spectra = scipy.fft.rfft(scan(chain, picture, times, lines), axis=1)
    clipped = chain.black_clip is not None or chain.white_clip is not None
    if not clipped:  # all is linear: what the grabber's filter stops need not be reckoned
        spectra, frequency = spectra[:, :kept], frequency[:kept]
    spectra = spectra * chain.electrical()(frequency).astype(np.complex64)
    _add_tilt(chain, spectra, times, lines)
    spectra[:, 0] += count * _line_offsets(chain)
    if clipped:
        held = np.clip(scipy.fft.irfft(spectra, count, axis=1), chain.black_clip, chain.white_clip)
        spectra = scipy.fft.rfft(held, axis=1)[:, :kept]
    if chain.band_limit is not None:
        spectra *= chain.band_limit(frequency[:kept]).astype(np.complex64)
    return np.asarray(spectra, dtype=np.complex64)


def line_times(chain: Chain) -> Axis:
    """Time of each line of the frame in us, the first field first."""
    rows = np.arange(chain.lines)
    second = (rows % 2 == 1) == (chain.standard.first_field == "top")
    return np.asarray(second * chain.standard.field_us + (rows // 2) * chain.standard.line_us)


def _line_places(chain: Chain, raster: Raster) -> Axis:
    """Place of each line, from the top of the raster."""
    rows = np.arange(chain.lines, dtype=np.float64)
    return np.asarray(rows - raster.top - chain.field_offset_lines * (rows % 2))


def _passed(chain: Chain, frequency: Axis) -> int:
    """How many of the lowest frequencies the grabber's filter lets pass; never less than the sampler needs."""
    if chain.band_limit is None:
        return len(frequency)
    passing = np.nonzero(np.abs(chain.band_limit(frequency)) > _NOTHING)[0]
    return max(int(passing[-1]) + 1, line_samples(chain) // 2 + 1)


def _add_tilt(chain: Chain, spectra: Spectra, times: Axis, lines: Axis) -> None:
    """Add slopes along the active line and down the field, in place."""
    if chain.tilt_line == 0.0 and chain.tilt_field == 0.0:
        return
    active = ((times >= 0) & (times <= chain.standard.active_us)).astype(np.float64)
    along = active * (times / chain.standard.active_us - 0.5)
    down = lines / chain.lines - 0.5
    bins = spectra.shape[1]
    spectra += (chain.tilt_line * np.fft.rfft(along)[:bins]).astype(np.complex64)
    spectra += (chain.tilt_field * down[:, None] * np.fft.rfft(active)[:bins]).astype(np.complex64)


def _line_offsets(chain: Chain) -> npt.NDArray[Any]:
    """Hum, and the difference in level between the fields, IRE per line."""
    usual = 60.0 if chain.standard.name == "525" else 50.0
    mains = usual if chain.hum_hz is None else chain.hum_hz
    hum = chain.hum_percent * np.sin(2e-6 * np.pi * mains * line_times(chain) + chain.hum_phase)
    return np.asarray(hum + chain.field_level_offset * (np.arange(chain.lines) % 2), dtype=np.float32)
