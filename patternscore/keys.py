"""The readings of a card, in order: group, unit, how they are printed, and what they mean."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

GROUPS = ("resolution", "foldback", "geometry", "levels", "stability")


@dataclass(frozen=True, slots=True)
class Key:
    """One entry of the card contract.

    Attributes
    ----------
    decimals : int
        Decimals in print.
    better : {"high", "low", "near"}
        Which way is better; "near" where a target in the limits decides.
    """

    name: str
    group: str
    unit: str
    decimals: int
    better: str
    meaning: str


def _group(group: str, *rows: tuple[str, str, int, str, str]) -> list[Key]:
    return [Key(name, group, unit, decimals, better, text) for name, unit, decimals, better, text in rows]


_KEYS = [
    *_group(
        "resolution",
        ("mtf50_h", "MHz", 2, "high", "frequency at which the response along the line is 50 %"),
        ("mtf10_h", "MHz", 2, "high", "frequency at which the response along the line is 10 %"),
        ("mtf50_h_tvl", "TVL/PH", 0, "high", "mtf50_h in TV lines per picture height"),
        ("mtf10_h_tvl", "TVL/PH", 0, "high", "mtf10_h in TV lines per picture height: limiting resolution"),
        ("mtf50_v", "TVL/PH", 0, "high", "response across the lines falls to 50 %"),
        ("mtf10_v", "TVL/PH", 0, "high", "response across the lines falls to 10 %"),
        ("bandwidth_h", "MHz", 2, "high", "-3 dB point along the line"),
        *((f"response_{n}mhz", "dB", 2, "near", f"response at {n} MHz re low frequency") for n in range(1, 6)),
        ("flatness", "dB", 2, "low", "largest departure from 0 dB, 0.5 MHz to the luma bandwidth"),
        ("rise_time", "ns", 0, "low", "10-90 % of an edge"),
        ("overshoot", "%", 1, "low", "of the step, after the edge"),
        ("preshoot", "%", 1, "low", "of the step, before the edge"),
        ("ringing", "MHz", 2, "high", "frequency of the damped oscillation after the edge"),
        ("corner_loss", "%", 1, "low", "mean mtf50_h of the corners below that of the centre"),
    ),
    *_group(
        "foldback",
        ("fold_left", "us", 2, "low", "active line time over which the beam runs backwards, left"),
        ("fold_right", "us", 2, "low", "the same at the right"),
        ("fold_top", "lines", 1, "low", "the same for the field scan, top"),
        ("fold_bottom", "lines", 1, "low", "the same at the bottom"),
        ("crush_left", "%", 1, "near", "scan speed lost in the outermost 5 %, left"),
        ("crush_right", "%", 1, "near", "the same at the right"),
        ("crush_top", "%", 1, "near", "the same at the top"),
        ("crush_bottom", "%", 1, "near", "the same at the bottom"),
    ),
    *_group(
        "geometry",
        ("linearity_h", "%", 2, "low", "half the spread of local scan speed along the line"),
        ("linearity_v", "%", 2, "low", "half the spread of local scan speed down the field"),
        ("position_error", "% of PH", 2, "low", "largest distance of a crossing from the best ideal grid"),
        ("rotation", "degrees", 2, "near", "turn of the picture, clockwise positive"),
        ("skew", "degrees", 2, "near", "departure of the verticals from a right angle"),
        ("trapezoid_h", "%", 2, "near", "width at the bottom less width at the top"),
        ("trapezoid_v", "%", 2, "near", "height at the right less height at the left"),
        ("bow_h", "%", 2, "near", "bulge of the left and right sides; negative is pincushion"),
        ("bow_v", "%", 2, "near", "bulge of top and bottom"),
        ("width", "%", 1, "near", "of the nominal raster"),
        ("height", "%", 1, "near", "of the nominal raster"),
        ("centre_h", "%", 1, "near", "picture right of centre"),
        ("centre_v", "%", 1, "near", "picture below centre"),
        ("aspect_error", "%", 2, "near", "width over height against 4:3"),
        ("blank_left", "us", 2, "low", "blanking seen before the picture"),
        ("blank_right", "us", 2, "low", "blanking seen after the picture"),
    ),
    *_group(
        "levels",
        ("black_level", "IRE", 1, "near", "level of the darkest reference patch"),
        ("white_level", "IRE", 1, "near", "level of the lightest reference patch"),
        ("black_crush", "IRE", 1, "low", "nominal level below which steps no longer differ"),
        ("white_crush", "IRE", 1, "high", "nominal level above which steps no longer differ"),
        ("steps_lost", "count", 0, "low", "grey steps that cannot be told from a neighbour"),
        ("gamma", "1", 2, "near", "exponent of measured level against nominal"),
        ("clipped_black", "%", 2, "low", "of samples piled up at the lowest code"),
        ("clipped_white", "%", 2, "low", "of samples piled up at the highest code"),
        ("tilt_line", "%", 2, "near", "slope of a flat field along the line"),
        ("tilt_field", "%", 2, "near", "slope of a flat field down the field"),
    ),
    *_group(
        "stability",
        ("noise", "dB", 1, "high", "peak white to rms noise"),
        ("jitter", "ns", 1, "low", "line-to-line timing error, rms"),
        ("hum", "%", 2, "low", "amplitude of bars at mains rate"),
        ("bounce", "%", 2, "low", "change of level between frames, rms"),
        ("wander", "ns", 1, "low", "shift along the line between frames, rms"),
    ),
]
KEYS = {key.name: key for key in _KEYS}


def group_of(name: str) -> str:
    """Group of a reading."""
    return KEYS[name].group


def keys_of(group: str) -> list[Key]:
    """Entries of a group, in order."""
    return [key for key in _KEYS if key.group == group]


def meant(word: str, known: Iterable[str]) -> str:
    """Guess which of the known words was meant: those that begin with it, else the one spelt most alike."""
    from difflib import get_close_matches

    known = list(known)
    begun = [each for each in known if word and each.startswith(word)]
    if close := begun or get_close_matches(word, known, n=1):
        return f"did you mean {' or '.join(close[:3])}?"
    return f"known are {', '.join(known[:6])}{' ...' if len(known) > 6 else ''}"
