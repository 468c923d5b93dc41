"""Stability: noise, hum and jitter of one frame; bounce and wander between frames of one picture."""

from __future__ import annotations

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.between import bounce, wander
from patternscore.measure.flats import flat_areas
from patternscore.measure.jitter import read_jitter
from patternscore.reading import Findings

__all__ = ["read_between", "read_jitter", "read_stability"]


def read_stability(frame: Frame, located: Located) -> Findings:
    """Noise (dB, 100 IRE over rms) and hum (%, peak amplitude re 100 IRE).

    Jitter (ns) is added where the plan has no near-vertical edges, from whose lines it is read otherwise.
    """
    findings = Findings()
    areas = flat_areas(frame, located)
    if isinstance(areas.noise, Unreadable):
        findings.miss(areas.noise.reason, "noise")
    else:
        findings.add("noise", "dB", areas.noise.ratio(), "flat patches")
    if isinstance(areas.ground, Unreadable):
        findings.miss(areas.ground.reason, "hum")
    else:
        findings.add("hum", "%", areas.ground.hum, "ground")
    if not any(edge.axis == "h" for edge in located.plan.edges):
        try:
            findings.add("jitter", "ns", read_jitter(frame, located), "crosshatch")
        except Unreadable as why:
            findings.miss(why.reason, "jitter")
    return findings


def read_between(frames: list[Frame], located: Located) -> Findings:
    """Bounce (%) and wander (ns) over several frames of one picture.

    Parameters
    ----------
    frames : list of Frame
        At least two, of one size.
    located : Located
        Not used: both readings follow the whole picture. It stands here so that all measures are called alike.
    """
    findings = Findings()
    if len(frames) < 2:
        findings.miss("needs several frames of one picture", "bounce", "wander")
        return findings
    for key, unit, measure in (("bounce", "%", bounce), ("wander", "ns", wander)):
        try:
            findings.add(key, unit, measure(frames))
        except Unreadable as why:
            findings.miss(why.reason, key)
    return findings
