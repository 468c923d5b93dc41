"""Noise of flat areas: its rms, apart from what is coding and what is picture."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.measure.patches import Cores
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
_TOO_MUCH, _TOO_LITTLE = 2.0, 0.4  # of the usual variance: something lies in the area, or it is clipped
_FEWEST = 100  # degrees of freedom
_TRIALS = np.linspace(0.05, 1.0, 96)  # rms in code steps


@dataclass(frozen=True, slots=True)
class Noise:
    """Noise of flat areas.

    Attributes
    ----------
    variance : float
        IRE squared, coding noise included.
    spread : float
        Standard deviation of ``variance``, from its scatter between areas.
    own : float
        Variance without what coding adds.
    gathering : float
        Variance of a line's mean times its samples over the variance of a sample; 1 for white noise.
    """

    variance: float
    spread: float
    own: float
    gathering: float

    def of_mean(self, count: float | Array, code_step: float) -> Array:
        """Standard deviation of the mean of this many samples, IRE.

        Where noise is too little to carry levels over the code steps, the mean is off by up to half a step.
        """
        stuck = 0.0
        if code_step > 0:
            own = self.own if self.own > 1.01 * code_step**2 / 12.0 else 0.0
            stuck = code_step / np.sqrt(12.0) * np.exp(-2.0 * np.pi**2 * own / code_step**2)
        return np.asarray(np.hypot(np.sqrt(self.variance * self.gathering / count), stuck))

    def ratio(self) -> Estimate:
        """100 IRE over rms noise, dB."""
        value = 10.0 * np.log10(1e4 / self.own)
        return Estimate(float(value), float(10.0 / np.log(10.0) * self.spread / self.own))


def read_noise(frame: Frame, seen: tuple[Cores, ...]) -> Noise:
    """Noise of flat areas.

    Parameters
    ----------
    seen : tuple of Cores

    Raises
    ------
    Unreadable
        When there is too little flat area that does not touch the ends of the coding range.

    Notes
    -----
    In each area the column means, and for each field its level and slope down the rows, are taken out: what
    rings after an edge is the same on all lines, hum and tilt are slow. The degrees of freedom so spent are
    counted. Coding adds step squared / 12 only where noise spreads a level over several codes; below that the
    added variance depends on where the level lies between codes, and is reckoned from its Fourier series
    (Widrow and Kollar, "Quantization Noise", 2008).
    """
    parts = [_area_variances(cores, frame) for cores in seen if len(cores) and cores.levels.shape[1] >= 6]
    if not parts:
        raise Unreadable("the pattern has no flat patch large enough in the frame")
    variance, freedom, rows, between = (np.concatenate(part) for part in zip(*parts, strict=True))
    if len(variance) == 0 or freedom.sum() < _FEWEST:
        raise Unreadable("no flat patch clear of clipping is large enough")
    usual = float(np.median(variance))
    floor = frame.code_step**2 / 12.0
    kept = (variance <= max(_TOO_MUCH * usual, 2.0 * floor)) & (variance >= _TOO_LITTLE * usual)
    variance, freedom, rows, between = (part[kept] for part in (variance, freedom, rows, between))
    total = float((variance * freedom).sum() / freedom.sum())
    expected = total * np.sqrt(2.0 / freedom.sum())
    scatter = np.sqrt((freedom**2 * (variance - total) ** 2).sum()) / freedom.sum()
    gathering = float((between * rows).sum() / rows.sum() / max(total, 1e-12))
    own = _without_coding(frame, [cores.levels for cores in seen], total)
    return Noise(max(total, floor, 1e-6), float(max(expected, scatter)), own, float(np.clip(gathering, 1.0, 50.0)))


def coding_noise(frame: Frame) -> Noise:
    """Noise of coding alone, for a frame whose own cannot be read."""
    coding = max(frame.code_step**2 / 12.0, 1e-6)
    return Noise(coding, 0.0, coding, 1.0)


def _area_variances(cores: Cores, frame: Frame) -> tuple[Array, Array, Array, Array]:
    """Variance in each area clear of the coding range's ends.

    Returns
    -------
    variance, freedom, rows, between : (n,) arrays
        Variance and its degrees of freedom; degrees of freedom and variance of the line means, the latter
        scaled to one sample.
    """
    margin = 1.5 * frame.code_step
    levels = cores.levels
    clear = levels.min((1, 2)) > frame.code_floor + margin
    clear &= levels.max((1, 2)) < frame.code_ceiling - margin
    levels = levels[clear]
    count, tall, wide = levels.shape
    line = levels.mean(2, dtype=np.float64)
    rest = levels - levels.mean(1, keepdims=True)
    power = np.einsum("nij,nij->n", rest, rest).astype(np.float64)
    basis = _row_basis(tall)
    level = line - line.mean(1, keepdims=True)
    fitted = ((level @ basis) ** 2).sum(1) * wide
    freedom = tall * wide - wide - basis.shape[1]
    spare = tall - 1 - basis.shape[1]
    between = (wide * (level**2).sum(1) - fitted) / max(spare, 1)
    variance = (power - fitted) / freedom
    return variance, np.full(count, float(freedom)), np.full(count, float(spare)), between


@lru_cache(maxsize=32)
def _row_basis(tall: int) -> Array:
    """Orthonormal columns over the rows: level and slope of each field, without the common level."""
    at = np.arange(tall)
    slope = (at - at.mean()) / tall
    odd = (at % 2) - (at % 2).mean()
    raw = np.stack([odd, slope, slope * (2.0 * (at % 2) - 1.0)], 1)[:, : 3 if tall >= 10 else 1]
    return np.asarray(np.linalg.qr(raw - raw.mean(0))[0])


def _without_coding(frame: Frame, blocks: list[Array], variance: float) -> float:
    """Variance of the noise itself; never less than coding noise would be taken for, IRE squared."""
    step = frame.code_step
    coding = step**2 / 12.0 / frame.averaged
    if step == 0 or frame.averaged > 1 or variance > step**2:
        return max(variance - coding, coding, 1e-6)
    at = np.concatenate([_between_codes(levels, frame).ravel() for levels in blocks])
    first, second = float(np.cos(2 * np.pi * at).mean()), float(np.cos(4 * np.pi * at).mean())
    rms = _TRIALS
    fade = np.exp(-2.0 * np.pi**2 * rms**2)
    added = 1 / 12 - fade * first * (1 / np.pi**2 + 4 * rms**2)
    added += fade**4 * second * (1 / (4 * np.pi**2) + 4 * rms**2) - fade**2 * (1 - second) / (2 * np.pi**2)
    seen = np.maximum.accumulate(rms**2 + added)
    found = float(np.interp(variance / step**2, seen, rms)) * step
    return max(found**2, coding)


def _between_codes(levels: Array, frame: Frame) -> Array:
    """Where the level under the noise lies between codes, in steps."""
    smooth = levels.mean(1, keepdims=True) + levels.mean(2, keepdims=True) - levels.mean((1, 2), keepdims=True)
    return np.asarray((smooth - frame.code_floor) / frame.code_step)
