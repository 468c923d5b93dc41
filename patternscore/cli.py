"""The command line: reads what a person typed, calls the package, prints, and sets the exit status."""

from __future__ import annotations

import errno
import math
import os
import sys
from pathlib import Path
from typing import Any, NoReturn

import click

from patternscore.errors import PatternscoreError, UnscorableFrame, UsageError
from patternscore.files import check_place, shown

DONE, UNSCORED, WRONG_USE, UNDER = 0, 1, 2, 3
STOPPED = 130  # as shells count a program that was interrupted
CAUTION = (
    "Tubes and their supplies hold lethal voltages, also unplugged: insulated trimming tool, one hand, discharge "
    "first, isolation transformer, never alone; local codes and licensed practice come first."
)


class _ReaderGone(Exception):
    """Whoever read the output has closed the pipe."""


class _Commands(click.Group):
    """Group whose output may be cut off by its reader, which is no failure."""

    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except BrokenPipeError:
            raise _ReaderGone from None


@click.group(
    cls=_Commands,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100},
    no_args_is_help=False,
    epilog=CAUTION,
)
@click.version_option(package_name="patternscore", message="%(prog)s %(version)s")
def commands() -> None:
    """Score grabbed frames of a test pattern: resolution, ringing, fold-back, geometry, levels, stability."""


def _reading_options(command: Any) -> Any:
    """Options that say how frames are to be read and marked."""
    for option in (
        click.option("--levels", type=click.Choice(["video", "full"]), default="video", show_default=True,
                     help="Codes of black and white: 16 and 235, or the whole range."),
        click.option("--sample-rate", type=float, metavar="MHZ", help="Sample clock, where the size does not tell it."),
        click.option("--standard", type=click.Choice(["525", "625"]), help="Where the size does not tell it."),
        click.option("--limits", type=click.Path(path_type=Path), metavar="FILE", help="TOML that replaces limits."),
        click.option("--plan", type=click.Path(path_type=Path), metavar="FILE", help="TOML plan of the pattern."),
    ):  # fmt: skip
        command = option(command)
    return command


def _reader(
    standard: str | None, sample_rate: float | None, levels: str, limits: Path | None, plan: Path | None
) -> Any:
    from patternscore.compare import Reader
    from patternscore.limits import read_limits, shipped_limits
    from patternscore.load import standard_of

    if sample_rate is not None:
        standard_of(720, 480, "", standard, sample_rate)
    found_plan = None
    if plan is not None:
        from patternscore.planfile import read_plan

        found_plan = read_plan(plan)
    return Reader(
        standard,
        sample_rate,
        "full" if levels == "full" else "video",
        found_plan,
        shipped_limits() if limits is None else read_limits(limits),
    )


@commands.command(name="score")
@click.argument("frames", nargs=-1, required=True, type=click.Path(path_type=Path), metavar="FRAME...")
@click.option("--json", "as_json", is_flag=True, help="Print one JSON object a frame instead of the card.")
@click.option(
    "--picture", type=click.Path(path_type=Path), metavar="PNG", help="Draw what was measured where (one frame)."
)
@click.option("--together", is_flag=True, help="Take all files and pages as grabs of one picture: score their average.")
@click.option("--fail-under", type=click.FloatRange(0, 100), metavar="N", help="Exit with 3 when a score is under N.")
@_reading_options
def score_command(
    frames: tuple[Path, ...],
    as_json: bool,
    picture: Path | None,
    together: bool,
    fail_under: float | None,
    **reading: Any,
) -> int:
    """Measure frames and print their cards."""
    if fail_under is not None and math.isnan(fail_under):
        raise UsageError("--fail-under nan: is no score; give one from 0 to 100")
    if picture is not None and len(frames) > 1 and not together:
        raise UsageError("--picture draws one frame; score one, or several --together")
    _check_picture(picture)
    reader = _reader(**reading)
    status, lowest = DONE, 100.0
    groups = [list(frames)] if together else [[path] for path in frames]
    for group in groups:
        try:
            card = _score_group(group, reader, picture, together)
        except Exception as error:
            if len(groups) == 1 and not isinstance(error, UnscorableFrame):
                raise
            _complain(str(error) if isinstance(error, PatternscoreError) else _stopped(group[0], error))
            status = UNSCORED
            continue
        _show(card, as_json)
        lowest = min(lowest, card.score if card.score is not None else 0.0)
    if status == DONE and fail_under is not None and lowest < fail_under:
        return UNDER
    return status


def _stopped(path: Path, error: Exception) -> str:
    from patternscore.compare import stopped

    return stopped(path, error).reason


def _score_group(paths: list[Path], reader: Any, picture: Path | None, together: bool) -> Any:
    from patternscore.load import load_frames
    from patternscore.score import score_frame, score_together

    told = {"standard": reader.standard, "sample_rate": reader.sample_rate, "levels": reader.levels}
    if together:
        grabs = [frame for path in paths for frame in load_frames(path, **told)]
        if len(grabs) < 2:
            raise UsageError("--together needs several frames; name several files, or one of several pages")
        scored = score_together(grabs, reader.plan, limits=reader.limits)
    else:
        frame = load_frames(paths[0], **told, most=1)[0]
        scored = score_frame(frame, reader.plan, limits=reader.limits)
    if picture is not None:
        from patternscore.report.picture import card_picture

        card_picture(scored, picture)
    return scored.card


def _show(card: Any, as_json: bool) -> None:
    if as_json:
        click.echo(card.to_json())
        return
    from patternscore.report.console import console_on
    from patternscore.report.text import print_card

    print_card(card, console_on())


@commands.command(name="compare")
@click.argument("folder", type=click.Path(path_type=Path))
@click.option(
    "--by", metavar="KEY", default="name", show_default=True, help="Order of rows: name, setting, score or a reading."
)
@click.option("--csv", "csv_file", type=click.Path(path_type=Path), metavar="FILE", help="Write all readings as CSV.")
@click.option(
    "--json",
    "json_file",
    type=click.Path(path_type=Path),
    metavar="FILE",
    help="Write the cards as JSON lines (- prints them).",
)
@click.option("--picture", type=click.Path(path_type=Path), metavar="PNG", help="Draw trend curves over the settings.")
@click.option("--jobs", type=click.IntRange(1), metavar="N", help="Processes to use; all cores where left out.")
@_reading_options
def compare_command(
    folder: Path,
    by: str,
    csv_file: Path | None,
    json_file: Path | None,
    picture: Path | None,
    jobs: int | None,
    **reading: Any,
) -> int:
    """Score all frames of a folder and lay them side by side."""
    from patternscore.compare import sorted_by
    from patternscore.load import list_frames

    _check_order(by)
    _check_picture(picture)
    for place in (csv_file, json_file):
        if place is not None and str(place) != "-":
            check_place(place)
    reader = _reader(**reading)
    paths = list_frames(folder)
    outcomes = _with_progress(paths, reader, jobs)
    cards = sorted_by([outcome.card for outcome in outcomes if outcome.card is not None], by, reader.limits)
    failed = [outcome for outcome in outcomes if outcome.card is None]
    for outcome in failed:
        _complain(outcome.reason)
    if str(json_file) == "-":
        for card in cards:
            click.echo(card.to_json())
    else:
        from patternscore.report.console import console_on
        from patternscore.report.table import print_comparison

        first = by if by not in ("name", "setting", "score") else None
        print_comparison(cards, reader.limits, console_on(), first)
        if json_file is not None:
            _write(json_file, "".join(card.to_json() + "\n" for card in cards))
    if csv_file is not None:
        _write_csv(csv_file, cards)
    if picture is not None and cards:
        from patternscore.report.trends import trend_picture

        trend_picture(cards, picture, reader.limits)
    return UNSCORED if failed else DONE


def _check_order(by: str) -> None:
    from patternscore.keys import KEYS, meant

    known = ["name", "setting", "score", *KEYS]
    if by not in known:
        raise UsageError(f"--by {shown(by)}: no such reading; {meant(by, known)}")


def _check_picture(path: Path | None) -> None:
    """Refuse a picture's name before the work is done."""
    if path is None:
        return
    from patternscore.report.canvas import picture_format

    picture_format(path)
    check_place(path)


def _with_progress(paths: list[Path], reader: Any, jobs: int | None) -> Any:
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn

    from patternscore.compare import score_files
    from patternscore.report.console import console_on

    columns = (TextColumn("scoring"), BarColumn(), MofNCompleteColumn(), TimeRemainingColumn())
    quiet = not sys.stderr.isatty()
    with Progress(*columns, console=console_on(stderr=True), transient=True, disable=quiet) as progress:
        task = progress.add_task("", total=len(paths))
        return score_files(paths, reader, jobs, lambda: progress.advance(task))


def _write_csv(path: Path, cards: list[Any]) -> None:
    import csv
    import io

    from patternscore.report.table import rows_of

    text = io.StringIO()
    head, rows = rows_of(cards)
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(head)
    writer.writerows(rows)
    _write(path, text.getvalue())


def _write(path: Path, text: str) -> None:
    try:
        path.write_text(text, encoding="utf-8")
    except OSError as error:
        raise UsageError(f"{shown(path)}: cannot be written ({error.strerror}); name another place") from None


@commands.command(name="chart")
@click.argument("out", type=click.Path(path_type=Path))
@click.option(
    "--standard", type=click.Choice(["525", "625"]), default="525", show_default=True, help="Scanning standard."
)
@click.option(
    "--size", metavar="WxH", default="5760x1920", show_default=True, help="Samples and lines of a PNG or TIFF."
)
@click.option("--bits", type=click.Choice(["8", "16"]), default="16", show_default=True, help="Depth of a PNG or TIFF.")
def chart_command(out: Path, standard: str, size: str, bits: str) -> int:
    """Draw the chart: exactly the active picture, linear in level, as PNG, TIFF, SVG or PDF."""
    from patternscore.chart import write_chart
    from patternscore.standard import standard_named

    width, _, height = size.lower().partition("x")
    if not (width.isdigit() and height.isdigit()):
        raise UsageError(f"--size {shown(size)}: is no size; write it as WIDTHxHEIGHT, such as 5760x1920")
    write_chart(out, standard_named(standard), int(width), int(height), int(bits))
    return DONE


def _complain(message: str) -> None:
    click.echo(f"patternscore: {message}", err=True)


def main() -> NoReturn:
    """Run the command and leave with its exit status; whatever a user can cause is one line on stderr."""
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")  # small matrices: threads only cost time
    for stream in ("stdout", "stderr"):
        if getattr(sys, stream) is None:  # closed by whoever started the program
            setattr(sys, stream, os.fdopen(os.open(os.devnull, os.O_WRONLY), "w"))
    sys.exit(_status())


def _status() -> int:
    """Run the command; what went wrong is said, and told by the status."""
    try:
        status = commands.main(prog_name="patternscore", standalone_mode=False)
    except (click.exceptions.Abort, KeyboardInterrupt):
        _complain("stopped")
        return STOPPED
    except click.ClickException as error:
        _complain(shown(" ".join(error.format_message().split())).rstrip(".") + "; see --help")
        return WRONG_USE
    except PatternscoreError as error:
        _complain(str(error))
        return UNSCORED if isinstance(error, UnscorableFrame) else WRONG_USE
    except _ReaderGone:
        _drop_output()
        return DONE
    except OSError as error:
        if error.errno not in (errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EIO):
            raise
        _drop_output()
        _complain(f"output cannot be written ({error.strerror}); make room, or print to another place")
        return WRONG_USE
    return status if isinstance(status, int) else DONE


def _drop_output() -> None:
    """Let what is still waiting to be printed go nowhere, so that leaving does not fail on it."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
