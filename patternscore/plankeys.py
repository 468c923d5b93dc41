"""Keys and types of a plan's TOML: what is wrong with them, said so that a person can mend it."""

from __future__ import annotations

import re
from dataclasses import MISSING, fields, is_dataclass
from difflib import get_close_matches
from types import UnionType
from typing import Any, Literal, get_args, get_origin, get_type_hints

from patternscore.files import shown
from patternscore.plan import Burst, Edge, Grid, Mark, Patch, Plan, Rect, Ruler
from patternscore.tomlfile import Place

# Sections of a plan: what they hold, what one entry is called, and which of its keys names it.
SECTIONS: dict[str, tuple[type, str, str]] = {
    "edges": (Edge, "edge", "name"),
    "grid": (Grid, "grid", ""),
    "steps": (Patch, "step", "name"),
    "flats": (Patch, "flat patch", "name"),
    "field": (Patch, "field patch", "name"),
    "rulers": (Ruler, "ruler", "side"),
    "bursts": (Burst, "burst", ""),
    "marks": (Mark, "mark", ""),
}
_LONGEST = 40  # letters of a value shown


class Fault(Exception):
    """What is wrong in a plan, and where: the way to the entry, such as ("edges", 3, "axis")."""

    def __init__(self, place: Place, message: str) -> None:
        super().__init__(message)
        self.place = place
        self.message = message


def check_keys(table: dict[str, Any]) -> None:
    """Refuse keys that mean nothing, with the one that may have been meant.

    Raises
    ------
    Fault
    """
    _check_keys(table, Plan, ())
    for section, (kind, _, _) in SECTIONS.items():
        entries = table.get(section, [])
        for number, entry in enumerate(entries if isinstance(entries, list) else []):
            if isinstance(entry, dict):
                _check_keys(entry, kind, (section, number))
        if isinstance(entries, dict):
            _check_keys(entries, kind, (section,))


def _check_keys(entry: dict[str, Any], kind: type, place: Place) -> None:
    known = [field.name for field in fields(kind)]
    for key in entry:
        if key not in known:
            close = get_close_matches(key, known, n=1, cutoff=0.4)
            hint = f"did you mean {close[0]}?" if close else f"known are {', '.join(known)}"
            raise Fault((*place, key), f"{shown(key)[:_LONGEST]} means nothing here; {hint}")


def prepared(table: dict[str, Any]) -> dict[str, Any]:
    """Content of a plan with rectangles and rows of bits as the data classes have them.

    Raises
    ------
    Fault
        When bits are no row of 0 and 1.
    """
    return {
        section: [_entry(item, (section, number), table) for number, item in enumerate(value)]
        if isinstance(value, list)
        else value
        for section, value in table.items()
    }


def _entry(item: Any, place: Place, table: dict[str, Any]) -> Any:
    if not isinstance(item, dict):
        return item
    changed = dict(item)
    rect = item.get("rect")
    if isinstance(rect, list) and len(rect) == 4:
        changed["rect"] = dict(zip(("x0", "y0", "x1", "y1"), rect, strict=True))
    if "bits" in item:
        bits = item["bits"]
        if not (isinstance(bits, str) and re.fullmatch("[01]+", bits)):
            raise Fault((*place, "bits"), f'{called(place, table)} has bits {_text(bits)}; write bits = "0110..."')
        changed["bits"] = [bit == "1" for bit in bits]
    return changed


def called(place: Place, holder: dict[str, Any] | Plan) -> str:
    """What a person would call an entry: edge "left 1", burst 3, grid."""
    if not place or place[0] not in SECTIONS:
        return "the plan"
    _, word, naming = SECTIONS[str(place[0])]
    if len(place) < 2 or not isinstance(place[1], int):
        return word if place[0] == "grid" else str(place[0])
    entries = holder.get(place[0]) if isinstance(holder, dict) else getattr(holder, str(place[0]))
    entry = entries[place[1]] if isinstance(entries, list | tuple) else None
    name = entry.get(naming) if isinstance(entry, dict) else getattr(entry, naming or "axis", None)
    return f"{word} {_text(name)}" if naming and isinstance(name, str) and name else f"{word} {place[1] + 1}"


def fault_of(error: str, table: dict[str, Any]) -> Fault:
    """Say in a person's words what the conversion found, from the way to it that stands at its end."""
    way = error.partition(" - at `$")[2].rstrip("`")
    place: Place = tuple(int(part[1:-1]) if part[0] == "[" else part[1:] for part in re.findall(r"\.\w+|\[\d+\]", way))
    kind, value = _kind_at(place), _value_at(place, table)
    what = called(place, table)
    if is_dataclass(kind) and isinstance(value, dict):
        lacking = [field for field in fields(kind) if field.name not in value and field.default is MISSING]
        if lacking:
            name = lacking[0].name
            return Fault(place, f"{what} lacks {name}; add {name} = {_wanted(_kind_at((*place, name)))}")
    inside = place if what == "the plan" else place[2:] if isinstance(place[1:2] and place[1], int) else place[1:]
    key = "".join(f"[{part}]" if isinstance(part, int) else f" {part}" for part in inside).strip()
    return Fault(place, f"{what} {f'has {key}' if key else 'is'} {_text(value)}; write {_wanted(kind)}")


def _kind_at(place: Place) -> Any:
    kind: Any = Plan
    for part in place:
        if is_dataclass(kind):
            kind = get_type_hints(kind).get(str(part), Any)
        elif get_origin(kind) is tuple:
            kinds = get_args(kind)
            kind = kinds[0] if Ellipsis in kinds else kinds[int(part)]
        if get_origin(kind) is UnionType:
            kind = get_args(kind)[0]
    return kind


def _value_at(place: Place, table: Any) -> Any:
    value = table
    for part in place:
        if isinstance(value, list) and part in ("x0", "y0", "x1", "y1"):  # a rectangle, given as four numbers
            part = ("x0", "y0", "x1", "y1").index(str(part))
        try:
            value = value[part]
        except (KeyError, IndexError, TypeError):
            return None
    return value


def _wanted(kind: Any) -> str:
    if get_origin(kind) is Literal:
        *first, last = (f'"{choice}"' for choice in get_args(kind))
        return f"{', '.join(first)} or {last}"
    if kind is Rect:
        return "[x0, y0, x1, y1]"
    if get_origin(kind) is tuple:
        inner = get_args(kind)
        if Ellipsis in inner:
            return "entries headed [[...]] or a list" if is_dataclass(inner[0]) else "a list in brackets"
        return f"{len(inner)} numbers in brackets"
    if is_dataclass(kind):
        return "a table of its keys"
    return {float: "a number", int: "a whole number", str: "a text in quotes"}.get(kind, "a value that fits")


def _text(value: Any) -> str:
    """Show a value as it stands in a TOML file, cut where it is long."""
    if isinstance(value, bool):
        return str(value).lower()
    text = shown(f'"{value}"' if isinstance(value, str) else str(value).replace("'", '"'))
    return text if len(text) <= _LONGEST else text[: _LONGEST - 3] + "..."
