"""Readings of the resolution group, from the edges of a located plan."""

from __future__ import annotations

import contextlib
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Located
from patternscore.measure.corner import fit_corners
from patternscore.measure.esf import EdgeSpread, TransferCurve, edge_spread, transfer_curve
from patternscore.measure.fitedge import FittedEdge, fit_edges
from patternscore.measure.strip import Run, lay_runs
from patternscore.reading import Estimate, Findings

Array = npt.NDArray[np.float64]
CORNERS = ("top left", "top right", "bottom left", "bottom right")
BANDWIDTH = 10.0 ** (-3.0 / 20.0)
MEGAHERTZ = (1, 2, 3, 4, 5)
ALONG = (
    "mtf50_h",
    "mtf10_h",
    "mtf50_h_tvl",
    "mtf10_h_tvl",
    "bandwidth_h",
    *(f"response_{mhz}mhz" for mhz in MEGAHERTZ),
    "flatness",
    "rise_time",
    "overshoot",
    "preshoot",
    "ringing",
)
GUESSED = 1.0  # sigma in percent of the step from which a level beyond the coding range is not known
HIGHEST_ACROSS = 1.0  # cycles per line up to which the slant of the edges shows the response across the lines


@dataclass(frozen=True, slots=True, eq=False)
class EdgeTrace:
    """What the edges at the centre showed, for pictures and for the stability group.

    Attributes
    ----------
    profile_us, profile : (n,) float64
        Piled-up profile of the edges: time from the edge and level, 0 to 1.
    spread : EdgeSpread
        Edge spread of the fitted response.
    curve : TransferCurve
        Response along the line.
    across : TransferCurve or None
        Response across the lines, cycles per line.
    lines : (m,) int64
        Frame lines of the shifts.
    line_shifts, line_sigma : (m,) float64
        Shift of each line against the smooth run of its edges, later positive, and its sigma, us.
    """

    profile_us: Array
    profile: Array
    spread: EdgeSpread
    curve: TransferCurve
    across: TransferCurve | None
    lines: npt.NDArray[np.int64]
    line_shifts: Array
    line_sigma: Array


def read_edges(frame: Frame, located: Located) -> Findings:
    """Read resolution along and across the lines, at the centre and in the corners.

    Parameters
    ----------
    frame : Frame
        The frame.
    located : Located
        Where the plan's edges lie in it, within two or three samples.

    Returns
    -------
    Findings
        The resolution group, and ``jitter`` of the lines that the edges cross; trace ``edge`` of type
        ``EdgeTrace``.
    """
    findings = Findings()
    runs = lay_runs(located, list(located.plan.edges))
    along, across = _fit(frame, runs, "h"), _fit(frame, runs, "v")
    if isinstance(along, str):
        findings.miss(along, *ALONG, "corner_loss", "jitter")
    if isinstance(across, str):
        findings.miss(across, "mtf50_v", "mtf10_v")
    upright = _read_across(findings, frame, across, along) if isinstance(across, FittedEdge) else None
    if isinstance(along, FittedEdge):
        known = _seen_through(along, across) if isinstance(across, FittedEdge) else None
        _read_along(findings, frame, along, known, upright)
        _read_corners(findings, frame, runs, along, known)
    return findings


def _fit(frame: Frame, runs: dict[str, Run], axis: str) -> FittedEdge | str:
    """Fit the centre's edges of one axis; the reason where they cannot be read."""
    blocks = _blocks(runs, "centre", axis)
    if not blocks:
        return "the pattern has no edge for it"
    try:
        return fit_edges(frame, blocks, across=axis == "v")
    except Unreadable as reason:
        return reason.reason
    except np.linalg.LinAlgError:
        return "no response fits what is seen of the edges"


def _blocks(runs: dict[str, Run], place: str, axis: str) -> list[list[Run]]:
    """Edges of a place, those of one block together."""
    found: dict[str, list[Run]] = {}
    for run in runs.values():
        if run.edge.place == place and run.edge.axis == axis:
            found.setdefault(run.edge.block, []).append(run)
    return list(found.values())


def _seen_through(fitted: FittedEdge, other: FittedEdge) -> Array:
    """Modulus that the other direction's response leaves in a slanted edge."""
    modulus = np.abs(other.response.gain)
    return np.maximum(np.interp(fitted.response.nu * fitted.slant, other.response.nu, modulus), 0.05)


def _take(findings: Findings, key: str, unit: str, where: str, read: Callable[[], Estimate]) -> Estimate | None:
    try:
        estimate = read()
    except Unreadable as reason:
        findings.miss(reason.reason, key)
        return None
    findings.add(key, unit, estimate, where)
    return estimate


def _read_along(
    findings: Findings, frame: Frame, fitted: FittedEdge, known: Array | None, across: TransferCurve | None
) -> None:
    rate, standard = frame.sample_rate, frame.standard
    curve = transfer_curve(fitted.response, rate, known)
    spread = edge_spread(fitted.response, fitted.left, fitted.right, rate, known)
    tvl = standard.tvl_from_mhz(1.0)
    for key, level in (("mtf50_h", 0.5), ("mtf10_h", 0.1)):
        found = _take(findings, key, "MHz", "centre", partial(curve.falls_to, level, rate / 2))
        if found is None:
            findings.miss(findings.missing[key], f"{key}_tvl")
        else:
            estimate = Estimate(found.value * tvl, found.sigma * tvl)
            findings.add(f"{key}_tvl", "TVL/PH", estimate, "centre")
    _take(findings, "bandwidth_h", "MHz", "centre", partial(curve.falls_to, BANDWIDTH, rate / 2))
    for mhz in MEGAHERTZ:
        _take(findings, f"response_{mhz}mhz", "dB", "centre", partial(curve.decibels, float(mhz)))
    _take(findings, "flatness", "dB", "centre", partial(curve.flatness, 0.5, standard.luma_mhz))
    _take(findings, "rise_time", "ns", "centre", spread.rise_time)
    _take(findings, "overshoot", "%", "centre", partial(_unclipped, spread.overshoot, fitted))
    _take(findings, "preshoot", "%", "centre", partial(_unclipped, spread.preshoot, fitted))
    poles = fitted.poles and Estimate(fitted.poles.value * rate, fitted.poles.sigma * rate)
    _take(findings, "ringing", "MHz", "centre", partial(spread.ringing, poles))
    ns = 1e3 / rate
    alignment = fitted.alignment
    findings.add("jitter", "ns", Estimate(alignment.jitter * ns, alignment.jitter_sigma * ns), "centre")
    profile, sound = fitted.pile.whole()
    findings.traces["edge"] = EdgeTrace(
        profile_us=fitted.pile.times[sound] / rate,
        profile=profile[sound] + 0.5,
        spread=spread,
        curve=curve,
        across=across,
        lines=fitted.strips[0].rows,
        line_shifts=alignment.raw / rate,
        line_sigma=alignment.row_sigma / rate,
    )


def _unclipped(read: Callable[[], Estimate], fitted: FittedEdge) -> Estimate:
    """Give a reading of the highest or lowest level, unless that is only guessed beyond the coding range."""
    found = read()
    if fitted.pile.clipped.any() and found.sigma > GUESSED:
        raise Unreadable("the edge swings beyond the coding range")
    return found


def _read_across(findings: Findings, frame: Frame, fitted: FittedEdge, along: FittedEdge | str) -> TransferCurve:
    known = _seen_through(fitted, along) if isinstance(along, FittedEdge) else None
    curve = transfer_curve(fitted.response, 1.0, known)
    lines = frame.raster.height_lines
    for key, level in (("mtf50_v", 0.5), ("mtf10_v", 0.1)):

        def read(level: float = level) -> Estimate:
            found = curve.falls_to(level, HIGHEST_ACROSS)
            return Estimate(2.0 * lines * found.value, 2.0 * lines * found.sigma)

        _take(findings, key, "TVL/PH", "centre", read)
    return curve


def _read_corners(
    findings: Findings, frame: Frame, runs: dict[str, Run], centre: FittedEdge, known: Array | None
) -> None:
    reading = next((entry for entry in findings.readings if entry.key == "mtf50_h"), None)
    if reading is None:
        findings.miss("there is no response at the centre to compare the corners with", "corner_loss")
        return
    blocks = {place: held[0] for place in CORNERS if (held := _blocks(runs, place, "h"))}
    found, places = [], []
    for place, response in fit_corners(frame, blocks, centre).items():
        with contextlib.suppress(Unreadable):
            curve = transfer_curve(response, frame.sample_rate, known)
            found.append(curve.falls_to(0.5, frame.sample_rate / 2))
            places.append(place)
    if not found:
        findings.miss("no corner shows an edge that can be read", "corner_loss")
        return
    mean = float(np.mean([estimate.value for estimate in found]))
    sigma = float(np.sqrt(sum(estimate.sigma**2 for estimate in found))) / len(found)
    loss = Estimate(
        100.0 * (1.0 - mean / reading.value),
        100.0 / reading.value * float(np.hypot(sigma, mean / reading.value * reading.sigma)),
    )
    where = "corners" if len(places) == len(CORNERS) else " and ".join(places)
    findings.add("corner_loss", "%", loss, where)
