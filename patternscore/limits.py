"""Marks: what each reading must show to earn all of them, and what earns none."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from pathlib import Path
from typing import Any

from patternscore.errors import UsageError
from patternscore.files import shown
from patternscore.keys import KEYS, meant
from patternscore.tomlfile import read_toml

_FIELDS = ("full", "none", "target", "marks")


@dataclass(frozen=True, slots=True)
class Limit:
    """Values for full marks and for none; with a target both are distances from it."""

    full: float
    none: float
    target: float | None = None
    marks: bool = True

    def mark(self, value: float) -> float:
        """Marks from 0 to 100 for a value."""
        seen = value if self.target is None else abs(value - self.target)
        part = (seen - self.none) / (self.full - self.none)
        return 100.0 * min(max(part, 0.0), 1.0)


Limits = Mapping[str, Limit]


@cache
def shipped_limits() -> Limits:
    """Limits that come with the package."""
    return _parse(tomllib.loads(files("patternscore").joinpath("limits.toml").read_text("utf-8")), "limits.toml")


def read_limits(path: Path | str) -> Limits:
    """Shipped limits with those of a file put in their place.

    Raises
    ------
    UsageError
        When the file cannot be read, or names an unknown reading or field.
    """
    table, _ = read_toml(path, "limits file")
    return dict(shipped_limits()) | dict(_parse(table, shown(Path(path).name), shipped_limits()))


def _parse(table: dict[str, Any], name: str, known: Limits | None = None) -> Limits:
    return {key: _limit(key, entry, name, (known or {}).get(key)) for key, entry in table.items()}


def _limit(key: str, entry: Any, name: str, before: Limit | None) -> Limit:
    if key not in KEYS:
        raise UsageError(f"{name}: {shown(key)[:40]} is no reading; {meant(key, KEYS)}")
    if not isinstance(entry, dict):
        raise UsageError(f"{name}: {key} needs full and none; write [{key}] and a line for each")
    for field in entry:
        if field not in _FIELDS:
            raise UsageError(f"{name}: [{key}] has no field {shown(field)[:40]}; {meant(field, _FIELDS)}")
    values: dict[str, Any] = {}
    if before is not None:
        values = {"full": before.full, "none": before.none, "target": before.target, "marks": before.marks}
    values |= entry
    for field in ("full", "none", "target"):
        value = values.get(field)
        fits = isinstance(value, int | float) and not isinstance(value, bool) and abs(value) < 1e12
        if not fits and not (field == "target" and value is None):
            raise UsageError(f"{name}: [{key}] needs a number for {field}; write {field} = 3.5")
    if values["full"] == values["none"]:
        raise UsageError(f"{name}: [{key}] has one value for full and none; make them differ")
    if not isinstance(values.get("marks", True), bool):
        raise UsageError(f"{name}: [{key}] marks must be true or false; write marks = true")
    target = values.get("target")
    _check_sense(name, key, values["full"], values["none"], target)
    return Limit(
        float(values["full"]),
        float(values["none"]),
        None if target is None else float(target),
        bool(values.get("marks", True)),
    )


def _check_sense(name: str, key: str, full: float, none: float, target: float | None) -> None:
    """Refuse limits that reward what is worse, as a file that changes only one of the two easily does."""
    better = KEYS[key].better if target is None else "low"
    if target is not None and full < 0:
        raise UsageError(f"{name}: [{key}] full is a distance from the target; give 0 or more")
    if (better == "low" and full > none) or (better == "high" and full < none):
        side = "under" if better == "low" else "over"
        raise UsageError(f"{name}: [{key}] full = {full:g} must lie {side} none = {none:g}; give both")
