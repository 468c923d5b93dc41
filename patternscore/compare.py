"""Scores the frames of a folder on all cores; only cards are kept."""

from __future__ import annotations

import os
from collections.abc import Callable, Generator, Iterator
from concurrent.futures import FIRST_COMPLETED, BrokenExecutor, Future, ProcessPoolExecutor, wait
from dataclasses import dataclass
from itertools import islice
from pathlib import Path

from patternscore.card import Card
from patternscore.errors import PatternscoreError
from patternscore.files import shown
from patternscore.keys import KEYS
from patternscore.limits import Limits
from patternscore.plan import Plan
from patternscore.standard import Levels

_POOL_FROM = 12  # fewer frames than this are done before a second process has started


@dataclass(frozen=True, slots=True)
class Reader:
    """How frames are to be read and scored."""

    standard: str | None = None
    sample_rate: float | None = None
    levels: Levels = "video"
    plan: Plan | None = None
    limits: Limits | None = None


@dataclass(frozen=True, slots=True)
class Outcome:
    """What came of one file: a card, or the reason why there is none."""

    name: str
    card: Card | None
    reason: str = ""


def score_file(path: Path, reader: Reader) -> Outcome:
    """Read and score one file; whatever goes wrong with it becomes a reason, never an exception."""
    from patternscore.load import load_frame
    from patternscore.score import score

    try:
        frame = load_frame(path, standard=reader.standard, sample_rate=reader.sample_rate, levels=reader.levels)
        return Outcome(frame.name, score(frame, reader.plan, limits=reader.limits))
    except PatternscoreError as error:
        return Outcome(shown(path.name), None, str(error))
    except Exception as error:  # a want of memory, or a fault of ours: the others must not pay for it
        return stopped(path, error)


def stopped(path: Path, error: BaseException) -> Outcome:
    """Outcome of a file whose scoring broke off."""
    name = shown(path.name)
    return Outcome(name, None, f"{name}: scoring stopped ({type(error).__name__}); score it alone to see why")


def score_files(
    paths: list[Path], reader: Reader, jobs: int | None = None, tick: Callable[[], None] = lambda: None
) -> list[Outcome]:
    """Score files, several at a time; outcomes in the order of the paths.

    Parameters
    ----------
    jobs : int, optional
        Processes; the number of cores where left out. One process works in this one.
    tick : callable
        Called after each file.
    """
    jobs = min(jobs or available_cores(), len(paths))
    if jobs <= 1 or len(paths) < _POOL_FROM:
        return [_ticked(score_file(path, reader), tick) for path in paths]
    found: dict[int, Outcome] = {}
    for index, outcome in _pooled(paths, reader, jobs):
        found[index] = _ticked(outcome, tick)
    return [found[index] for index in range(len(paths))]


def available_cores() -> int:
    """Cores that this process may use."""
    try:
        return len(os.sched_getaffinity(0))
    except AttributeError:  # not on every system
        return os.cpu_count() or 1


def _ticked(outcome: Outcome, tick: Callable[[], None]) -> Outcome:
    tick()
    return outcome


_File = tuple[int, Path]


def _pooled(paths: list[Path], reader: Reader, jobs: int) -> Iterator[tuple[int, Outcome]]:
    """Score on several processes; a file that kills its process costs only itself."""
    waiting = enumerate(paths)
    while True:
        suspects = yield from _until_a_process_dies(waiting, reader, jobs)
        if not suspects:
            return
        for index, path in suspects:
            yield index, _apart(path, reader)


def _until_a_process_dies(
    waiting: Iterator[_File], reader: Reader, jobs: int
) -> Generator[tuple[int, Outcome], None, list[_File]]:
    """Keep a few files a process under way, so that memory does not grow with the folder.

    Returns the files that were under way when a process died: none where all went well.
    """
    running: dict[Future[Outcome], _File] = {}
    with ProcessPoolExecutor(jobs, initializer=_one_thread) as pool:
        while True:
            for file in islice(waiting, 3 * jobs - len(running)):
                try:
                    running[pool.submit(score_file, file[1], reader)] = file
                except BrokenExecutor:
                    return [*running.values(), file]
            if not running:
                return []
            for future in wait(running, return_when=FIRST_COMPLETED).done:
                if isinstance(future.exception(), BrokenExecutor):
                    return list(running.values())
                index, path = running.pop(future)
                yield index, _result(future, path)


def _apart(path: Path, reader: Reader) -> Outcome:
    """Score a file in a process of its own, which it may kill."""
    with ProcessPoolExecutor(1, initializer=_one_thread) as pool:
        return _result(pool.submit(score_file, path, reader), path)


def _result(future: Future[Outcome], path: Path) -> Outcome:
    error = future.exception()
    return future.result() if error is None else stopped(path, error)


def _one_thread() -> None:
    """A worker has one core: libraries must not start threads of their own."""
    import cv2

    cv2.setNumThreads(1)


def sorted_by(cards: list[Card], key: str, limits: Limits) -> list[Card]:
    """Cards in the order of a reading, best first; "score", "name" and "setting" are known too."""
    from patternscore.load import natural
    from patternscore.settings_in_names import settings_in_names

    if key == "name":
        return sorted(cards, key=lambda card: natural(card.name))
    if key == "score":
        return sorted(cards, key=lambda card: -(card.score if card.score is not None else -1.0))
    if key == "setting":
        settings = settings_in_names([card.name for card in cards])
        order = [(setting is None, setting.number if setting else 0.0) for setting in settings]
        return [cards[row] for row in sorted(range(len(cards)), key=lambda row: order[row])]
    entry = KEYS[key]
    limit = limits.get(key)

    def worth(card: Card) -> tuple[bool, float]:
        if key not in card:
            return True, 0.0
        value = card[key].value
        if limit is not None and limit.target is not None:
            return False, abs(value - limit.target)
        return False, -value if entry.better == "high" else value

    return sorted(cards, key=worth)
