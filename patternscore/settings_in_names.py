"""The setting of a knob, read from a frame's file name: ``07_peaking_18pF.png`` is 18 pF of peaking."""

from __future__ import annotations

import re
import unicodedata
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, replace

_EXPONENTS = {"p": -12, "n": -9, "u": -6, "m": -3, "": 0, "k": 3, "M": 6}
_PREFIXES = {"F": "pnum", "H": "num ", "V": "um k", "A": "um ", "s": "num ", "Hz": " kM", "ohm": " kM"}
_OTHERS = {
    "dB": (), "IRE": (), "mm": (), "%": ("percent", "pct"), "turns": ("turn",), "steps": ("step",),
    "degrees": ("degree", "deg", "°"), "clicks": ("click",), "lines": ("line",),
}  # fmt: skip
_OHMS = {"ohms": "ohm", "R": "ohm", "k": "kohm", "M": "Mohm"}
_SHORT = {"p": "pF", "n": "nF", "u": "uF", **_OHMS}  # as written on parts
_COUNTED = {"step", "frame", "grab", "take", "retake", "img", "image", "capture", "shot", "run", "page", "no", "nr"}
_STANDARDS = ("525", "625")
_PICTURE_LINES = ("240p", "288p", "480p", "486p", "576p", "720p", "1080p")
_NUMBER = r"[+-]?(?:[0-9]+(?:[.,][0-9]+)?|[.,][0-9]+)"
_DATE = r"(?<!\d)(?:19|20)\d\d-?[01]\d-?[0-3]\d(?:[T_ -]?\d\d[-.:]?\d\d[-.:]?\d\d)?(?!\d)"
_SUFFIX = r"\.[A-Za-z][A-Za-z0-9]{1,4}(?: page \d+)?$"


@dataclass(frozen=True, slots=True)
class Setting:
    """A number with its unit (empty where none is written) and the knob's name (empty likewise)."""

    number: float
    unit: str
    knob: str

    def __str__(self) -> str:
        return f"{self.number:g} {self.unit}".rstrip()


def _spellings() -> dict[str, str]:
    """Units by all their spellings."""
    units = [(prefix + base).strip() for base, prefixes in _PREFIXES.items() for prefix in prefixes]
    exact = dict(zip(units, units, strict=True)) | _OHMS | {"kohms": "kohm", "Mohms": "Mohm", "sec": "s"}
    for unit, others in _OTHERS.items():
        exact |= dict.fromkeys((unit, *others), unit)
    return exact


def _in_any_case(exact: dict[str, str]) -> dict[str, str]:
    """Spellings in small letters where these leave no doubt (m may be a thousandth or a million)."""
    folded: dict[str, set[str]] = {}
    for spelling, unit in exact.items():
        folded.setdefault(spelling.lower(), set()).add(unit)
    doubtful = ("m", "mohm", "mohms")
    return {low: units.pop() for low, units in folded.items() if len(units) == 1 and low not in doubtful}


_UNITS = _spellings()
_LOOSE_UNITS = _in_any_case(_UNITS)


def _unit(word: str) -> str | None:
    return _UNITS.get(word) or _LOOSE_UNITS.get(word.lower())


def setting_in_name(name: str) -> Setting | None:
    """Find the setting that a file name tells, or None.

    Parameters
    ----------
    name : str
        File name, with or without its suffix. A number at its start is the step's index and no setting.

    Returns
    -------
    Setting or None
        The first number with a unit; else the first that follows a word. Resistances are in ohm ("4k7" is
        4700 ohm), other units as written ("12p" is 12 pF).
    """
    found = all_settings(name)
    return next((setting for setting in found if setting.unit), found[0] if found else None)


def settings_in_names(names: Sequence[str]) -> list[Setting | None]:
    """Find the setting of each frame of a run, all of one knob and in one unit where they can be.

    Where names tell several settings, it is the one that changes from frame to frame.
    """
    told = [all_settings(name) for name in names]
    kinds = list(dict.fromkeys(_kind(setting) for settings in told for setting in settings))
    if not kinds:
        return [None] * len(names)

    def worth(kind: tuple[str, str]) -> tuple[int, int, bool]:
        values = [_in_base(setting) for settings in told for setting in settings if _kind(setting) == kind]
        return len(set(values)), len(values), bool(kind[1])

    best = max(kinds, key=worth)
    chosen = [next((setting for setting in settings if _kind(setting) == best), None) for settings in told]
    return [one or setting_in_name(name) for one, name in zip(_in_one_unit(chosen), names, strict=True)]


def all_settings(name: str) -> list[Setting]:
    """All numbers of a file name that can be settings, in their order."""
    words = _words(name)
    if len(words) > 1 and words[0].isdigit() and (words[0][0] == "0" or _unit(words[1]) is None):
        words = words[1:]
    found: list[Setting] = []
    knob: list[str] = []
    taken = False
    for word, following in zip(words, [*words, ""][1:], strict=True):
        if taken:  # the unit of the number before
            taken = False
            continue
        own, quantity = _quantity(word)
        if quantity is None and re.fullmatch(_NUMBER, word):
            unit = None if following in _SHORT else _unit(following)
            taken = unit is not None
            if taken or (knob and not _counts(knob[-1]) and word not in _STANDARDS):
                quantity = _number(word), unit or ""
        if quantity is None:
            knob.append(word)
            continue
        found.append(Setting(*_ohms(*quantity), _knob([*knob, own])))
        knob = []
    return found


def _words(name: str) -> list[str]:
    text = unicodedata.normalize("NFKC", re.sub(_SUFFIX, "", name))
    for old, new in (("\u2212", " -"), ("\u03bc", "u"), ("\u03a9", "ohm")):  # minus, micro, ohm
        text = text.replace(old, new)
    text = re.sub(_DATE, " ", text)
    text = re.sub(r"(?<=[^\W_])-|(?<=%)-|[_\s=()\[\]{};@#&~!]", " ", text)  # a minus sign follows no letter or digit
    text = re.sub(r"(?<=[^\W_])\+", " +", text)
    return re.sub(r"(?<=\D)[.,](?=\d)(?<! [.,])|[.,](?!\d)", " ", " " + text).split()


def _quantity(word: str) -> tuple[str, tuple[float, str] | None]:
    """Knob's name written before a quantity in one word, if any, and the quantity with its unit."""
    if word in _PICTURE_LINES:
        return "", None
    match = re.fullmatch(rf"([^\W\d_]*)({_NUMBER})([^\W\d_]+|%|°)", word)
    unit = (_SHORT.get(match[3]) or _unit(match[3])) if match else None
    if match and unit:
        return match[1], (_number(match[2]), unit)
    match = re.fullmatch(r"([^\W\d_]*?)([+-]?\d{1,3})([pnumkKMRV])(\d{1,2})(F|H|V|ohms?)?", word)
    if match is None or (len(match[2]) > 2 and match[3] in "pnu"):
        return "", None
    letter = "k" if match[3] == "K" else match[3]
    base = match[5] or {"V": "V", "R": "ohm", "k": "ohm", "M": "ohm", "m": ""}.get(letter, "F")
    unit = _UNITS.get(base if letter in "VR" else letter + base)
    return match[1], (float(f"{match[2]}.{match[4]}"), unit) if unit else None


def _number(text: str) -> float:
    return float(text.replace(",", "."))


def _ohms(number: float, unit: str) -> tuple[float, str]:
    """Resistances in ohm, so that 820R, 4k7 and 1M can be put in order."""
    if unit not in ("kohm", "Mohm"):
        return number, unit
    return _tidy(number * 10.0 ** _EXPONENTS[unit[0]]), "ohm"


def _knob(words: list[str]) -> str:
    return " ".join(word for word in words if word and not _counts(word))


def _counts(word: str) -> bool:
    """Whether a word only tells which frame it is: a number, "step", "take2"."""
    return word.lower().rstrip("0123456789") in ("", *_COUNTED)


def _split(unit: str) -> tuple[str, str]:
    """Prefix and base of a unit."""
    for base, prefixes in _PREFIXES.items():
        if unit.endswith(base) and (unit[: -len(base)] or " ") in prefixes:
            return unit[: -len(base)], base
    return "", unit


def _kind(setting: Setting) -> tuple[str, str]:
    return setting.knob.lower(), _split(setting.unit)[1]


def _in_base(setting: Setting) -> float:
    return _tidy(setting.number * 10.0 ** _EXPONENTS[_split(setting.unit)[0]])


def _tidy(number: float) -> float:
    """Number without the last digits that a change of unit leaves behind."""
    return float(f"{number:.9g}")


def _in_one_unit(settings: list[Setting | None]) -> list[Setting | None]:
    """Rescale settings of one base to the unit that most of them have."""
    units = Counter(setting.unit for setting in settings if setting is not None)
    if len(units) < 2:
        return settings
    unit = units.most_common(1)[0][0]
    power = _EXPONENTS[_split(unit)[0]]
    return [
        setting if setting is None else replace(setting, number=_tidy(_in_base(setting) * 10.0**-power), unit=unit)
        for setting in settings
    ]
