"""The card: all readings of one frame, marks, scores, what is missing and why, and remarks."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from patternscore.keys import GROUPS, KEYS, group_of
from patternscore.limits import Limits
from patternscore.reading import Reading

FORMAT = 1
_DIGITS = 6


@dataclass(frozen=True, slots=True)
class Marked:
    """A reading with its marks (None where it carries none)."""

    reading: Reading
    score: float | None

    @property
    def value(self) -> float:
        """Measured value."""
        return self.reading.value

    @property
    def sigma(self) -> float:
        """One standard deviation."""
        return self.reading.sigma

    @property
    def unit(self) -> str:
        """Unit of value and sigma."""
        return self.reading.unit

    @property
    def doubt(self) -> str | None:
        """What makes the value untrue, if anything does."""
        return self.reading.doubt


@dataclass(frozen=True, slots=True)
class Card:
    """Everything measured on one frame.

    ``card["overshoot"]`` is the marked reading; a key that could not be read is in ``missing``.
    """

    frame: Mapping[str, Any]
    plan: str
    score: float | None
    groups: Mapping[str, float | None]
    readings: Mapping[str, Marked]
    missing: Mapping[str, str]
    remarks: tuple[str, ...] = ()

    @property
    def name(self) -> str:
        """Name of the frame."""
        return str(self.frame["name"])

    def __getitem__(self, key: str) -> Marked:
        return self.readings[key]

    def __contains__(self, key: object) -> bool:
        return key in self.readings

    def as_dict(self) -> dict[str, Any]:
        """Return the card as plain values, in the order of the contract."""
        return {
            "card": FORMAT,
            "frame": dict(self.frame),
            "plan": self.plan,
            "score": _short(self.score),
            "groups": {group: _short(score) for group, score in self.groups.items()},
            "readings": {key: _entry(marked) for key, marked in self.readings.items()},
            "missing": dict(self.missing),
            "remarks": list(self.remarks),
        }

    def to_json(self) -> str:
        """Return the card as one line of JSON."""
        return json.dumps(self.as_dict(), ensure_ascii=False, allow_nan=False)


def card_from_dict(entry: Mapping[str, Any]) -> Card:
    """Card from what ``as_dict`` gave."""
    readings = {
        key: Marked(
            Reading(key, item["value"], item["unit"], item["sigma"], item["where"], item.get("doubt")),
            item["score"],
        )
        for key, item in entry["readings"].items()
    }
    return Card(
        entry["frame"],
        entry["plan"],
        entry["score"],
        entry["groups"],
        readings,
        entry["missing"],
        tuple(entry["remarks"]),
    )


def _short(value: float | None) -> float | None:
    return None if value is None else float(f"{value:.{_DIGITS}g}")


def _entry(marked: Marked) -> dict[str, Any]:
    reading = marked.reading
    entry: dict[str, Any] = {
        "value": _short(reading.value),
        "unit": reading.unit,
        "sigma": _short(reading.sigma),
        "score": _short(marked.score),
        "where": reading.where,
    }
    if reading.doubt is not None:
        entry["doubt"] = reading.doubt
    return entry


def mark_reading(reading: Reading, limits: Limits) -> Marked:
    """Give a reading its marks."""
    limit = limits.get(reading.key)
    if reading.doubt is not None or limit is None or not limit.marks:
        return Marked(reading, None)
    return Marked(reading, limit.mark(reading.value))


def group_score(marks: list[float]) -> float | None:
    """Score of a group: half the mean of its marks and half the lowest of them; None without marks."""
    return (sum(marks) / len(marks) + min(marks)) / 2.0 if marks else None


def overall_score(groups: list[float | None]) -> float | None:
    """Harmonic mean of the group scores, each counted as at least 1; None where no group was read.

    n groups and a lowest score of s give at most n times s: one failed group cannot hide behind the others.
    """
    known = [max(score, 1.0) for score in groups if score is not None]
    return len(known) / sum(1.0 / score for score in known) if known else None


def make_card(
    frame: Mapping[str, Any],
    plan: str,
    readings: list[Reading],
    missing: Mapping[str, str],
    limits: Limits,
    remarks: tuple[str, ...] = (),
) -> Card:
    """Put readings into the contract's order, mark and score them."""
    found = {reading.key: mark_reading(reading, limits) for reading in readings}
    order = [key for key in KEYS if key in found]
    groups: dict[str, float | None] = {}
    for group in GROUPS:
        marks = [found[key].score for key in order if group_of(key) == group]
        groups[group] = group_score([mark for mark in marks if mark is not None])
    return Card(
        frame=frame,
        plan=plan,
        score=overall_score(list(groups.values())),
        groups=groups,
        readings={key: found[key] for key in order},
        missing={key: missing.get(key, "not measured") for key in KEYS if key not in found},
        remarks=remarks,
    )
