"""Levels: black, white, crush, gamma, clipping and tilt."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.clipping import Pile, read_piles
from patternscore.measure.flats import flat_areas
from patternscore.measure.ground import Ground
from patternscore.measure.noise import Noise, coding_noise
from patternscore.measure.patches import Cores
from patternscore.measure.transfer import Transfer, fit_transfer
from patternscore.plan import Patch
from patternscore.reading import Estimate, Findings

Array = npt.NDArray[Any]
_STAIR_KEYS = ("black_crush", "white_crush", "steps_lost", "gamma")
_APART = 2.0  # standard deviations by which neighbouring steps are told apart
_LOST = 0.25  # of a code step: averaged steps closer than that are one
_FLAT = 0.05  # IRE: less slope than this over the patches is none
_TOUCHED = 0.005  # share of a patch's samples at the end of the coding range from which its mean is untrue


@dataclass(frozen=True, slots=True, eq=False)
class Steps:
    """Levels of patches: as seen, and with the slopes and bars of the ground taken out, IRE."""

    patches: tuple[Patch, ...]
    seen: Array
    departure: Array
    sigma: Array

    @property
    def nominal(self) -> Array:
        """Nominal levels, IRE."""
        return np.array([patch.level for patch in self.patches])


def read_levels(frame: Frame, located: Located) -> Findings:
    """Levels group.

    Returns
    -------
    Findings
        black_level, white_level, black_crush, white_crush (IRE), steps_lost (count), gamma (1),
        clipped_black, clipped_white, tilt_line, tilt_field (%), and a Transfer as trace "transfer".
    """
    findings = Findings()
    areas = flat_areas(frame, located)
    noise = areas.noise if isinstance(areas.noise, Noise) else coding_noise(frame)
    ground = _read_tilt(findings, areas.ground)
    stair = _levels(frame, areas.steps, noise, ground)
    others = _levels(frame, areas.flats, noise, ground)
    transfer, level = None, np.concatenate([stair.seen, others.seen])
    try:
        transfer, level = _fit(stair, others)
        _read_staircase(findings, frame, stair, transfer)
    except Unreadable as why:
        findings.miss(why.reason, *_STAIR_KEYS)
    patches, sigma = (*stair.patches, *others.patches), np.concatenate([stair.sigma, others.sigma])
    _read_references(findings, patches, level, sigma)
    for key, pile in zip(("clipped_black", "clipped_white"), _piles(frame, located, noise, transfer), strict=True):
        findings.add(key, "%", pile.share)
    return findings


def _read_tilt(findings: Findings, ground: Ground | Unreadable) -> Ground | None:
    if isinstance(ground, Unreadable):
        findings.miss(ground.reason, "tilt_line", "tilt_field")
        return None
    findings.add("tilt_line", "%", ground.tilt_line, "ground")
    findings.add("tilt_field", "%", ground.tilt_field, "ground")
    return ground


def _levels(frame: Frame, cores: Cores, noise: Noise, ground: Ground | None) -> Steps:
    """Mean level of each patch; of one that touches the end of the coding range, the median."""
    seen = cores.levels.mean((1, 2), dtype=np.float64)
    sigma = np.full(len(cores), float(noise.of_mean(cores.count, frame.code_step)))
    touched = _touched(frame, cores, noise)
    if touched.any():
        seen[touched] = np.median(cores.levels[touched], axis=(1, 2))
        sigma[touched] *= np.sqrt(np.pi / 2.0)
    departure = np.zeros(len(cores))
    if ground is not None and len(cores):
        departure = ground.surface(cores.columns[:, None], cores.rows).mean(1)
    return Steps(cores.patches, seen, departure, sigma)


def _touched(frame: Frame, cores: Cores, noise: Noise) -> Array:
    """Patches with samples at an end of the range, though their noise does not stop of itself there."""
    flags = np.zeros(len(cores), dtype=bool)
    if noise.own < (0.3 * frame.code_step) ** 2 or not len(cores):
        return flags
    margin = 0.5 * max(frame.code_step, 0.02)
    ends = (frame.code_floor, frame.code_ceiling, 0.0, 100.0)
    for level, lower in zip(ends, (True, False, True, False), strict=True):
        if level in (0.0, 100.0):  # a converter's hold: nothing at all lies beyond
            beyond = cores.levels < level - margin if lower else cores.levels > level + margin
            if beyond.any():
                continue
        at_end = np.abs(cores.levels - level) < margin
        flags |= at_end.mean((1, 2)) > _TOUCHED
    return flags


def _fit(stair: Steps, others: Steps) -> tuple[Transfer, Array]:
    """Curve of the staircase and the references, and the levels of both with slopes and bars taken out.

    Slopes may be added to the signal before or after it is clipped, or belong to the ground alone: what makes
    the staircase smoothest is taken.
    """
    if len(stair.patches) < 5:
        raise Unreadable("the pattern has no staircase in the frame")
    seen = np.concatenate([stair.seen, others.seen])
    level = seen - np.concatenate([stair.departure, others.departure])
    nominal = np.concatenate([stair.nominal, others.nominal])
    sigma = np.concatenate([stair.sigma, others.sigma])
    scale = (nominal >= 0.0) & (nominal <= 100.0)  # bars beyond black and white lie off any curve
    if float(np.abs(level - seen).max()) < _FLAT:
        return fit_transfer(nominal[scale], seen[scale], sigma[scale]), seen
    trials = [
        (free, held, fit_transfer(nominal[scale], free[scale], sigma[scale], held[scale]))
        for free, held in _orders(level, seen)
    ]
    # The first is the likeliest: others must explain the steps clearly better.
    free, held, best = min(trials, key=lambda trial: trial[2].misfit * (1.0 if trial is trials[0] else 1.3))
    stuck = np.isin(nominal, best.nominal[best.held_low | best.held_high])
    for end in (nominal.min(), nominal.max()):
        same = nominal == end
        apart = float(np.ptp(level[same]))
        # Alike though the ground is not: clipped, be the steps beside it held or not.
        stuck |= same & (apart > max(0.4, 5.0 * float(sigma[same].max())) and np.ptp(seen[same]) < 0.3 * apart)
    return best, np.where(stuck, held, free)


def _orders(level: Array, seen: Array) -> tuple[tuple[Array, Array], ...]:
    """Levels of free and of held steps: clipped after the slopes came in, before, or without any slopes."""
    return (level, seen), (level, level), (seen, seen)


def _read_staircase(findings: Findings, frame: Frame, stair: Steps, transfer: Transfer) -> None:
    findings.traces["transfer"] = transfer
    findings.add("gamma", "1", transfer.exponent(), "staircase")
    findings.add("black_crush", "IRE", transfer.crush("black"), "staircase")
    findings.add("white_crush", "IRE", transfer.crush("white"), "staircase")
    findings.add("steps_lost", "count", steps_lost(stair, frame.code_step), "staircase")


def _read_references(findings: Findings, patches: tuple[Patch, ...], level: Array, sigma: Array) -> None:
    """Darkest and lightest reference patch; of equal ones the last, flat patches standing after steps."""
    if not patches:
        findings.miss("the pattern has no flat patches in the frame", "black_level", "white_level")
        return
    nominal = np.array([patch.level for patch in patches])
    for key, end in (("black_level", nominal.min()), ("white_level", nominal.max())):
        at = int(np.nonzero(nominal == end)[0][-1])
        findings.add(key, "IRE", Estimate(float(level[at]), float(sigma[at])), f"patch {patches[at].name}")


def steps_lost(stair: Steps, code_step: float) -> Estimate:
    """Steps that cannot be told from the next darker or lighter one.

    Two steps are told apart when their levels differ by twice the spread of the difference and by a quarter
    of a code.
    """
    from scipy.special import ndtr

    order = np.argsort(stair.nominal, kind="stable")
    apart = np.diff(stair.seen[order])
    spread = np.hypot(stair.sigma[order][1:], stair.sigma[order][:-1])
    limit = np.maximum(_APART * spread, _LOST * code_step)
    alike = apart < limit
    lost = np.append(alike, False) | np.append(False, alike)
    chance = ndtr((limit - apart) / np.maximum(spread, 1e-9))
    return Estimate(float(np.count_nonzero(lost)), float(np.sqrt((chance * (1.0 - chance)).sum())))


def _piles(frame: Frame, located: Located, noise: Noise, transfer: Transfer | None) -> list[Pile]:
    held: list[float | None] = [None, None]
    if transfer is not None:
        for end, which in enumerate((transfer.held_low, transfer.held_high)):
            if which.any():
                held[end] = float(np.median(transfer.measured[which]))
    return read_piles(frame, located, float(np.sqrt(noise.own)), (held[0], held[1]))
