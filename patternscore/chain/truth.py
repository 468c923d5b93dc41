"""What the card of a chain ought to say, from its settings alone."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.curves import delay_us, resolution, total_response
from patternscore.chain.raster_truth import blanking, geometry, local_speeds, sweeps
from patternscore.chain.responses import gaussian_spot
from patternscore.chain.settings import Chain
from patternscore.standard import ire_from_code

Array = npt.NDArray[Any]
__all__ = ["truth"]


def truth(chain: Chain) -> dict[str, float]:
    """Known values, by card key.

    Parameters
    ----------
    chain : Chain
        Settings; those that differ from grab to grab count by their rms.

    Returns
    -------
    dict
        A key whose value does not follow from the settings is left out: what depends on the pattern
        (``steps_lost``, ``clipped_*``), and what the frame cannot show (``crush_left`` of a left edge that
        folds or lies outside). ``flatness`` and the like are those of spot, electrical stages and grabber
        together, at the scan speed of the picture's centre.

    Examples
    --------
    >>> from patternscore.chain import Chain, Sweep, responses, truth
    >>> known = truth(Chain(sweep_h=Sweep(size=0.95), response=(responses.second_order(3.0, 0.4),)))
    >>> [round(known[key], 2) for key in ("width", "mtf50_h", "overshoot", "ringing")]
    [95.0, 4.78, 26.31, 2.75]
    """
    speed_h, speed_v = local_speeds(chain)
    response = total_response(chain, speed_h)
    delay = delay_us(response)
    known = resolution(chain, response) | _across(chain, speed_v)
    known |= sweeps(chain, delay) | geometry(chain) | blanking(chain, delay)
    known |= _levels(chain) | _stability(chain)
    return known


def _across(chain: Chain, speed: float) -> dict[str, float]:
    """Response across the lines, which is that of the spot alone."""
    if chain.spot_lines <= 0:
        return {}
    raster = chain.standard.raster(chain.lines, chain.samples, chain.sample_rate)
    spot = gaussian_spot(chain.spot_lines / speed)  # in cycles per line
    scale = 2.0 * raster.height_lines
    return {"mtf50_v": scale * spot.falls_to(0.5), "mtf10_v": scale * spot.falls_to(0.1)}


def _levels(chain: Chain) -> dict[str, float]:
    nominal = np.linspace(0.0, 100.0, 100_001)
    level = 100.0 * (nominal / 100.0) ** chain.gamma * chain.gain + chain.setup
    clipped = np.clip(level, *_ends(chain))
    low, high = nominal[clipped > level], nominal[clipped < level]
    return {
        "black_level": float(clipped[0]),
        "white_level": float(clipped[-1]),
        "black_crush": float(low[-1]) if len(low) else 0.0,
        "white_crush": float(high[0]) if len(high) else 100.0,
        "gamma": chain.gamma,
        "tilt_line": chain.tilt_line,
        "tilt_field": chain.tilt_field,
    }


def _ends(chain: Chain) -> tuple[float, float]:
    """Lowest and highest level that clipping and coding let through, IRE."""
    low = -np.inf if chain.black_clip is None else chain.black_clip
    high = np.inf if chain.white_clip is None else chain.white_clip
    if chain.bits is not None:
        low = max(low, float(ire_from_code(0.0, chain.levels, chain.bits)))
        high = min(high, float(ire_from_code(2.0**chain.bits - 1.0, chain.levels, chain.bits)))
    return low, high


def _stability(chain: Chain) -> dict[str, float]:
    known = {"jitter": chain.jitter_ns, "hum": chain.hum_percent, "wander": chain.wander_ns}
    known["bounce"] = chain.bounce_percent * (chain.gain + chain.setup / 100.0)  # of white, where it is largest
    if chain.noise_db is not None:
        known["noise"] = chain.noise_db
    return known
