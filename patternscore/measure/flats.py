"""All flat areas of a frame, with what they tell together: noise, slopes and bars."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.ground import Ground, read_ground
from patternscore.measure.noise import Noise, coding_noise, read_noise
from patternscore.measure.patches import Cores, cut_cores

_CLEAR = 0.8  # IRE


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


@lru_cache(maxsize=1)  # the levels and the stability group read the same areas one after the other
def flat_areas(frame: Frame, located: Located) -> FlatAreas:
    """Cut out the flat areas of a frame and read what they tell together."""
    field, steps, flats, *beside = cut_cores(frame, located)
    noise: Noise | Unreadable
    ground: Ground | Unreadable
    try:
        noise = read_noise(frame, (field, steps, flats))
    except Unreadable as why:
        noise = why
    try:
        sure = noise if isinstance(noise, Noise) else coding_noise(frame)
        coding = float(sure.of_mean(np.inf, frame.code_step))
        ground = read_ground(frame, (field, *(_unclipped(cores, flats) for cores in beside)), coding)
    except Unreadable as why:
        ground = why
    return FlatAreas(field, steps, flats, noise, ground)


def _unclipped(areas: Cores, flats: Cores) -> Cores:
    """Those areas that lie clear of the levels of the black and the white patch; clipping hides slopes and bars."""
    if not len(flats) or not len(areas):
        return areas
    ends = flats.levels.mean((1, 2))[[int(flats.nominal.argmin()), int(flats.nominal.argmax())]]
    level = areas.levels.mean((1, 2))
    return areas.only((level > ends[0] + _CLEAR) & (level < ends[1] - _CLEAR))
