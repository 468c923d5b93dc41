"""Response curves and edge shape of a whole chain along the line, worked out finely."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.responses import Response, cascade, gaussian_spot, pole_pairs
from patternscore.chain.settings import Chain

Array = npt.NDArray[Any]
_POINTS, _STEP_US = 2**17, 0.001
_REACH = round(10.0 / _STEP_US)  # after and before the edge
_RINGS_BELOW = 0.5  # damping


def total_response(chain: Chain, speed: float = 1.0) -> Response:
    """Response along the line of spot, electrical stages and grabber together.

    Parameters
    ----------
    speed : float
        Scan speed where it is wanted, 1 = nominal: the faster the beam, the shorter the spot lasts.
    """
    limit = (chain.band_limit,) if chain.band_limit is not None else ()
    return cascade((gaussian_spot(chain.spot_us / speed), *chain.response, *limit))


def step_response(response: Response) -> tuple[Array, Array]:
    """Response to a unit step at time 0.

    Returns
    -------
    times, levels : (n,) float64
        us, and 0 to 1 from plateau to plateau.
    """
    frequency = np.fft.rfftfreq(_POINTS, _STEP_US)
    impulse = np.roll(np.fft.irfft(response(frequency), _POINTS), _POINTS // 2)
    # The step is the running sum; a sample's own weight is spread half before and half after its instant.
    levels = np.cumsum(impulse) - impulse / 2
    return (np.arange(_POINTS) - _POINTS // 2) * _STEP_US, levels


def delay_us(response: Response) -> float:
    """Time at which the response to a step first reaches half its height."""
    times, levels = step_response(response)
    return _when(times, levels, int(np.argmax(levels >= 0.5)), 0.5)


def resolution(chain: Chain, response: Response) -> dict[str, float]:
    """Readings of the resolution group along the line."""
    frequency = np.linspace(0.0, 20.0, 40_001)
    gain = np.abs(response(frequency))
    known = {}
    for key, level in (("mtf50_h", 0.5), ("mtf10_h", 0.1), ("bandwidth_h", 10 ** (-3 / 20))):
        below = np.nonzero(gain < level)[0]
        if len(below):
            known[key] = _when(frequency, gain, int(below[0]), level)
    for key in ("mtf50_h", "mtf10_h"):
        if key in known:
            known[f"{key}_tvl"] = chain.standard.tvl_from_mhz(known[key])
    decibel = 20 * np.log10(np.maximum(gain, 1e-12))
    for mhz in range(1, 6):
        known[f"response_{mhz}mhz"] = float(np.interp(mhz, frequency, decibel))
    band = (frequency >= 0.5) & (frequency <= chain.standard.luma_mhz)
    known["flatness"] = float(np.max(np.abs(decibel[band])))
    return known | _edge_shape(response) | _ringing(chain)


def _edge_shape(response: Response) -> dict[str, float]:
    times, levels = step_response(response)
    middle = int(np.argmax(levels >= 0.5))
    start = middle - int(np.argmax(levels[middle::-1] <= 0.1)) + 1  # first sample above 10 %
    end = middle + int(np.argmax(levels[middle:] >= 0.9))
    return {
        "rise_time": 1e3 * (_when(times, levels, end, 0.9) - _when(times, levels, start, 0.1)),
        "overshoot": 100.0 * max(float(levels[middle : middle + _REACH].max()) - 1.0, 0.0),
        "preshoot": 100.0 * max(-float(levels[max(middle - _REACH, 0) : middle].min()), 0.0),
    }


def _when(places: Array, levels: Array, after: int, level: float) -> float:
    """Place at which a level is passed between the point ``after`` and the one before it."""
    part = (level - levels[after - 1]) / (levels[after] - levels[after - 1])
    return float(places[after - 1] + part * (places[after] - places[after - 1]))


def _ringing(chain: Chain) -> dict[str, float]:
    """Frequency of the oscillation where one pole pair, and no other, rings below the grabber's limit."""
    ringing = [pair for pair in pole_pairs(chain.response) if pair.damping <= _RINGS_BELOW]
    if len(ringing) != 1 or ringing[0].damped_mhz > chain.standard.luma_mhz:
        return {}
    return {"ringing": ringing[0].damped_mhz}
