"""Plans as TOML files that a person can read and correct."""

from __future__ import annotations

import json
from collections.abc import Sequence
from dataclasses import asdict, fields
from pathlib import Path
from textwrap import fill
from typing import Any

import msgspec

from patternscore.errors import UsageError
from patternscore.files import shown
from patternscore.plan import Plan, Rect
from patternscore.plancheck import check_sense
from patternscore.plankeys import Fault, check_keys, fault_of, prepared
from patternscore.tomlfile import lines_of, parse, read_toml

_HEAD = """\
# Where the features of a test pattern lie. Places are fractions of the active picture: x from 0 at its left
# edge to 1 at its right, y from 0 at its top to 1 at its bottom. Levels are in IRE: 0 is black, 100 peak white.
"""
_ABOUT = {
    "steps": "Grey steps.",
    "flats": "Flat patches of reference levels.",
    "field": "Patches of plain ground all over the picture.",
    "bursts": "Packets of sine waves along the line: middle and swing of the level.",
    "marks": "Discs of four quadrants; hand is 1 where the top left quadrant is light, -1 where it is dark.",
    "grid": "The crosshatch: shown lists crossings (column, row), arms which of their arms run clear (l, r, u, d).",
    "edges": 'Straight edges, levels before and after: axis "h" from top to bottom, "v" from left to right.',
    "rulers": "Bands of bars along the edges: boundaries of the bars, and 1 in bits for each light one.",
}
_ROWS = ("steps", "flats", "field", "bursts", "marks")  # a line an entry
_TABLES = ("grid", "edges", "rulers")
_WIDTH = 110


def write_plan(plan: Plan, path: Path | str) -> None:
    """Write a plan as TOML; ``read_plan`` gives the same plan back.

    Raises
    ------
    UsageError
        When the file cannot be written.
    """
    try:
        Path(path).write_text(plan_text(plan), encoding="utf-8")
    except OSError as error:
        raise UsageError(f"{shown(path)}: cannot be written ({error.strerror}); name another place") from None


def plan_text(plan: Plan) -> str:
    """Return a plan as TOML text."""
    text = [_HEAD, f"name = {_toml(plan.name)}", f"standard = {_toml(plan.standard)}"]
    for section in _ROWS:
        if entries := getattr(plan, section):
            text += ["", f"# {_ABOUT[section]}", f"{section} = ["]
            text += [f"    {{ {', '.join(_pairs(entry))} }}," for entry in entries]
            text.append("]")
    for section in _TABLES:
        value = getattr(plan, section)
        if value:
            text += ["", f"# {_ABOUT[section]}"]
        for number, entry in enumerate(value if isinstance(value, tuple) else filter(None, [value])):
            head = f"[[{section}]]" if isinstance(value, tuple) else f"[{section}]"
            text += [*([""] if number else []), head, *_pairs(entry)]
    return "\n".join(text) + "\n"


def _pairs(entry: Any) -> list[str]:
    return [f"{key} = {_toml(value, key)}" for key, value in _plain(entry).items()]


def _plain(entry: Any) -> dict[str, Any]:
    """Fields of an entry, a rectangle as four numbers."""
    table = {field.name: getattr(entry, field.name) for field in fields(entry)}
    return {key: tuple(asdict(value).values()) if isinstance(value, Rect) else value for key, value in table.items()}


def _toml(value: Any, key: str = "") -> str:
    """Write a value; the array of a key is wrapped where it is too long for a line."""
    if isinstance(value, str):
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    if key == "bits":
        return _toml("".join("1" if bit else "0" for bit in value))
    if isinstance(value, Sequence):
        items = [_toml(item) for item in value]
        inside = ", ".join(items)
        return f"[{inside}]" if not key or len(inside) <= _WIDTH else f"[\n{_wrapped(items)}\n]"
    return str(int(value)) if isinstance(value, int) else repr(float(value))


def _wrapped(items: Sequence[str]) -> str:
    """Lines of items; a space within an item is no place to break at."""
    words = " ".join(item.replace(" ", "\0") + "," for item in items)
    return fill(words, _WIDTH, initial_indent="    ", subsequent_indent="    ").replace("\0", " ")


def read_plan(path: Path | str) -> Plan:
    """Read a plan.

    Raises
    ------
    UsageError
        One line that names the file, the line and the remedy.
    """
    table, text = read_toml(path, "plan")
    return _plan(table, text, shown(Path(path).name))


def plan_from_text(text: str, name: str) -> Plan:
    """Make a plan from TOML text; ``name`` is used in messages. Raises as ``read_plan`` does."""
    return _plan(parse(text, name), text, name)


def _plan(table: dict[str, Any], text: str, name: str) -> Plan:
    try:
        check_keys(table)
        plan = msgspec.convert(prepared(table), Plan)
        check_sense(plan)
    except msgspec.ValidationError as error:
        fault = fault_of(str(error), table)
    except Fault as error:
        fault = error
    else:
        return plan
    lines = lines_of(text)
    place = fault.place
    while place not in lines:
        place = place[:-1]
    raise UsageError(f"{name} line {lines[place]}: {shown(fault.message)}")
