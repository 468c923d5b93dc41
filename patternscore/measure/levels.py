"""Levels: black, white, crush, gamma, clipping and tilt."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.ground import read_ground
from patternscore.measure.patches import SeenPatch, noise_variance, seen_patches
from patternscore.measure.transfer import Transfer, fit_transfer
from patternscore.reading import Estimate, Findings

Array = npt.NDArray[Any]
_STAIR_KEYS = ("black_crush", "white_crush", "steps_lost", "gamma")
_LOST = 0.25  # part of a code step: averaged steps closer than that are one


def read_levels(frame: Frame, located: Located) -> Findings:
    """Levels group.

    Returns
    -------
    Findings
        black_level, white_level, black_crush, white_crush (IRE), steps_lost (count), gamma (1),
        clipped_black, clipped_white, tilt_line, tilt_field (%), and a Transfer as trace "transfer".
    """
    plan = located.plan
    findings = Findings()
    steps = seen_patches(frame, located, plan.steps)
    flats = seen_patches(frame, located, plan.flats)
    ground = seen_patches(frame, located, plan.field)
    variance, _ = noise_variance([*ground, *flats, *steps], frame)
    noise = float(np.sqrt(max(variance, frame.code_step**2 / 12.0)))
    _read_references(findings, [*flats, *steps], noise)
    _read_tilt(findings, frame, ground)
    try:
        transfer = _transfer(steps, flats, noise, findings)
        findings.traces["transfer"] = transfer
        findings.add(
            "gamma", "1", Estimate(transfer.gamma, float(np.sqrt(transfer.covariance[2, 2]))), "staircase"
        )
        findings.add("black_crush", "IRE", transfer.crush("black"), "staircase")
        findings.add("white_crush", "IRE", transfer.crush("white"), "staircase")
        findings.add("steps_lost", "count", steps_lost(transfer, frame.code_step), "staircase")
    except Unreadable as why:
        findings.miss(why.reason, *_STAIR_KEYS)
    for key, share in zip(("clipped_black", "clipped_white"), clipped(frame), strict=True):
        findings.add(key, "%", share)
    return findings


def _read_references(findings: Findings, seen: list[SeenPatch], noise: float) -> None:
    """Darkest and lightest reference patch; of equal ones the largest."""
    if not seen:
        findings.miss("the pattern has no flat patches in the frame", "black_level", "white_level")
        return
    for key, pick in (("black_level", min), ("white_level", max)):
        level = pick(patch.patch.level for patch in seen)
        chosen = max((patch for patch in seen if patch.patch.level == level), key=lambda patch: patch.count)
        sigma = noise / np.sqrt(chosen.count)
        findings.add(key, "IRE", Estimate(chosen.mean, float(sigma)), f"patch {chosen.patch.name}")


def _read_tilt(findings: Findings, frame: Frame, ground: list[SeenPatch]) -> None:
    try:
        found = read_ground(frame, ground)
        findings.add("tilt_line", "%", found.tilt_line, "ground")
        findings.add("tilt_field", "%", found.tilt_field, "ground")
    except Unreadable as why:
        findings.miss(why.reason, "tilt_line", "tilt_field")


def _transfer(steps: list[SeenPatch], flats: list[SeenPatch], noise: float, tilts: Findings) -> Transfer:
    """Curve of the staircase, with the tilt of the ground taken out of the steps' levels."""
    if len(steps) < 5:
        raise Unreadable("the pattern has no staircase in the frame")
    tilt = {reading.key: reading.value for reading in tilts.readings if reading.key.startswith("tilt")}
    middle_x = float(np.mean([step.x for step in steps]))
    middle_y = float(np.mean([step.y for step in steps]))
    measured = np.array(
        [
            step.mean
            - tilt.get("tilt_line", 0.0) * (step.x - middle_x)
            - tilt.get("tilt_field", 0.0) * (step.y - middle_y)
            for step in steps
        ]
    )
    sigma = np.array([noise / np.sqrt(step.count) for step in steps])
    return fit_transfer(np.array([step.patch.level for step in steps]), measured, sigma)


def steps_lost(transfer: Transfer, code_step: float) -> Estimate:
    """Steps that cannot be told from the one before: closer than noise and coding let them be told apart."""
    from scipy.special import ndtr

    apart = np.abs(np.diff(transfer.measured))
    spread = np.hypot(transfer.sigma[1:], transfer.sigma[:-1])
    limit = np.hypot(2.0 * spread, _LOST * code_step)
    chance = ndtr((limit - apart) / np.maximum(spread, 1e-9))
    return Estimate(float(np.count_nonzero(apart < limit)), float(np.sqrt((chance * (1 - chance)).sum())))


def clipped(frame: Frame) -> tuple[Estimate, Estimate]:
    """Share of the samples piled up at the lower and the upper end of the coding range, %.

    A pile is what the last code holds beyond twice what the one next to it does; where a converter holds
    levels at 0 and 100 IRE, those are the ends.
    """
    luma = frame.luma
    step = frame.code_step or 100.0 / 219.0
    shares = []
    for end, sign in ((frame.code_floor, 1.0), (frame.code_ceiling, -1.0)):
        depth = (luma - end) * sign  # distance from the end of the range, IRE
        last = np.count_nonzero(depth < 1.5 * step)
        following = np.count_nonzero((depth >= 1.5 * step) & (depth < 2.5 * step))
        pile = max(last - 2.0 * following, 0.0) / luma.size
        shares.append(
            Estimate(100.0 * pile, 100.0 * float(np.sqrt(last + 4.0 * following + 1.0)) / luma.size)
        )
    return shares[0], shares[1]
