"""Readings of the scan, from the rulers: fold-back, crush, linearity, size, centring, blanking seen."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.fold import PLAIN, Fold, find_fold, no_fold, suspect
from patternscore.measure.foldglance import nothing_there
from patternscore.measure.foldview import FAR, view_edge
from patternscore.measure.ruler import Bars, read_bars, sharpen
from patternscore.measure.rulerband import Axis, Bend, axis_of, straighten
from patternscore.measure.scanmap import ScanMap, crush, fit_scan, linearity
from patternscore.measure.stepshape import StepShape
from patternscore.plan import Side
from patternscore.reading import Estimate, Findings

SIDES: dict[Axis, tuple[Side, Side]] = {"h": ("left", "right"), "v": ("top", "bottom")}
SIZE = {"h": "width", "v": "height"}
HIDDEN = 1.0 / 80.0  # picture fraction that may lie outside the frame before a reading there is given up
TILTED = 0.2  # samples that the bars of a band may lean before a fold is straightened anew
UNREAD = 0.045  # picture fraction between the edge and the first bar edge read


@dataclass(frozen=True, slots=True, eq=False)
class Scan:
    """Scan of one direction with what lies at its ends: the trace for pictures."""

    map: ScanMap
    bars: tuple[Bars, ...]
    span: tuple[float, float]
    nominal: tuple[float, float]
    folds: dict[str, Fold]


def read_scan(frame: Frame, located: Located, kernel: npt.NDArray[np.floating[Any]] | None = None) -> Findings:
    """Read the scan from the rulers of a located chart.

    Parameters
    ----------
    frame : Frame
        The frame.
    located : Located
        Where the chart lies in it.
    kernel : (n,) array, optional
        Line spread along the line, a value a sample, centred, for the fold-back model. Measured on the
        rulers themselves where it is not given.

    Returns
    -------
    Findings
        ``fold_*``, ``crush_*``, ``linearity_*``, ``width``, ``height``, ``centre_*``, ``blank_*``; traces
        ``scan_h`` and ``scan_v`` of type ``Scan``.
    """
    findings = Findings()
    _blanking(findings, frame, located)
    shape = None if kernel is None else StepShape.from_spread(np.asarray(kernel, dtype=np.float64))
    axes: tuple[Axis, ...] = ("h", "v")
    for axis in axes:
        if any(axis_of(ruler) == axis for ruler in located.plan.rulers):
            _read_axis(findings, frame, located, axis, shape if axis == "h" else None)
        else:
            findings.miss("the pattern has no rulers", *_fold_keys(axis), *_crush_keys(axis))
    return findings


def _fold_keys(axis: Axis) -> list[str]:
    return [f"fold_{side}" for side in SIDES[axis]]


def _crush_keys(axis: Axis) -> list[str]:
    return [f"crush_{side}" for side in SIDES[axis]]


def _blanking(findings: Findings, frame: Frame, located: Located) -> None:
    """Blanking seen before and after the picture; none where the picture runs to the end of the frame."""
    half = 0.5
    seen = {
        "blank_left": None if located.edges.left is None else located.edges.left + half,
        "blank_right": None if located.edges.right is None else frame.samples - half - located.edges.right,
    }
    for (key, samples), sigma in zip(seen.items(), located.edges.sigmas, strict=False):
        value = 0.0 if samples is None else max(samples, 0.0)
        findings.add(key, "us", Estimate(value / frame.sample_rate, sigma / frame.sample_rate), "edge")


def _read_axis(findings: Findings, frame: Frame, located: Located, axis: Axis, shape: StepShape | None) -> None:
    keys = [*_fold_keys(axis), *_crush_keys(axis), f"linearity_{axis}", SIZE[axis], f"centre_{axis}"]
    raster = frame.raster
    nominal = (raster.left, raster.right) if axis == "h" else (raster.top, raster.bottom)
    bars, reasons = _all_bars(frame, located, axis, nominal)
    try:
        if not bars:
            raise Unreadable(reasons[0])
        scan = fit_scan(bars, located.crossings)
    except Unreadable as reason:
        findings.miss(reason.reason, *keys[:-2])
        _size_from_crosshatch(findings, located, axis, nominal)
        return
    folds = _folds(findings, frame, located, bars, scan, nominal, shape)
    last = (frame.samples if axis == "h" else frame.rows) - 0.5
    starts = [max(nominal[0], -0.5), min(nominal[1], last)]
    for end, side in enumerate(SIDES[axis]):
        fold = folds.get(side)
        if fold is not None and fold.length.value > 0:
            starts[end] = last - 0.5 - fold.turning if end else fold.turning
    span = (starts[0], starts[1])
    if any(fold.length.value > 0 for fold in folds.values()):
        bars = [_between(one, span) for one in bars]
        scan = fit_scan(bars, located.crossings)
    findings.traces[f"scan_{axis}"] = Scan(scan, tuple(bars), span, nominal, folds)
    _speeds(findings, scan, span)
    _size(findings, scan, nominal)


def _all_bars(frame: Frame, located: Located, axis: Axis, nominal: tuple[float, float]) -> tuple[list[Bars], list[str]]:
    bars, reasons = [], []
    shown = nominal if axis == "h" else (-math.inf, math.inf)
    for ruler in located.plan.rulers:
        if axis_of(ruler) == axis:
            try:
                bars.append(read_bars(straighten(frame, located.warp, ruler), shown))
            except Unreadable as reason:
                reasons.append(reason.reason)
    return bars, reasons


def _folds(
    findings: Findings,
    frame: Frame,
    located: Located,
    bars: list[Bars],
    scan: ScanMap,
    nominal: tuple[float, float],
    shape: StepShape | None,
) -> dict[str, Fold]:
    """Read the fold at both ends of the scan."""
    axis = scan.axis
    if shape is not None:
        bars = [replace(one, shape=shape) for one in bars]
    per_unit = frame.sample_rate if axis == "h" else 1.0
    folds: dict[str, Fold] = {}
    for side, start in zip(SIDES[axis], nominal, strict=True):
        try:
            plain = 0.0
            if not nothing_there(located.plan, bars, scan, side, start):
                plain = suspect(view_edge(located.plan, bars, side, start, scan.late, wary=False))
            if plain < PLAIN[axis]:
                fold = no_fold(plain, scan.edge_sigma)
            else:
                sharp = bars if shape is not None else sharpen(bars)
                fold = _look_closely(frame, located, sharp, plain, Edge(side, start, scan.late))
        except Unreadable as reason:
            findings.miss(reason.reason, f"fold_{side}")
            continue
        folds[side] = fold
        length = Estimate(fold.length.value / per_unit, fold.length.sigma / per_unit)
        findings.add(f"fold_{side}", "us" if axis == "h" else "lines", length, f"{side} edge")
    return folds


def _between(bars: Bars, span: tuple[float, float]) -> Bars:
    """Leave out bar edges that were read where the scan runs backwards, by chance."""
    return replace(bars, good=bars.good & (bars.place > span[0]) & (bars.place < span[1]))


@dataclass(frozen=True, slots=True)
class Edge:
    """Edge of the picture, nominal start of the active part there, and how much later rising edges come."""

    side: Side
    start: float
    late: float


def _look_closely(frame: Frame, located: Located, bars: list[Bars], plain: float, edge: Edge) -> Fold:
    """Fit a fold; where the bands lean, straighten them anew for a scan that runs backwards there."""
    tilted = max(one.strip.tilt for one in bars) > TILTED
    view = view_edge(located.plan, bars, edge.side, edge.start, edge.late)
    turning, ratio = view.certified, 0.0
    for _ in range(3 if tilted else 1):
        if tilted:
            far = edge.side in FAR
            length = bars[0].strip.mean.size - 1
            bend = Bend(length - turning if far else turning, ratio, far)
            strips = [straighten(frame, located.warp, one.strip.ruler, bend) for one in bars]
            bars = [replace(one, strip=strip) for one, strip in zip(bars, strips, strict=True)]
        closer = view_edge(located.plan, bars, edge.side, edge.start, edge.late)
        fold = find_fold(closer, plain, final=not tilted or ratio > 0)
        turning, ratio = fold.turning, fold.ratio
    return fold


def _ends(scan: ScanMap, span: tuple[float, float]) -> tuple[str | None, str | None]:
    """Why each end of the picture cannot be read; None where it can."""
    edges = scan.time([0.0, 1.0])
    width = float(edges[1] - edges[0])
    hidden = (span[0] - float(edges[0])) / width, (float(edges[1]) - span[1]) / width
    unread = scan.first, 1.0 - scan.last
    return _why(hidden[0], unread[0], SIDES[scan.axis][0]), _why(hidden[1], unread[1], SIDES[scan.axis][1])


def _why(hidden: float, unread: float, side: str) -> str | None:
    if hidden > HIDDEN:
        return f"the {side} edge of the picture lies outside the frame or its active part"
    if unread > UNREAD:
        return f"the bars at the {side} edge could not be read"
    return None


def _speeds(findings: Findings, scan: ScanMap, span: tuple[float, float]) -> None:
    """Crush at both ends, and linearity over the whole."""
    reasons = _ends(scan, span)
    for end, side in enumerate(SIDES[scan.axis]):
        reason = reasons[end]
        if reason is None:
            findings.add(f"crush_{side}", "%", crush(scan, end == 0), f"{side} edge")
        else:
            findings.miss(reason, f"crush_{side}")
    reason = reasons[0] or reasons[1]
    if reason is None:
        findings.add(f"linearity_{scan.axis}", "%", linearity(scan))
    else:
        findings.miss(reason, f"linearity_{scan.axis}")


def _size(findings: Findings, scan: ScanMap, nominal: tuple[float, float]) -> None:
    """Size and centring against the nominal raster, %."""
    length = nominal[1] - nominal[0]
    size = scan.linear((0.0, 1.0), (-1.0, 1.0))
    middle = scan.linear((0.0, 1.0), (0.5, 0.5))
    off = middle.value - (nominal[0] + nominal[1]) / 2
    findings.add(SIZE[scan.axis], "%", Estimate(100 * size.value / length, 100 * size.sigma / length))
    spread = math.hypot(middle.sigma, scan.common_sigma)
    findings.add(f"centre_{scan.axis}", "%", Estimate(100 * off / length, 100 * spread / length))


def _size_from_crosshatch(findings: Findings, located: Located, axis: Axis, nominal: tuple[float, float]) -> None:
    """Size and centring where no ruler is seen, from the warp through the crosshatch."""
    keys = (SIZE[axis], f"centre_{axis}")
    if located.crossings is None or len(located.crossings.found) < 30:
        findings.miss("neither rulers nor crosshatch are seen", *keys)
        return
    along = 0 if axis == "h" else 1
    ends = np.full((2, 5, 2), np.linspace(0.1, 0.9, 5)[None, :, None])
    ends[0, :, along], ends[1, :, along] = 0.0, 1.0
    first, last = located.warp.to_frame(ends.reshape(10, 2))[:, along].reshape(2, 5).mean(1)
    length = nominal[1] - nominal[0]
    sigma = 200.0 * located.misfit / math.sqrt(len(located.crossings.found)) / length
    findings.add(keys[0], "%", Estimate(100 * (last - first) / length, sigma))
    findings.add(keys[1], "%", Estimate(50 * (first + last - nominal[0] - nominal[1]) / length, sigma))
