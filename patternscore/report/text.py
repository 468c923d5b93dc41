"""The card for a terminal: 80 columns, two readings abreast."""

from __future__ import annotations

from collections import defaultdict
from typing import Any

from rich.console import Console, Group
from rich.table import Table
from rich.text import Text

from patternscore.card import Card, Marked
from patternscore.keys import GROUPS, KEYS, keys_of
from patternscore.report.figures import mark_text, sigma_text, unit_text, value_text

WIDTH = 80
_BAR = 20
_SHORT = {"% of PH": "% PH", "degrees": "deg", "lines": "lin", "TVL/PH": "TVL"}  # units in a narrow column
_TITLES = {
    "resolution": "Resolution",
    "foldback": "Fold-back and crush",
    "geometry": "Geometry",
    "levels": "Levels",
    "stability": "Stability",
}


def print_card(card: Card, console: Console) -> None:
    """Print a card."""
    console.print(card_view(card, plain=console.encoding.lower().replace("-", "") != "utf8"))


def card_view(card: Card, plain: bool = False) -> Any:
    """Card as something rich can print; ``plain`` keeps to ASCII."""
    parts: list[Any] = [_head(card), ""]
    for group in GROUPS:
        parts += [_group_line(group, card.groups[group], plain), *_group_body(group, card), ""]
    parts += _missing(card)
    if card.remarks:
        parts.append(Text("Remarks", style="bold"))
        parts += [_hanging("- ", remark) for remark in card.remarks]
    return Group(*parts)


def _style(score: float | None) -> str:
    if score is None:
        return "dim"
    return "bold" if score < 50 else ""


def _head(card: Card) -> Table:
    frame = card.frame
    line = Table.grid(expand=False)
    line.add_column(width=WIDTH - 18, no_wrap=True, overflow="ellipsis")
    line.add_column(width=18, justify="right", no_wrap=True)
    facts = f"  {frame['samples']} x {frame['rows']}, {frame['standard']}, {frame['levels']} range, plan {card.plan}"
    name = Text(str(frame["name"]), style="bold")
    total = "no score" if card.score is None else f"score {card.score:.0f} of 100"
    line.add_row(name + Text(facts, style="dim"), Text(total, style="bold"))
    return line


def _group_line(group: str, score: float | None, plain: bool) -> Text:
    full, empty = ("#", ".") if plain else ("█", "░")
    title = Text(f"{_TITLES[group]:<22}", style="bold")
    if score is None:
        return title + Text("not read", style="dim")
    filled = round(score / 100 * _BAR)
    return title + Text(full * filled + empty * (_BAR - filled)) + Text(f" {score:3.0f}", style=_style(score))


def _group_body(group: str, card: Card) -> list[Any]:
    names = [key.name for key in keys_of(group) if key.name in card]
    if not names:
        return []
    table = Table.grid(padding=(0, 0))
    for width, flush in ((17, False), (6, True), (8, False), (5, False), (4, True)) * 2:
        table.add_column(width=width, justify="right" if flush else "left", no_wrap=True)
    half = (len(names) + 1) // 2
    for row in range(half):
        left = _cells(card[names[row]])
        right = _cells(card[names[half + row]]) if half + row < len(names) else [Text("")] * 5
        table.add_row(*left, *right)
    doubts = [_hanging(f"  ? {name}: ", card[name].doubt or "") for name in names if card[name].doubt]
    return [table, *doubts]


def _cells(marked: Marked) -> list[Text]:
    key = marked.reading.key
    style = "dim" if marked.doubt else _style(marked.score) if marked.score is not None else ""
    mark = "?" if marked.doubt else mark_text(marked.score)
    return [
        Text(f"  {key}", style=style),
        Text(value_text(key, marked.value, marked.sigma), style=style),
        Text(f" +-{sigma_text(key, marked.sigma)}", style="dim"),
        Text(f" {_SHORT.get(marked.unit, unit_text(marked.unit))}", style=style),
        Text(mark, style=style),
    ]


def _missing(card: Card) -> list[Any]:
    """What could not be read, keys of one reason together."""
    together: dict[str, list[str]] = defaultdict(list)
    for key in KEYS:
        if key in card.missing:
            together[card.missing[key]].append(key)
    if not together:
        return []
    lines: list[Any] = [Text("Not read", style="bold")]
    lines += [_hanging("  ", f"{', '.join(keys)}: {reason}") for reason, keys in together.items()]
    return [*lines, ""]


def _hanging(lead: str, text: str) -> Table:
    """Text whose further lines stand under its first one."""
    line = Table.grid()
    line.add_column(width=len(lead), no_wrap=True)
    line.add_column(width=WIDTH - len(lead))
    line.add_row(lead, text)
    return line
