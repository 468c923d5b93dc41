"""Picture in, frame out."""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.scanmap import picture_points
from patternscore.chain.settings import Chain
from patternscore.frame import Frame, frame_from_codes
from patternscore.standard import code_from_ire

Lines = npt.NDArray[np.float32]
CHART_SIZE = (5760, 1920)


def grab(chain: Chain, picture: npt.NDArray[Any] | None = None, seed: int = 0) -> Frame:
    """Pass a picture through the chain and grab it.

    Parameters
    ----------
    chain : Chain
        Settings.
    picture : (h, w) array, optional
        Levels in IRE of exactly the active picture, any size; the package's chart where left out.
    seed : int
        Noise, jitter, wander and bounce follow from it; the same seed gives the same frame.

    Returns
    -------
    Frame
        Named "grab" with the sample clock and size of the chain.

    Examples
    --------
    What would a peaking network with its zero at 3 MHz do to a chain of 1.8 MHz?

    >>> from patternscore.chain import Chain, grab, responses, truth
    >>> chain = Chain(response=(responses.first_order(1.8), responses.lead(3.0, 9.0)), noise_db=40.0)
    >>> round(truth(chain)["mtf50_h"], 2)
    5.73
    >>> grab(chain).luma.shape
    (480, 720)
    """
    random = np.random.default_rng(seed)
    shifts = _shifts(chain, random)
    steady = replace(chain, noise_db=None, jitter_ns=0.0, wander_ns=0.0, bounce_percent=0.0, bits=None, levels="video")
    luma: npt.NDArray[Any] = _sample(chain, _spectrum(steady, _Picture(picture)), shifts)
    if chain.bounce_percent:
        luma = luma * np.float32(1.0 + random.normal(0.0, chain.bounce_percent / 100.0))
    if chain.noise_db is not None:
        sigma = np.float32(100.0 * 10.0 ** (-chain.noise_db / 20.0))
        luma = luma + sigma * random.standard_normal(luma.shape, dtype=np.float32)
    return _coded(chain, luma)


class _Picture:
    """A picture with an identity that can be cached by."""

    def __init__(self, levels: npt.NDArray[Any] | None) -> None:
        self.levels = levels
        self.token = None if levels is None else (levels.shape, hash(np.ascontiguousarray(levels).tobytes()))

    def __eq__(self, other: object) -> bool:
        return isinstance(other, _Picture) and self.token == other.token

    def __hash__(self) -> int:
        return hash(self.token)

    def array(self, chain: Chain) -> Lines:
        """Levels, drawn now if they are the chart's."""
        if self.levels is not None:
            return np.asarray(self.levels, dtype=np.float32)
        from patternscore.chart import render

        return render(chain.standard, *CHART_SIZE)


def line_samples(chain: Chain) -> int:
    """Samples of a whole line, blanking included."""
    return round(chain.standard.line_us * chain.sample_rate)


def _lead(chain: Chain) -> int:
    """Samples of a whole line before the first one kept."""
    return (line_samples(chain) - chain.samples) // 2


@lru_cache(maxsize=6)
def _spectrum(chain: Chain, source: _Picture) -> npt.NDArray[np.complex64]:
    """Spectrum of each line as it reaches the sampler, before jitter, wander and bounce."""
    import scipy.fft

    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    count = line_samples(chain) * chain.oversample
    index = np.arange(count) / chain.oversample - _lead(chain)
    times = (index - raster.left) / chain.sample_rate
    active = (times >= 0) & (times <= chain.standard.active_us)
    rows = np.arange(chain.lines, dtype=np.float64)
    lines = rows - raster.top - chain.field_offset_lines * (rows % 2)
    picture = source.array(chain)
    levels = np.zeros((chain.lines, count), dtype=np.float32)
    levels[:, active] = _scanned(chain, picture, times[active], lines)
    levels[(lines < 0) | (lines > raster.height_lines)] = 0.0

    frequency = np.fft.rfftfreq(count, 1.0 / (chain.sample_rate * chain.oversample))
    stages = chain.electrical()(frequency) * _undo_pixels(chain, picture.shape[1], frequency)
    spectrum = scipy.fft.rfft(levels, axis=1) * stages.astype(np.complex64)
    if _shaped_after(chain):
        analogue = scipy.fft.irfft(spectrum, count, axis=1)
        analogue[:, active] += _tilt(chain, times[active] / chain.standard.active_us, lines)
        analogue += _line_offsets(chain)[:, None]
        if chain.black_clip is not None or chain.white_clip is not None:
            np.clip(analogue, chain.black_clip, chain.white_clip, out=analogue)
        spectrum = scipy.fft.rfft(analogue, axis=1)
    if chain.band_limit is not None:
        spectrum *= chain.band_limit(frequency).astype(np.complex64)
    return np.asarray(spectrum, dtype=np.complex64)


def _scanned(chain: Chain, picture: Lines, times: npt.NDArray[Any], lines: npt.NDArray[Any]) -> Lines:
    """Levels scanned off the picture: spot, gamma, gain and setup; black outside the picture."""
    import cv2

    height, width = picture.shape
    across = chain.spot_us / chain.standard.active_us * width
    down = chain.spot_lines / chain.lines * height
    if across > 0 or down > 0:
        picture = cv2.GaussianBlur(  # type: ignore[assignment]  # float32 in, float32 out
            picture, (0, 0), sigmaX=max(across, 1e-3), sigmaY=max(down, 1e-3), borderType=cv2.BORDER_REPLICATE
        )
    x, y = picture_points(chain, times, lines)
    outside = (x < 0) | (x > 1) | (y < 0) | (y > 1)
    columns = (x * width - 0.5).astype(np.float32)
    rows = (y * height - 0.5).astype(np.float32)
    levels: npt.NDArray[Any] = cv2.remap(picture, columns, rows, cv2.INTER_LINEAR, borderMode=cv2.BORDER_REPLICATE)
    levels[outside] = 0.0
    if chain.gamma != 1.0:
        levels = 100.0 * np.clip(levels / 100.0, 0.0, None) ** np.float32(chain.gamma)
    return np.asarray(levels * np.float32(chain.gain) + np.float32(chain.setup), dtype=np.float32)


def _undo_pixels(chain: Chain, width: int, frequency: npt.NDArray[Any]) -> npt.NDArray[Any]:
    """Inverse of what the picture's pixels (a box) and linear interpolation (a triangle) take away."""
    pixel = chain.standard.active_us / width
    loss = np.sinc(np.clip(frequency * pixel, 0.0, 0.5)) ** 3
    return np.asarray(1.0 / np.where(frequency < 2.0 * chain.sample_rate, loss, 1.0))


def _shaped_after(chain: Chain) -> bool:
    """Whether anything that a filter cannot do follows the electrical response."""
    clipped = chain.black_clip is not None or chain.white_clip is not None
    moved = (chain.tilt_line, chain.tilt_field, chain.hum_percent, chain.field_level_offset)
    return clipped or any(term != 0 for term in moved)


def _tilt(chain: Chain, along: npt.NDArray[Any], lines: npt.NDArray[Any]) -> Lines:
    down = (lines / chain.lines - 0.5)[:, None]
    tilt = chain.tilt_line * (along - 0.5)[None, :] + chain.tilt_field * down
    return np.asarray(tilt, dtype=np.float32)


def line_times(chain: Chain) -> npt.NDArray[np.float64]:
    """Time of each line of the frame in us, the first field first."""
    rows = np.arange(chain.lines)
    second = (rows % 2 == 1) == (chain.standard.first_field == "top")
    return np.asarray(second * chain.standard.field_us + (rows // 2) * chain.standard.line_us)


def _line_offsets(chain: Chain) -> Lines:
    """Hum, and the difference in level between the fields, IRE per line."""
    mains = chain.hum_hz or (60.0 if chain.standard.name == "525" else 50.0)
    hum = chain.hum_percent * np.sin(2e-6 * np.pi * mains * line_times(chain) + chain.hum_phase)
    return np.asarray(hum + chain.field_level_offset * (np.arange(chain.lines) % 2), dtype=np.float32)


def _shifts(chain: Chain, random: np.random.Generator) -> npt.NDArray[np.float64]:
    """Shift of each line in us, later positive."""
    shifts = np.zeros(chain.lines)
    if chain.jitter_ns:
        shifts = shifts + random.normal(0.0, chain.jitter_ns * 1e-3, chain.lines)
    if chain.wander_ns:
        shifts = shifts + random.normal(0.0, chain.wander_ns * 1e-3)
    return shifts


def _sample(chain: Chain, spectrum: npt.NDArray[np.complex64], shifts: npt.NDArray[np.float64]) -> Lines:
    """Levels of the samples kept, each line shifted by its own time."""
    import scipy.fft

    per_line = line_samples(chain)
    count = per_line * chain.oversample
    frequency = np.fft.rfftfreq(count, 1.0 / (chain.sample_rate * chain.oversample))
    limited = per_line // 2 + 1
    edge = chain.band_limit(frequency[limited - 1 :]) if chain.band_limit is not None else np.ones(1)
    short = bool(np.max(np.abs(edge)) < 1e-7)  # nothing folds over: the short transform samples exactly
    if short:
        spectrum, frequency = spectrum[:, :limited], frequency[:limited]
    if np.any(shifts):
        turn = np.exp(-2j * np.pi * shifts[:, None] * frequency[None, :])
        spectrum = spectrum * turn.astype(np.complex64)
    if short:
        lines = scipy.fft.irfft(spectrum, per_line, axis=1) / chain.oversample
    else:
        lines = scipy.fft.irfft(spectrum, count, axis=1)[:, :: chain.oversample]
    first = _lead(chain)
    return np.asarray(lines[:, first : first + chain.samples], dtype=np.float32)


def _coded(chain: Chain, luma: Lines) -> Frame:
    if chain.bits is None:
        return Frame(luma, chain.standard, chain.sample_rate, name="grab", levels=chain.levels, code_step=0.0)
    top = 2**chain.bits - 1
    codes = np.clip(np.rint(code_from_ire(luma, chain.levels, chain.bits)), 0, top).astype(np.uint16)
    return frame_from_codes(codes, chain.standard, chain.sample_rate, levels=chain.levels, bits=chain.bits, name="grab")
