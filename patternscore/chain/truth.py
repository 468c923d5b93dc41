"""What the card of a chain ought to say, from its settings alone."""

from __future__ import annotations

from itertools import pairwise
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.responses import Response, cascade
from patternscore.chain.settings import Chain
from patternscore.chain.sweep import Sweep

Array = npt.NDArray[Any]
_STEP_POINTS, _STEP_US = 2**17, 0.001


def truth(chain: Chain) -> dict[str, float]:
    """Known values, by card key; a key whose value does not follow from the settings is left out."""
    known = _resolution(chain) | _across(chain) | _geometry(chain) | _levels(chain)
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    known |= _sweep_truth(chain.sweep_h, chain.standard.active_us, ("left", "right", "h", "width"), 16)
    known |= _sweep_truth(chain.sweep_v, raster.height_lines, ("top", "bottom", "v", "height"), 12)
    if chain.noise_db is not None:
        known["noise"] = chain.noise_db
    return known | {"jitter": chain.jitter_ns, "hum": chain.hum_percent}


def total_response(chain: Chain) -> Response:
    """Response along the line of spot, electrical stages and grabber together."""
    spot = _Spot(chain.spot_us)
    limit = (chain.band_limit,) if chain.band_limit is not None else ()
    return cascade((spot, *chain.response, *limit))


class _Spot:
    def __init__(self, sigma_us: float) -> None:
        self.sigma_us = sigma_us

    def __call__(self, f: Array) -> Array:
        return np.exp(-2.0 * (np.pi * f * self.sigma_us) ** 2)


def step_response(response: Response) -> tuple[Array, Array]:
    """Response to a unit step at time 0.

    Returns
    -------
    times, levels : (n,) float64
        us, and 0 to 1 from plateau to plateau.
    """
    frequency = np.fft.rfftfreq(_STEP_POINTS, _STEP_US)
    impulse = np.roll(np.fft.irfft(response(frequency), _STEP_POINTS), _STEP_POINTS // 2)
    # The step is the running sum; a sample's own weight is spread half before and half after its instant.
    levels = np.cumsum(impulse) - impulse / 2
    return (np.arange(_STEP_POINTS) - _STEP_POINTS // 2) * _STEP_US, levels


def _falls_to(frequency: Array, gain: Array, level: float) -> float | None:
    below = np.nonzero(gain < level)[0]
    if not len(below) or below[0] == 0:
        return None
    last = below[0]
    part = (gain[last - 1] - level) / (gain[last - 1] - gain[last])
    return float(frequency[last - 1] + part * (frequency[last] - frequency[last - 1]))


def _resolution(chain: Chain) -> dict[str, float]:
    response = total_response(chain)
    frequency = np.linspace(0.0, 20.0, 40_001)
    gain = np.abs(response(frequency))
    found = {
        "mtf50_h": _falls_to(frequency, gain, 0.5),
        "mtf10_h": _falls_to(frequency, gain, 0.1),
        "bandwidth_h": _falls_to(frequency, gain, 10 ** (-3 / 20)),
    }
    known = {key: value for key, value in found.items() if value is not None}
    for key in ("mtf50_h", "mtf10_h"):
        if key in known:
            known[f"{key}_tvl"] = chain.standard.tvl_from_mhz(known[key])
    level = 20 * np.log10(np.maximum(gain, 1e-12))
    for mhz in range(1, 6):
        known[f"response_{mhz}mhz"] = float(np.interp(mhz, frequency, level))
    band = (frequency >= 0.5) & (frequency <= chain.standard.luma_mhz)
    known["flatness"] = float(np.max(np.abs(level[band])))
    return known | _edge_shape(response)


def _edge_shape(response: Response) -> dict[str, float]:
    times, levels = step_response(response)
    middle = int(np.argmax(levels >= 0.5))
    low = times[: middle + 1][::-1], levels[: middle + 1][::-1]
    start = _when(low[0], low[1] <= 0.1, low[1], 0.1)
    end = _when(times[middle:], levels[middle:] >= 0.9, levels[middle:], 0.9)
    reach = int(10.0 / _STEP_US)
    after, before = levels[middle : middle + reach], levels[max(middle - reach, 0) : middle]
    return {
        "rise_time": 1e3 * (end - start),
        "overshoot": 100.0 * max(float(after.max()) - 1.0, 0.0),
        "preshoot": 100.0 * max(-float(before.min()), 0.0),
    }


def _when(times: Array, reached: Array, levels: Array, level: float) -> float:
    at = int(np.argmax(reached))
    part = (level - levels[at - 1]) / (levels[at] - levels[at - 1])
    return float(times[at - 1] + part * (times[at] - times[at - 1]))


def _across(chain: Chain) -> dict[str, float]:
    """Response across the lines, from the spot alone."""
    if chain.spot_lines <= 0:
        return {}
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    scale = 2.0 * raster.height_lines / chain.sweep_v.size / (np.pi * chain.spot_lines)
    return {
        "mtf50_v": float(scale * np.sqrt(np.log(2.0) / 2.0)),
        "mtf10_v": float(scale * np.sqrt(np.log(10.0) / 2.0)),
    }


def _geometry(chain: Chain) -> dict[str, float]:
    names = ("rotation", "skew", "trapezoid_h", "trapezoid_v", "bow_h", "bow_v")
    return {name: float(getattr(chain, name)) for name in names}


def _sweep_truth(sweep: Sweep, duration: float, names: tuple[str, str, str, str], parts: int) -> dict[str, float]:
    start, end, letter, size = names
    times = np.linspace(sweep.fold_start, duration - sweep.fold_end, 40_001)
    place = sweep.position(times, duration)
    known = {f"fold_{start}": sweep.fold_start, f"fold_{end}": sweep.fold_end}

    def when(x: float) -> float | None:
        return float(np.interp(x, place, times)) if place[0] - 1e-9 <= x <= place[-1] + 1e-9 else None

    marks = [when(k / parts) for k in range(parts + 1)]
    spans = [b - a for a, b in pairwise(marks) if a is not None and b is not None]
    speeds = 1.0 / np.array(spans)
    known[f"linearity_{letter}"] = float(50.0 * (speeds.max() - speeds.min()) / speeds.mean())
    q1, q3 = when(0.25), when(0.75)
    if q1 is None or q3 is None:
        return known
    for side, a, b in ((start, when(0.0), when(0.05)), (end, when(0.95), when(1.0))):
        if a is not None and b is not None:
            known[f"crush_{side}"] = float(100.0 * (1.0 - (0.05 / (b - a)) / (0.5 / (q3 - q1))))
    first, last = marks[0], marks[-1]
    if first is not None and last is not None:
        known[size] = 100.0 * (last - first) / duration
        known[f"centre_{letter}"] = 100.0 * ((first + last) / 2 / duration - 0.5)
    return known


def _levels(chain: Chain) -> dict[str, float]:
    nominal = np.linspace(0.0, 100.0, 100_001)
    level = 100.0 * (nominal / 100.0) ** chain.gamma * chain.gain + chain.setup
    clipped = np.clip(level, chain.black_clip, chain.white_clip)
    held_low = nominal[(clipped > level) | (level <= clipped.min())]
    held_high = nominal[(clipped < level) | (level >= clipped.max())]
    return {
        "black_level": float(clipped[0]),
        "white_level": float(clipped[-1]),
        "black_crush": float(held_low.max()) if len(held_low) else 0.0,
        "white_crush": float(held_high.min()) if len(held_high) else 100.0,
        "gamma": chain.gamma,
        "tilt_line": chain.tilt_line,
        "tilt_field": chain.tilt_field,
    }
