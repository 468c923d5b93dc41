"""The setting of a knob, read from a frame's file name: ``07_peaking_18pF.png`` is 18 pF of peaking."""

from __future__ import annotations

import re
from dataclasses import dataclass
from pathlib import PurePath

_PREFIXES = ("", "p", "n", "u", "µ", "m", "k", "M")
_BASES = ("F", "H", "ohms", "ohm", "R", "Ω", "V", "A", "Hz", "s")
_WHOLE = (
    "dB",
    "IRE",
    "%",
    "percent",
    "turns",
    "turn",
    "steps",
    "step",
    "degrees",
    "deg",
    "clicks",
    "mm",
    "lines",
)
_NUMBER = r"[+-]?(?:\d+(?:\.\d+)?|\.\d+)"


@dataclass(frozen=True, slots=True)
class Setting:
    """A number with its unit (empty where none is written) and the knob's name (empty likewise)."""

    number: float
    unit: str
    knob: str

    def __str__(self) -> str:
        return f"{self.number:g} {self.unit}".rstrip()


def setting_in_name(name: str) -> Setting | None:
    """Find the setting that a file name tells, or None.

    A word of digits at the start is the step's index and no setting. "4k7" reads 4.7 k, "1M" 1 M; a
    number without a unit counts only where a word stands before it.
    """
    words = [word for word in re.split(r"[_\s]+|-(?=[^\d.])", PurePath(name).stem) if word]
    if words and words[0].isdigit():
        words = words[1:]
    for at in range(len(words) - 1, -1, -1):
        found = _quantity(words[at], words[at + 1] if at + 1 < len(words) else "")
        if found is None:
            continue
        number, unit = found
        knob = " ".join(word for word in words[:at] if not word.isdigit())
        if unit or (knob and knob.lower() not in ("step", "frame", "grab", "img", "image", "capture")):
            return Setting(number, unit, knob)
    return None


def _quantity(word: str, following: str) -> tuple[float, str] | None:
    coded = re.fullmatch(r"(\d+)([RkM])(\d+)", word)
    if coded:
        whole, prefix, part = coded.groups()
        return float(f"{whole}.{part}"), "ohm" if prefix == "R" else f"{prefix}ohm"
    match = re.fullmatch(rf"({_NUMBER})(\D*)", word)
    if not match:
        return None
    number, unit = float(match[1]), match[2]
    if not unit and _is_unit(following):
        unit = following
    if unit and not _is_unit(unit):
        return None
    return number, unit


def _is_unit(word: str) -> bool:
    if word in _WHOLE or word in ("k", "M", "p", "n", "u"):
        return True
    return any(word.endswith(base) and word[: -len(base)] in _PREFIXES for base in _BASES)
