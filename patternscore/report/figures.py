"""How figures are written: value, sigma, unit."""

from __future__ import annotations

import math

from patternscore.card import Marked
from patternscore.keys import KEYS


def decimals_for(key: str, sigma: float) -> int:
    """Decimals that a value deserves: the contract's, fewer where sigma is large."""
    decimals = KEYS[key].decimals
    while decimals > 0 and sigma >= 2.0 * 10.0 ** (1 - decimals):
        decimals -= 1
    return decimals


def value_text(key: str, value: float, sigma: float = 0.0) -> str:
    """Value as printed, without its unit; never "-0.0"."""
    text = f"{value:.{decimals_for(key, sigma)}f}"
    return text.lstrip("-") if float(text) == 0.0 else text


def sigma_text(key: str, sigma: float) -> str:
    """Sigma with as many decimals as the value, rounded up."""
    decimals = decimals_for(key, sigma)
    steps = math.ceil(sigma * 10.0**decimals - 1e-6)
    return f"{steps / 10.0**decimals:.{decimals}f}"


def unit_text(unit: str) -> str:
    """Unit as printed; a pure number has none."""
    return "" if unit in ("1", "count") else unit


def reading_text(marked: Marked) -> str:
    """Value, sigma and unit in one phrase."""
    key = marked.reading.key
    unit = unit_text(marked.unit)
    return f"{value_text(key, marked.value, marked.sigma)} +- {sigma_text(key, marked.sigma)} {unit}".rstrip()


def mark_text(score: float | None) -> str:
    """Marks as printed."""
    return "" if score is None else f"{score:.0f}"
