"""All flat areas of a frame, with what they tell together: noise, slopes and bars."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.ground import Ground, read_ground
from patternscore.measure.noise import Noise, read_noise
from patternscore.measure.patches import Cores, beside_edges, cut_cores
from patternscore.plan import Patch, Plan


@dataclass(frozen=True, slots=True, eq=False)
class FlatAreas:
    """Flat areas of one frame.

    Attributes
    ----------
    field, steps, flats : Cores
        Of the plan's patches of these kinds.
    noise : Noise or Unreadable
    ground : Ground or Unreadable
    """

    field: Cores
    steps: Cores
    flats: Cores
    noise: Noise | Unreadable
    ground: Ground | Unreadable


@lru_cache(maxsize=8)
def _kinds(plan: Plan) -> tuple[tuple[Patch, ...], ...]:
    return (plan.field, plan.steps, plan.flats, *beside_edges(plan))


@lru_cache(maxsize=1)  # the levels and the stability group read the same areas one after the other
def flat_areas(frame: Frame, located: Located) -> FlatAreas:
    """Cut out the flat areas of a frame and read what they tell together."""
    field, steps, flats, *beside = cut_cores(frame, located, _kinds(located.plan))
    noise: Noise | Unreadable
    ground: Ground | Unreadable
    try:
        noise = read_noise(frame, (field, steps, flats))
    except Unreadable as why:
        noise = why
    try:
        ground = read_ground(frame, (field, *beside))
    except Unreadable as why:
        ground = why
    return FlatAreas(field, steps, flats, noise, ground)
