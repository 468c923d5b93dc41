"""One measured quantity, and what a measure hands back."""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value with its standard deviation, in the unit that the measure's docstring names."""

    value: float
    sigma: float


@dataclass(frozen=True, slots=True)
class Reading:
    """One measured quantity of one frame.

    Attributes
    ----------
    key : str
        Name in the card contract.
    value, sigma : float
        Value and one standard deviation, in ``unit``. Never NaN.
    where : str
        Part of the picture it was measured in.
    doubt : str or None
        What in the frame makes the value untrue; such a reading earns no marks.
    """

    key: str
    value: float
    unit: str
    sigma: float
    where: str = "picture"
    doubt: str | None = None

    def __post_init__(self) -> None:
        if not (math.isfinite(self.value) and math.isfinite(self.sigma) and self.sigma >= 0):
            raise ValueError(f"{self.key}: {self.value} +- {self.sigma} is not a finite measurement")

    def differs_from(self, other: Reading, factor: float = 2.0) -> bool:
        """Whether the change is more than the two sigmas explain."""
        return abs(self.value - other.value) > factor * math.hypot(self.sigma, other.sigma)


@dataclass(slots=True)
class Findings:
    """What one measure found: readings, what could not be read and why, and traces for pictures.

    ``traces`` holds the measure's own result objects (curves, crossings, steps) under a short name.
    """

    readings: list[Reading] = field(default_factory=list)
    missing: dict[str, str] = field(default_factory=dict)
    traces: dict[str, Any] = field(default_factory=dict)

    def add(self, key: str, unit: str, estimate: Estimate, where: str = "picture") -> None:
        """Add a reading; one that did not come out as a number is said to be missing instead."""
        if not (math.isfinite(estimate.value) and math.isfinite(estimate.sigma)):
            self.miss("the fit did not settle on a value", key)
            return
        self.readings.append(Reading(key, float(estimate.value), unit, float(estimate.sigma), where))

    def miss(self, reason: str, *keys: str) -> None:
        """Say why these keys could not be read."""
        self.missing.update(dict.fromkeys(keys, reason))

    def merge(self, other: Findings) -> None:
        """Take over all that another measure found."""
        self.readings.extend(other.readings)
        self.missing.update(other.missing)
        self.traces.update(other.traces)
