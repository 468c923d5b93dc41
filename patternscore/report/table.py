"""Cards side by side: a row a frame, change against the frame before, best value of each column."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from rich.console import Console
from rich.table import Table
from rich.text import Text

from patternscore.card import Card
from patternscore.keys import KEYS
from patternscore.limits import Limits
from patternscore.report.figures import unit_text, value_text
from patternscore.settings_in_names import settings_in_names

# What a person looks at first; of these the ones that change most are shown when room is short.
COLUMNS = (
    "mtf50_h", "overshoot", "bandwidth_h", "fold_left", "fold_right", "linearity_h", "linearity_v", "black_level",
    "black_crush", "white_level", "gamma", "noise", "jitter", "mtf50_v", "crush_left", "crush_right", "width",
    "rotation",
)  # fmt: skip
_CELL = 15
_STILL = 0.05  # of movement: less is no change worth a column
_FEWEST = 3


@dataclass(frozen=True, slots=True)
class Cell:
    """A reading in a table: its text, its change against the frame before, and whether it is the best.

    ``change`` is empty for the first frame; ``real`` says that it is more than the two sigmas explain.
    """

    value: str
    change: str
    real: bool
    best: bool


def short_key(key: str) -> str:
    """Column head: the key, and its unit below."""
    return f"{key}\n{unit_text(KEYS[key].unit)}"


def chosen_columns(cards: Sequence[Card], room: int, first: str | None = None) -> list[str]:
    """Readings to show: those that change most against their noise, in the usual order."""
    worth = {key: _movement(cards, key) for key in COLUMNS if any(key in card for card in cards)}
    order = sorted(worth, key=lambda key: -worth[key])
    moving = [key for key in order if worth[key] > _STILL]
    order = moving if len(moving) >= _FEWEST else order[:_FEWEST]
    kept = set(order[:room])
    if first is not None and first in KEYS:
        kept = {first, *[key for key in order if key != first][: room - 1]}
    return sorted(kept, key=lambda key: (key != first, list(KEYS).index(key)))


def _movement(cards: Sequence[Card], key: str) -> float:
    seen = [card[key] for card in cards if key in card]
    if len(seen) < 2:
        return 0.0
    values = [marked.value for marked in seen]
    usual = sorted(marked.sigma for marked in seen)[len(seen) // 2]
    # A change counts by the noise it stands above, but also by what it means: its share of the value's scale.
    scale = max(abs(value) for value in values) + 10.0 ** -KEYS[key].decimals * 10
    spread = max(values) - min(values)
    return min(spread / (usual + 10.0 ** -KEYS[key].decimals), 50.0) * spread / scale


def best_of(cards: Sequence[Card], key: str, limits: Limits) -> set[int]:
    """Rows whose value of a reading is the best; none where no two differ by more than noise."""
    known = {row: card[key].value for row, card in enumerate(cards) if key in card and not card[key].doubt}
    limit = limits.get(key)
    if len(known) < 2:
        return set()
    low, high = min(known, key=lambda row: known[row]), max(known, key=lambda row: known[row])
    if not cards[high][key].reading.differs_from(cards[low][key].reading):
        return set()
    if limit is not None and limit.target is not None:
        target = limit.target
        worth = {row: -abs(value - target) for row, value in known.items()}
    else:
        sign = 1.0 if KEYS[key].better == "high" else -1.0
        worth = {row: sign * value for row, value in known.items()}
    top = max(worth.values())
    return {row for row, value in worth.items() if value == top}


def cells(cards: Sequence[Card], key: str, limits: Limits) -> list[Cell | None]:
    """One column: a cell for each card, None where the reading is missing."""
    best = best_of(cards, key, limits)
    column: list[Cell | None] = []
    for row, card in enumerate(cards):
        if key not in card:
            column.append(None)
            continue
        here = card[key]
        before = cards[row - 1][key] if row and key in cards[row - 1] else None
        change, real = "", False
        if before is not None:
            step = here.value - before.value
            change = value_text(key, step, max(here.sigma, before.sigma))
            change = change if change.startswith("-") else f"+{change}"
            real = here.reading.differs_from(before.reading)
        column.append(Cell(value_text(key, here.value, here.sigma), change, real, row in best))
    return column


def comparison_view(cards: Sequence[Card], limits: Limits, width: int = 80, first: str | None = None) -> Table:
    """Table of cards for a terminal of a width.

    A star marks the best value of a column; a change against the row above that is more than noise stands
    in brackets.
    """
    room = max((width - 22) // _CELL, 2)
    keys = chosen_columns(cards, room, first)
    labels = _labels(cards)
    named = max(map(len, labels), default=8)
    table = Table(box=None, pad_edge=False, padding=(0, 1, 0, 0))
    table.add_column(
        "frame", no_wrap=True, overflow="ellipsis", width=min(named, max(width - 7 - _CELL * len(keys), 13))
    )
    table.add_column("score", justify="right", no_wrap=True)
    for key in keys:
        table.add_column(short_key(key), justify="right", no_wrap=True)
    columns = [cells(cards, key, limits) for key in keys]
    scores = [card.score for card in cards]
    top = max((score for score in scores if score is not None), default=None)
    for row, card in enumerate(cards):
        score = "-" if card.score is None else f"{card.score:.0f}"
        star = "*" if len(cards) > 1 and top is not None and card.score == top else " "
        table.add_row(labels[row], Text(score + star), *(_cell_text(column[row]) for column in columns))
    return table


def _labels(cards: Sequence[Card]) -> list[str]:
    """Row heads: the setting, where the name tells it, and the name."""
    names = [card.name for card in cards]
    return [
        name if setting is None else f"{setting}  {name}"
        for name, setting in zip(names, settings_in_names(names), strict=True)
    ]


def _cell_text(cell: Cell | None) -> Text:
    if cell is None:
        return Text("-", style="dim")
    change = f"[{cell.change}]" if cell.real else ""
    text = Text(cell.value + ("*" if cell.best else " "), style="bold" if cell.best else "")
    return text + Text(f"{change:>8}", style="" if cell.best else "dim")


def print_comparison(cards: Sequence[Card], limits: Limits, console: Console, first: str | None = None) -> None:
    """Print the table of cards; nothing where there are none."""
    if cards:
        console.print(comparison_view(cards, limits, console.width, first))
        console.print(Text("* best of the column   [change] against the row above, where more than noise", style="dim"))


def rows_of(cards: Sequence[Card]) -> tuple[list[str], list[list[Any]]]:
    """Head and rows of a CSV file: every reading with its sigma, empty where missing."""
    keys = [key for key in KEYS if any(key in card for card in cards)]
    head = ["frame", "setting", "unit", "score"]
    for key in keys:
        head += [f"{key} [{KEYS[key].unit}]", f"{key} sigma"]
    rows = []
    for card, setting in zip(cards, settings_in_names([card.name for card in cards]), strict=True):
        row: list[Any] = [card.name, setting.number if setting else "", setting.unit if setting else ""]
        row.append("" if card.score is None else round(card.score, 2))
        for key in keys:
            row += [f"{card[key].value:.6g}", f"{card[key].sigma:.3g}"] if key in card else ["", ""]
        rows.append(row)
    return head, rows
