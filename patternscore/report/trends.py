"""Readings of many frames as curves over the setting of the knob (or over the frames in order)."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np

from patternscore.card import Card
from patternscore.keys import KEYS
from patternscore.limits import Limits
from patternscore.report.canvas import FAINT, INK, MEASURED, WRONG, dress, new_figure, save
from patternscore.report.figures import unit_text
from patternscore.report.table import best_of, chosen_columns
from patternscore.settings_in_names import settings_in_names

_PANELS = 11


def trend_picture(cards: Sequence[Card], path: Path | str, limits: Limits) -> None:
    """Draw the readings that change most, with error bars of two sigma and the best value marked.

    Parameters
    ----------
    cards : sequence of Card
        In the order of the table.
    path : Path
        ``.png``, ``.svg`` or ``.pdf``.
    """
    places, label, names = _across(cards)
    keys = chosen_columns(cards, _PANELS)
    rows = (len(keys) + 1 + 2) // 3
    figure = new_figure(14.0, 0.9 + 2.7 * rows)
    grid = figure.add_gridspec(
        rows, 3, left=0.06, right=0.985, top=1 - 0.75 / figure.get_figheight(), bottom=0.6 / figure.get_figheight(),
        hspace=0.5, wspace=0.26,
    )  # fmt: skip
    figure.text(
        0.06,
        1 - 0.42 / figure.get_figheight(),
        f"{len(cards)} frames, over {label}",
        fontsize=13,
        color=INK,
        fontweight="bold",
    )
    _score_panel(figure.add_subplot(grid[0, 0]), cards, places, label)
    for number, key in enumerate(keys, start=1):
        axes = figure.add_subplot(grid[number // 3, number % 3])
        _panel(axes, cards, key, places, label, best_of(cards, key, limits))
    for axes in figure.axes:
        if names:
            axes.set_xticks(places, names, rotation=40 if len(names) > 6 else 0, fontsize=7)
    save(figure, Path(path))


def _across(cards: Sequence[Card]) -> tuple[Any, str, list[str]]:
    """Places on the x axis, its label, and tick names where frames have no common setting."""
    settings = settings_in_names([card.name for card in cards])
    known = [setting for setting in settings if setting is not None]
    if len(known) == len(cards) and len({setting.unit for setting in known}) == 1:
        unit, knob = known[0].unit, known[0].knob or "setting"
        return np.array([setting.number for setting in known]), f"{knob}, {unit}" if unit else knob, []
    names = [card.name if len(card.name) <= 14 else f"{card.name[:11]}..." for card in cards]
    return np.arange(len(cards), dtype=float), "frames", names if len(names) <= 16 else []


def _score_panel(axes: Any, cards: Sequence[Card], places: Any, label: str) -> None:
    known = [row for row, card in enumerate(cards) if card.score is not None]
    order = sorted(known, key=lambda row: places[row])
    scores = [cards[row].score or 0.0 for row in order]
    axes.plot(places[order], scores, "-o", color=INK, linewidth=1.3, markersize=4)
    if scores:
        top = order[int(np.argmax(scores))]
        axes.plot(places[top], cards[top].score, "o", color=WRONG, markersize=7)
    axes.set_ylim(0, 103)
    dress(axes, "score", label, "of 100")


def _panel(axes: Any, cards: Sequence[Card], key: str, places: Any, label: str, best: set[int]) -> None:
    order = sorted((row for row, card in enumerate(cards) if key in card), key=lambda row: places[row])
    values = np.array([cards[row][key].value for row in order])
    sigma = np.array([cards[row][key].sigma for row in order])
    axes.plot(places[order], values, color=FAINT, linewidth=1.2)
    axes.errorbar(
        places[order], values, yerr=2 * sigma, fmt="o", color=MEASURED, markersize=4, elinewidth=1, capsize=2.5
    )
    for row in best:
        axes.plot(places[row], cards[row][key].value, "o", color=WRONG, markersize=7)
    dress(axes, key, label, unit_text(KEYS[key].unit))
