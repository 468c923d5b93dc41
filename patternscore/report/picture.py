"""One frame's card as a picture: what was measured where, and the curves behind the numbers."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np

from patternscore.measure.edge import EdgeTrace
from patternscore.measure.flats import flat_areas
from patternscore.measure.grid import GridTrace
from patternscore.measure.transfer import Transfer
from patternscore.report.canvas import EXPECTED, FAINT, INK, MEASURED, OTHER, WRONG, dress, empty, new_figure, save
from patternscore.report.figures import reading_text
from patternscore.score import Scored
from patternscore.standard import ASPECT

_ENLARGED = 12.0  # how much longer than true the arrows of the grid are drawn, at most


def card_picture(scored: Scored, path: Path | str) -> None:
    """Draw a scored frame: the frame with its features, and a panel for each curve.

    Parameters
    ----------
    scored : Scored
    path : Path
        ``.png``, ``.svg`` or ``.pdf``.
    """
    figure = new_figure(16.0, 12.0)
    grid = figure.add_gridspec(
        3, 4, left=0.045, right=0.985, top=0.9, bottom=0.055, hspace=0.4, wspace=0.27, height_ratios=(1, 1, 1.15)
    )
    _heading(figure, scored)
    _frame_panel(figure.add_subplot(grid[:2, :2]), scored)
    _spread_panel(figure.add_subplot(grid[0, 2]), scored)
    _response_panel(figure.add_subplot(grid[0, 3]), scored)
    _speed_panel(figure.add_subplot(grid[1, 2]), scored, "h")
    _speed_panel(figure.add_subplot(grid[1, 3]), scored, "v")
    _grid_panel(figure.add_subplot(grid[2, :2]), scored)
    _stair_panel(figure.add_subplot(grid[2, 2]), scored)
    _step_panel(figure.add_subplot(grid[2, 3]), scored)
    save(figure, Path(path))


def _heading(figure: Any, scored: Scored) -> None:
    card = scored.card
    total = "no score" if card.score is None else f"score {card.score:.0f} of 100"
    groups = "   ".join(f"{group} {'-' if score is None else f'{score:.0f}'}" for group, score in card.groups.items())
    figure.text(0.045, 0.965, card.name, fontsize=15, fontweight="bold", color=INK)
    figure.text(0.985, 0.965, total, fontsize=15, fontweight="bold", color=INK, ha="right")
    figure.text(0.985, 0.943, groups, fontsize=9.5, color=EXPECTED, ha="right")
    facts = f"{scored.frame.samples} x {scored.frame.rows}, {scored.frame.standard.name}, plan {card.plan}"
    figure.text(0.045, 0.943, facts, fontsize=9.5, color=EXPECTED)


def _said(scored: Scored, key: str) -> str:
    card = scored.card
    return f"{key} {reading_text(card[key])}" if key in card else f"{key}: not read"


def _frame_panel(axes: Any, scored: Scored) -> None:
    """The frame at 4:3 with the edges, crossings, patches and raster ends that were used."""
    frame, located = scored.frame, scored.located
    plan, warp, raster = located.plan, located.warp, frame.raster
    shape = (raster.width_samples / raster.height_lines) / ASPECT
    axes.imshow(frame.luma, cmap="gray", vmin=-7, vmax=109, aspect=shape, interpolation="nearest")
    for edge in plan.edges:
        run = warp.to_frame(np.linspace(edge.start, edge.end, 9))
        axes.plot(*run.T, color=MEASURED if edge.axis == "h" else OTHER, linewidth=1.6)
    areas = flat_areas(frame, located)
    for cores in (areas.steps, areas.flats, areas.field):
        tall, wide = cores.levels.shape[1:]
        for x, y in zip(cores.left, cores.top, strict=True):
            box = np.array([(0, 0), (wide - 1, 0), (wide - 1, tall - 1), (0, tall - 1), (0, 0)]) + (x, y)
            axes.plot(*box.T, color=WRONG, linewidth=0.6, alpha=0.8)
    if located.crossings is not None:
        axes.plot(*located.crossings.found.T, "+", color=MEASURED, markersize=7, markeredgewidth=1.2)
    for ruler in plan.rulers:
        middle = (ruler.band[0] + ruler.band[1]) / 2
        along = np.array(ruler.boundaries)
        points = [(a, middle) if ruler.side in ("top", "bottom") else (middle, a) for a in along]
        axes.plot(*warp.to_frame(points).T, ".", color=OTHER, markersize=2.5)
    ends = located.edges
    for place in (ends.left, ends.right):
        if place is not None:
            axes.axvline(place, color=WRONG, linewidth=0.8, linestyle=":")
    for place in (ends.top, ends.bottom):
        if place is not None:
            axes.axhline(place, color=WRONG, linewidth=0.8, linestyle=":")
    axes.set_xlim(-0.5, frame.samples - 0.5)
    axes.set_ylim(frame.rows - 0.5, -0.5)
    axes.tick_params(labelsize=8, colors=INK)
    axes.set_title("What was measured where", loc="left", fontsize=10, fontweight="bold", color=INK)
    axes.set_xlabel(
        "teal: edges along the line, crossings   violet: edges across, ruler bars   red: patches, ends of the picture",
        fontsize=8.5,
        color=INK,
    )


def _spread_panel(axes: Any, scored: Scored) -> None:
    """Edge spread: level of the step against time."""
    trace: EdgeTrace | None = scored.findings.traces.get("edge")
    if trace is None:
        return empty(axes, "Edge spread", scored.card.missing.get("mtf50_h", "not read"))
    axes.axhline(100.0, color=FAINT, linewidth=0.9)
    axes.axhline(0.0, color=FAINT, linewidth=0.9)
    axes.plot(1e3 * trace.profile_us, 100 * trace.profile, ".", color=EXPECTED, markersize=2.5)
    axes.plot(1e3 * trace.spread.times, 100 * trace.spread.levels, color=MEASURED, linewidth=1.4)
    dress(axes, "Edge spread", f"ns      {_said(scored, 'rise_time')}", f"% of the step   {_said(scored, 'overshoot')}")
    axes.set_xlim(-700, 1500)
    return None


def _response_panel(axes: Any, scored: Scored) -> None:
    """Response along the line against frequency, with its two-sigma band."""
    trace: EdgeTrace | None = scored.findings.traces.get("edge")
    if trace is None:
        return empty(axes, "Response along the line", scored.card.missing.get("mtf50_h", "not read"))
    mhz, gain, spread = trace.curve.frequency, 100 * trace.curve.gain, 200 * trace.curve.sigma
    axes.fill_between(mhz, gain - spread, gain + spread, color=MEASURED, alpha=0.18, linewidth=0)
    axes.plot(mhz, gain, color=MEASURED, linewidth=1.4)
    for key, level in (("bandwidth_h", 100 * 10 ** (-3 / 20)), ("mtf50_h", 50.0), ("mtf10_h", 10.0)):
        if key in scored.card:
            axes.plot(scored.card[key].value, level, "o", color=WRONG, markersize=4.5)
    axes.axvline(scored.frame.standard.luma_mhz, color=EXPECTED, linewidth=0.8, linestyle="--")
    dress(
        axes, "Response along the line", f"MHz      {_said(scored, 'mtf50_h')}", f"%   {_said(scored, 'bandwidth_h')}"
    )
    axes.set_xlim(0, scored.frame.sample_rate / 2)
    axes.set_ylim(bottom=0)
    return None


def _speed_panel(axes: Any, scored: Scored, letter: str) -> None:
    """Local scan speed over its mean, with sigma, and how long the beam runs backwards."""
    name = "Scan speed along the line" if letter == "h" else "Scan speed down the field"
    trace = scored.findings.traces.get(f"scan_{letter}")
    sides = ("left", "right") if letter == "h" else ("top", "bottom")
    if trace is None:
        return empty(axes, name, scored.card.missing.get(f"linearity_{letter}", "not read"))
    speed, sigma = trace.map.speeds()
    walls = np.linspace(0.0, 1.0, len(speed) + 1)
    axes.axhline(100.0, color=EXPECTED, linewidth=0.9, linestyle="--")
    axes.stairs(100 * speed, walls, color=MEASURED, linewidth=1.5)
    middles = (walls[1:] + walls[:-1]) / 2
    axes.errorbar(middles, 100 * speed, yerr=200 * sigma, fmt="none", ecolor=MEASURED, elinewidth=0.9, capsize=2)
    for side, place in zip(sides, (0.0, 1.0), strict=True):
        fold = scored.card.readings.get(f"fold_{side}")
        if fold is not None and fold.value > 3 * fold.sigma and fold.value > 0.02:
            axes.axvline(place, color=WRONG, linewidth=4, alpha=0.6)
            text = f" fold {reading_text(fold)} "
            axes.text(place, 0.04, text, ha="left" if place == 0 else "right", color=WRONG, fontsize=8,
                      transform=axes.get_xaxis_transform())  # fmt: skip
    across = "picture, left to right" if letter == "h" else "picture, top to bottom"
    dress(axes, name, f"{across}      {_said(scored, f'linearity_{letter}')}", "% of the mean speed")
    spread = max(3.0, 1.3 * float(np.max(np.abs(100 * speed - 100))))
    axes.set_ylim(100 - spread, 100 + spread)
    return None


def _grid_panel(axes: Any, scored: Scored) -> None:
    """Error of each crossing against the best ideal grid, enlarged."""
    trace: GridTrace | None = scored.findings.traces.get("grid")
    if trace is None:
        return empty(axes, "Grid errors", scored.card.missing.get("position_error", "not read"))
    raster = scored.frame.raster
    scale = np.array([100 * ASPECT / raster.width_samples, 100 / raster.height_lines])
    ideal = (trace.ideal - [raster.left, raster.top]) * scale
    error = (trace.found - trace.ideal) * scale
    largest = float(np.max(np.hypot(*error.T)))
    enlarged = float(min(_ENLARGED * 4, 6.0 / max(largest, 1e-3)))
    axes.plot(*ideal.T, ".", color=FAINT, markersize=4)
    axes.quiver(
        *ideal.T, *(error * enlarged).T, angles="xy", scale_units="xy", scale=1.0, color=MEASURED, width=0.0022,
        headwidth=4, headlength=5,
    )  # fmt: skip
    axes.set_xlim(-2, 100 * ASPECT + 2)
    axes.set_ylim(104, -4)
    axes.set_aspect("equal")
    dress(
        axes,
        f"Grid errors, drawn {enlarged:.0f} times too long",
        "   ".join(_said(scored, key) for key in ("position_error", "rotation")),
        "% of picture height",
    )
    return None


def _stair_panel(axes: Any, scored: Scored) -> None:
    """Measured against nominal level of the staircase."""
    trace: Transfer | None = scored.findings.traces.get("transfer")
    if trace is None:
        return empty(axes, "Staircase", scored.card.missing.get("gamma", "not read"))
    fine = np.linspace(0, 100, 201)
    axes.plot([0, 100], [0, 100], color=EXPECTED, linewidth=0.9, linestyle="--")
    axes.plot(fine, trace.curve(fine), color=MEASURED, linewidth=1.2)
    held = trace.held_low | trace.held_high
    axes.plot(trace.nominal[~held], trace.measured[~held], "o", color=MEASURED, markersize=3.5)
    axes.plot(trace.nominal[held], trace.measured[held], "s", color=WRONG, markersize=4)
    dress(
        axes,
        "Staircase",
        f"nominal IRE      {_said(scored, 'gamma')}",
        f"measured IRE   {_said(scored, 'black_level')}",
    )
    return None


def _step_panel(axes: Any, scored: Scored) -> None:
    """How far each step lies from its neighbour, against what the curve wants."""
    trace: Transfer | None = scored.findings.traces.get("transfer")
    if trace is None:
        return empty(axes, "Steps apart", scored.card.missing.get("gamma", "not read"))
    nominal, first = np.unique(np.round(trace.nominal), return_index=True)  # a flat may repeat a step's level
    apart = 100 * np.diff(trace.measured[first]) / np.maximum(np.diff(trace.curve(nominal)), 0.05)
    middles = (nominal[1:] + nominal[:-1]) / 2
    axes.axhline(100, color=EXPECTED, linewidth=0.9, linestyle="--")
    axes.vlines(middles, 0, np.clip(apart, -20, 220), color=FAINT, linewidth=1.5)
    low = apart < 50
    axes.plot(middles[~low], np.clip(apart[~low], -20, 220), "o", color=MEASURED, markersize=3.5)
    axes.plot(middles[low], np.clip(apart[low], -20, 220), "s", color=WRONG, markersize=4)
    axes.set_ylim(-25, 225)
    dress(
        axes,
        "Steps apart, % of what they should be",
        f"nominal IRE      {_said(scored, 'black_crush')}",
        _said(scored, "white_crush"),
    )
    return None
