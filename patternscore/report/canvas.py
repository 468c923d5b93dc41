"""What the pictures share: a figure without a screen, its inks, saving it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from patternscore.errors import UsageError
from patternscore.files import shown

# Dark on warm paper, one strong ink for what was measured, one for what was expected, one for what is wrong.
PAPER, INK, FAINT = "#fbf8f1", "#2b2a27", "#c9c2b2"
MEASURED, EXPECTED, WRONG, OTHER = "#0b6e75", "#8a7f6a", "#b5341f", "#6b4a8b"


def new_figure(width: float, height: float) -> Any:
    """Matplotlib figure of a size in inches that needs no screen."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), facecolor=PAPER, dpi=100)
    FigureCanvasAgg(figure)
    return figure


def dress(axes: Any, title: str, across: str = "", up: str = "") -> None:
    """Title, labels and quiet lines of a panel."""
    axes.set_title(title, loc="left", fontsize=10, color=INK, fontweight="bold")
    axes.set_xlabel(across, fontsize=8.5, color=INK)
    axes.set_ylabel(up, fontsize=8.5, color=INK)
    axes.set_facecolor(PAPER)
    axes.grid(True, color=FAINT, linewidth=0.5, alpha=0.7)
    axes.tick_params(labelsize=8, colors=INK, length=3)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(EXPECTED)


def empty(axes: Any, title: str, reason: str) -> None:
    """Panel that says why there is nothing to draw."""
    axes.set_title(title, loc="left", fontsize=10, color=INK, fontweight="bold")
    axes.set_axis_off()
    axes.text(
        0.5, 0.5, reason, ha="center", va="center", fontsize=9, color=EXPECTED, wrap=True, transform=axes.transAxes
    )


def picture_format(path: Path) -> str:
    """Format that the ending of a picture's name says.

    Raises
    ------
    UsageError
        When it says none that can be drawn.
    """
    suffix = path.suffix.lower()
    if suffix not in (".png", ".svg", ".pdf"):
        ending = shown(suffix) or "no ending"
        raise UsageError(f"{shown(path.name)}: {ending} is no picture format; end the name in .png, .svg or .pdf")
    return suffix[1:]


def save(figure: Any, path: Path) -> None:
    """Write the figure; the ending of the name says the format."""
    kind = picture_format(path)
    dates: dict[str, Any] = {"png": {}, "svg": {"Date": None}, "pdf": {"CreationDate": None}}[kind]
    try:
        figure.savefig(path, format=kind, metadata=dates or None)
    except OSError as error:
        raise UsageError(f"{shown(path)}: cannot be written ({error.strerror}); name another place") from None
