"""From a frame to its card."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np

from patternscore.averaging import average
from patternscore.card import Card, make_card
from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.keys import keys_of
from patternscore.layout import chart_plan
from patternscore.limits import Limits, shipped_limits
from patternscore.locate import locate
from patternscore.located import Located
from patternscore.measure.edge import read_edges
from patternscore.measure.fields import field_difference
from patternscore.measure.grid import read_grid, scan_from_grid
from patternscore.measure.levels import read_levels
from patternscore.measure.scan import read_scan
from patternscore.measure.stability import read_between, read_stability
from patternscore.plan import Plan
from patternscore.reading import Findings
from patternscore.remarks import remarks_on

Measure = Callable[[Frame, Located], Findings]


@dataclass(frozen=True, slots=True, eq=False)
class Scored:
    """A card with what it was made from, for pictures."""

    card: Card
    frame: Frame
    located: Located
    findings: Findings


def score(
    frame: Frame, plan: Plan | None = None, *, limits: Limits | None = None, grabs: list[Frame] | None = None
) -> Card:
    """Measure a frame and give its card.

    Parameters
    ----------
    frame : Frame
        One picture, or the average of several grabs of it.
    plan : Plan, optional
        Pattern in the frame; the package's chart where left out.
    limits : mapping, optional
        Marks for each reading; the shipped ones where left out.
    grabs : list of Frame, optional
        The single grabs that ``frame`` is the average of: they give bounce and wander, and the noise.

    Raises
    ------
    UnscorableFrame
        When the pattern is not in the frame.
    """
    return score_frame(frame, plan, limits=limits, grabs=grabs).card


def score_frame(
    frame: Frame, plan: Plan | None = None, *, limits: Limits | None = None, grabs: list[Frame] | None = None
) -> Scored:
    """As ``score``, with the place of the features and the measures' own results beside the card."""
    plan = plan or chart_plan(frame.standard)
    located = locate(frame, plan)
    findings = _measure(frame, located, grabs)
    readings = {reading.key: reading for reading in findings.readings}
    said = (
        *remarks_on(readings, frame.standard),
        *_fields(frame, located),
        *frame.notes,
    )
    card = make_card(
        describe(frame),
        plan.name,
        findings.readings,
        findings.missing,
        limits or shipped_limits(),
        said,
    )
    return Scored(card, frame, located, findings)


def _fields(frame: Frame, located: Located) -> tuple[str, ...]:
    try:
        return field_difference(frame, located).sentences()
    except Unreadable:
        return ()


def score_together(grabs: list[Frame], plan: Plan | None = None, *, limits: Limits | None = None) -> Scored:
    """Score the average of several grabs of one picture, with what changes between them."""
    return score_frame(average(grabs), plan, limits=limits, grabs=grabs)


def describe(frame: Frame) -> dict[str, Any]:
    """Entry of the card that says which frame it is of."""
    return {
        "name": frame.name,
        "sha256": frame.sha256,
        "rows": frame.rows,
        "samples": frame.samples,
        "standard": frame.standard.name,
        "levels": frame.levels,
    }


def _measure(frame: Frame, located: Located, grabs: list[Frame] | None) -> Findings:
    findings = Findings()
    for group, measure in _measures(located.plan):
        findings.merge(_guarded(measure, frame, located, group))
    findings.merge(_between(frame, located, grabs or [frame]))
    seen = {reading.key for reading in findings.readings}
    findings.missing = {key: why for key, why in findings.missing.items() if key not in seen}
    return findings


def _measures(plan: Plan) -> list[tuple[str, Measure]]:
    scan = read_scan if plan.rulers else scan_from_grid
    return [
        ("resolution", read_edges),
        ("foldback", scan),
        ("geometry", read_grid),
        ("levels", read_levels),
        ("stability", read_stability),
    ]


def _guarded(measure: Measure, frame: Frame, located: Located, group: str) -> Findings:
    """Run a measure; one that finds nothing or does not settle costs its own readings and no others."""
    try:
        return measure(frame, located)
    except (Unreadable, np.linalg.LinAlgError) as why:
        findings = Findings()
        reason = why.reason if isinstance(why, Unreadable) else "the fit did not settle on a value"
        findings.miss(reason, *(key.name for key in keys_of(group)))
        return findings


def _between(frame: Frame, located: Located, grabs: list[Frame]) -> Findings:
    """Readings between frames; noise and the like are of a single grab, not of the average."""
    findings = read_between(grabs, located)
    if len(grabs) > 1:
        single = read_stability(grabs[0], located)
        findings.readings += [reading for reading in single.readings if reading.key == "noise"]
    return findings
