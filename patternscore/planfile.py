"""Plans as TOML files that a person can read and correct."""

from __future__ import annotations

import re
import tomllib
from dataclasses import asdict, fields, is_dataclass
from difflib import get_close_matches
from pathlib import Path
from typing import Any

import msgspec

from patternscore.errors import UsageError
from patternscore.plan import Burst, Edge, Grid, Mark, Patch, Plan, Rect, Ruler

_LARGEST = 4 * 1024 * 1024  # bytes
_ENTRIES: dict[str, type] = {
    "edges": Edge,
    "grid": Grid,
    "steps": Patch,
    "flats": Patch,
    "field": Patch,
    "rulers": Ruler,
    "bursts": Burst,
    "marks": Mark,
}
_REACH = 0.5  # how far outside the picture a feature may be said to lie


def write_plan(plan: Plan, path: Path | str) -> None:
    """Write a plan as TOML; ``read_plan`` gives the same plan back."""
    try:
        Path(path).write_text(plan_text(plan), encoding="utf-8")
    except OSError as error:
        raise UsageError(f"{path}: cannot be written ({error.strerror}); name another place") from None


def plan_text(plan: Plan) -> str:
    """Return a plan as TOML text."""
    import tomli_w

    table = {name: value for name, value in asdict(plan).items() if value not in (None, (), [])}
    for ruler in table.get("rulers", ()):
        ruler["bits"] = "".join("1" if bit else "0" for bit in ruler["bits"])
    return tomli_w.dumps(_tidy(table), multiline_strings=False)


def _tidy(value: Any) -> Any:
    """Lists for tuples, and numbers with as many digits as they need."""
    if isinstance(value, dict):
        return {key: _tidy(item) for key, item in value.items() if item is not None}
    if isinstance(value, list | tuple):
        return [_tidy(item) for item in value]
    return value


def read_plan(path: Path | str) -> Plan:
    """Read a plan.

    Raises
    ------
    UsageError
        One line that names the file, the line and the remedy.
    """
    path = Path(path)
    try:
        if path.stat().st_size > _LARGEST:
            raise UsageError(f"{path.name}: is too large for a plan; name a TOML file made by patternscore plan")
        text = path.read_text(encoding="utf-8")
    except OSError as error:
        raise UsageError(f"{path.name}: cannot be read ({error.strerror}); name a plan's TOML file") from None
    except UnicodeDecodeError:
        raise UsageError(f"{path.name}: is no text; name a plan's TOML file") from None
    return plan_from_text(text, path.name)


def plan_from_text(text: str, name: str) -> Plan:
    """Make a plan from TOML text; ``name`` is used in messages."""
    try:
        table = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise UsageError(f"{name}: not TOML: {error}; mend that place") from None
    _known_names(table, text, name)
    for number, ruler in enumerate(table.get("rulers", [])):
        ruler["bits"] = _bits(ruler.get("bits", ""), text, name, number)
    try:
        plan = msgspec.convert(table, Plan)
    except msgspec.ValidationError as error:
        raise UsageError(_located(str(error), text, name)) from None
    _sensible(plan, text, name)
    return plan


def _known_names(table: dict[str, Any], text: str, name: str) -> None:
    """Refuse keys that mean nothing, with the one that may have been meant."""

    def check(entry: Any, kind: type, section: str, number: int) -> None:
        known = [field.name for field in fields(kind)]
        for key, value in entry.items() if isinstance(entry, dict) else ():
            if key not in known:
                close = get_close_matches(key, known, n=1, cutoff=0.4)
                hint = f"did you mean {close[0]}?" if close else f"known are {', '.join(known)}"
                raise UsageError(f"{name} line {_line(text, section, number, key)}: {key} means nothing here; {hint}")
            if key == "rect":
                check(value, Rect, section, number)

    check(table, Plan, "", 0)
    for section, kind in _ENTRIES.items():
        entries = table.get(section, [])
        for number, entry in enumerate(entries if isinstance(entries, list) else [entries]):
            check(entry, kind, section, number)


def _bits(bits: Any, text: str, name: str, number: int) -> list[bool]:
    if isinstance(bits, str) and re.fullmatch("[01]+", bits):
        return [bit == "1" for bit in bits]
    line = _line(text, "rulers", number, "bits")
    raise UsageError(f'{name} line {line}: bits of a ruler are a row of 0 and 1; write bits = "0110..."')


def _line(text: str, section: str, number: int, key: str) -> int:
    """Line of a key in the n-th table of a section, as well as text search can tell; 1 at worst."""
    lines = text.splitlines()
    start, seen = 0, -1
    if section:
        for at, line in enumerate(lines):
            if re.match(rf"\s*\[\[?\s*{re.escape(section)}\s*\]", line):
                seen += 1
                start = at
                if seen == number:
                    break
    for at in range(start, len(lines)):
        if re.match(rf"\s*(\[+[\w.]*\b)?{re.escape(key)}\b", lines[at]):
            return at + 1
    return start + 1


def _located(message: str, text: str, name: str) -> str:
    """Turn a message with a path such as $.edges[3].axis into one with a line."""
    what, _, where = message.partition(" - at `$")
    path = where.rstrip("`")
    match = re.match(r"\.(\w+)(?:\[(\d+)\])?(?:\.(\w+))?", path)
    if match is None:
        return f"{name} line 1: {what}; see the README for what a plan holds"
    section, number, key = match[1], int(match[2] or 0), match[3] or match[1]
    missing = re.search(r"required field `(\w+)`", what)
    line = _line(text, section, number, key) if missing is None else _line(text, section, number, section)
    remedy = f"add {missing[1]}" if missing else f"mend {key}"
    return f"{name} line {line}: {section}: {what[0].lower()}{what[1:]}; {remedy}"


def _sensible(plan: Plan, text: str, name: str) -> None:
    """Check what types cannot say: places, orders, counts."""

    def refuse(section: str, number: int, key: str, message: str) -> None:
        raise UsageError(f"{name} line {_line(text, section, number, key)}: {message}")

    if plan.standard not in ("525", "625"):
        refuse("", 0, "standard", f'standard is "{plan.standard}"; write "525" or "625"')
    for section in _ENTRIES:
        value = getattr(plan, section)
        for number, entry in enumerate(value if isinstance(value, tuple) else [value]):
            if entry is None:
                continue
            for place in _places(entry):
                if not -_REACH <= place <= 1 + _REACH:
                    refuse(
                        section,
                        number,
                        section,
                        f"{section}: {place:g} lies far outside the picture; use fractions, 0 to 1",
                    )
            rect = getattr(entry, "rect", None)
            if rect is not None and not (rect.x0 < rect.x1 and rect.y0 < rect.y1):
                refuse(section, number, "rect", f"{section}: the rectangle is turned over; give x0 < x1 and y0 < y1")
    for number, ruler in enumerate(plan.rulers):
        if len(ruler.boundaries) != len(ruler.bits) + 1:
            refuse(
                "rulers", number, "bits", f"a ruler of {len(ruler.bits)} bars needs {len(ruler.bits) + 1} boundaries"
            )
    for number, burst in enumerate(plan.bursts):
        if not 0 < burst.mhz < 100:
            refuse("bursts", number, "mhz", f"{burst.mhz:g} MHz is no burst; give its frequency in MHz")
    if plan.grid is not None and len(plan.grid.arms) != len(plan.grid.shown):
        refuse("grid", 0, "arms", "the grid needs an entry of arms for each crossing shown")


def _places(entry: Any) -> list[float]:
    """All coordinates of a feature, picture fractions."""
    found: list[float] = []
    for key in ("x", "y"):
        if hasattr(entry, key):
            found.append(getattr(entry, key))
    for key in ("start", "end", "band", "boundaries", "columns", "rows"):
        found += list(getattr(entry, key, ()))
    rect = getattr(entry, "rect", None)
    if is_dataclass(rect):
        found += list(asdict(rect).values())  # type: ignore[arg-type]  # an instance, as seen above
    return found
