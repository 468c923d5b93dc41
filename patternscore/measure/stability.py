"""Stability: noise and hum of one frame; bounce and wander between frames of one picture."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.ground import read_ground
from patternscore.measure.patches import noise_variance, seen_patches
from patternscore.reading import Estimate, Findings

Array = npt.NDArray[Any]


def read_stability(frame: Frame, located: Located) -> Findings:
    """Noise (dB, 100 IRE over rms) and hum (%, peak amplitude re 100 IRE)."""
    findings = Findings()
    plan = located.plan
    ground = seen_patches(frame, located, plan.field)
    seen = [*ground, *seen_patches(frame, located, (*plan.flats, *plan.steps))]
    try:
        findings.add("noise", "dB", noise(*noise_variance(seen, frame), frame.code_step), "flat patches")
    except Unreadable as why:
        findings.miss(why.reason, "noise")
    try:
        findings.add("hum", "%", read_ground(frame, ground).hum, "ground")
    except Unreadable as why:
        findings.miss(why.reason, "hum")
    return findings


def noise(variance: float, freedom: int, code_step: float) -> Estimate:
    """Peak white to rms noise, dB.

    Parameters
    ----------
    variance : float
        Of levels in flat patches, IRE squared, coding noise included.
    code_step : float
        IRE between codes; coding adds step squared / 12, which is taken out. Where nothing is left the
        coding noise itself is the answer: for 219 steps 57.6 dB.
    """
    if freedom < 50:
        raise Unreadable("no flat patch clear of clipping is large enough")
    coding = code_step**2 / 12.0
    own = max(variance - coding, coding, 1e-6)
    sigma = variance * np.sqrt(2.0 / freedom)
    decibels = 10.0 * np.log10(1e4 / own)
    return Estimate(float(decibels), float(10.0 / np.log(10.0) * sigma / own))


def read_between(frames: list[Frame], located: Located) -> Findings:
    """Bounce and wander over several frames of one picture, located on their average.

    Parameters
    ----------
    frames : list of Frame
        At least two, of one size.
    """
    findings = Findings()
    if len(frames) < 2:
        findings.miss("needs several frames of one picture", "bounce", "wander")
        return findings
    try:
        findings.add("bounce", "%", bounce(frames, located), "flat patches")
    except Unreadable as why:
        findings.miss(why.reason, "bounce")
    try:
        findings.add("wander", "ns", wander(frames), "picture")
    except Unreadable as why:
        findings.miss(why.reason, "wander")
    return findings


def bounce(frames: list[Frame], located: Located) -> Estimate:
    """Change of level (rms) from frame to frame, % of 100 IRE, in the patch where it is largest."""
    plan = located.plan
    patches = (*plan.flats, *plan.steps, *plan.field)
    levels, sampling = [], []
    for frame in frames:
        seen = seen_patches(frame, located, patches)
        if not seen:
            raise Unreadable("no flat patch of the pattern is in the frame")
        levels.append([patch.mean for patch in seen])
        variance, _ = noise_variance(seen, frame)
        sampling.append([max(variance, frame.code_step**2 / 12.0) / patch.count for patch in seen])
    scatter = np.var(np.array(levels), axis=0, ddof=1)
    noise_part = np.mean(sampling, axis=0)
    worst = int(np.argmax(scatter - noise_part))
    own = max(float(scatter[worst] - noise_part[worst]), 0.0)
    spread = float(scatter[worst]) * np.sqrt(2.0 / (len(frames) - 1))
    value = float(np.sqrt(own))
    return Estimate(value, float(spread / (2.0 * max(value, np.sqrt(spread)))))


def wander(frames: list[Frame]) -> Estimate:
    """Spread (rms) of shift along the line between frames, ns, by their common slope along the line."""
    rows, samples = frames[0].luma.shape
    inner = np.s_[rows // 8 : -rows // 8, samples // 8 : -samples // 8]
    mean = np.mean([frame.luma for frame in frames], axis=0, dtype=np.float32)
    slope = np.gradient(mean, axis=1)[inner]
    steep = np.abs(slope) > 4.0  # IRE per sample: flat parts hold only noise
    power = float((slope[steep].astype(np.float64) ** 2).sum())
    if np.count_nonzero(steep) < 200:
        raise Unreadable("the picture holds too little detail along the line")
    shifts = (
        np.array([-float(((frame.luma - mean)[inner][steep] * slope[steep]).sum()) for frame in frames])
        / power
    )
    left = [
        (frame.luma - mean)[inner][steep] + shift * slope[steep]
        for frame, shift in zip(frames, shifts, strict=True)
    ]
    noise_part = float(np.mean([np.var(part) for part in left])) / power
    count = len(frames)
    scatter = float(np.var(shifts, ddof=1))
    own = float(np.sqrt(max(scatter - noise_part, 0.0)))
    spread = scatter * np.sqrt(2.0 / (count - 1))
    sigma = spread / (2.0 * max(own, np.sqrt(spread)))
    scale = 1e3 / frames[0].sample_rate
    return Estimate(own * scale, float(sigma) * scale)
