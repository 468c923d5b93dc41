"""Speed and memory, recorded by pytest-benchmark; nothing here fails because a machine is slow.

``pytest tests/test_speed.py --benchmark-only --benchmark-autosave`` keeps a record to compare with.
"""

from __future__ import annotations

import subprocess
import sys
import tracemalloc
from collections.abc import Callable
from pathlib import Path

import cv2
import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from patternscore.chain import Chain, Sweep, grab, responses
from patternscore.compare import Reader, score_files
from patternscore.frame import Frame
from patternscore.layout import chart_plan
from patternscore.load import load_frame
from patternscore.locate import locate
from patternscore.measure.edge import read_edges
from patternscore.measure.grid import read_grid
from patternscore.measure.levels import read_levels
from patternscore.measure.scan import read_scan
from patternscore.measure.stability import read_stability
from patternscore.score import score_frame
from patternscore.standard import code_from_ire

CHAIN = Chain(response=(responses.second_order(3.2, 0.5),), noise_db=40.0, jitter_ns=5.0)
FOLDED = CHAIN.changed(sweep_h=Sweep(fold_start=1.5))


@pytest.fixture(scope="module", autouse=True)
def _one_core() -> None:
    cv2.setNumThreads(1)


@pytest.fixture(scope="module")
def frame() -> Frame:
    return grab(CHAIN, seed=1)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory, frame: Frame) -> list[Path]:
    place = tmp_path_factory.mktemp("frames")
    codes = np.clip(np.rint(code_from_ire(frame.luma)), 0, 255).astype(np.uint8)
    paths = [place / f"{number:02d}.png" for number in range(24)]
    for path in paths:
        cv2.imwrite(str(path), codes)
    return paths


def test_full_card_of_a_frame(benchmark: BenchmarkFixture, frame: Frame) -> None:
    scored = benchmark(score_frame, frame)
    assert scored.card.score is not None
    assert set(scored.card.missing) <= {"bounce", "wander"}


def test_full_card_of_a_folded_frame(benchmark: BenchmarkFixture) -> None:
    scored = benchmark(score_frame, grab(FOLDED, seed=1))
    assert scored.card["fold_left"].value == pytest.approx(1.5, abs=0.15)


def test_locating_the_chart(benchmark: BenchmarkFixture, frame: Frame) -> None:
    assert benchmark(locate, frame, chart_plan(frame.standard)).misfit < 0.2


@pytest.mark.parametrize("measure", [read_edges, read_scan, read_grid, read_levels, read_stability])
def test_one_measure(benchmark: BenchmarkFixture, frame: Frame, measure: Callable) -> None:
    plan = chart_plan(frame.standard)

    def fresh() -> tuple[tuple, dict]:
        return (frame, locate(frame, plan)), {}  # located anew: nothing kept from the round before may help

    assert benchmark.pedantic(measure, setup=fresh, rounds=15).readings


def test_reading_a_png(benchmark: BenchmarkFixture, folder: list[Path]) -> None:
    assert benchmark(load_frame, folder[0]).samples == 720


@pytest.mark.parametrize("jobs", [1, 2])
def test_comparing_two_dozen_frames(benchmark: BenchmarkFixture, folder: list[Path], jobs: int) -> None:
    outcomes = benchmark.pedantic(score_files, args=(folder, Reader(), jobs), rounds=1, iterations=1)
    assert all(outcome.card is not None for outcome in outcomes)


def test_memory_of_a_comparison_does_not_grow_with_its_frames(benchmark: BenchmarkFixture, folder: list[Path]) -> None:
    score_files(folder[:2], Reader(), 1)  # what is cached once is cached now
    held = {}
    for count in (4, 24):
        tracemalloc.start()
        cards = score_files(folder[:count], Reader(), 1)
        held[count] = tracemalloc.get_traced_memory()[1]
        tracemalloc.stop()
        assert len(cards) == count
    benchmark.extra_info["peak_bytes_4_frames"], benchmark.extra_info["peak_bytes_24_frames"] = held[4], held[24]
    benchmark.pedantic(lambda: None, rounds=1)
    frame_bytes = 720 * 480 * 4
    assert held[24] - held[4] < 20 * frame_bytes / 4  # twenty cards more, and not a quarter of twenty frames


@pytest.mark.parametrize("words", [["--help"], ["score", "FRAME"]], ids=["help", "score"])
def test_the_whole_command(benchmark: BenchmarkFixture, folder: list[Path], words: list[str]) -> None:
    command = [sys.executable, "-m", "patternscore", *(str(folder[0]) if word == "FRAME" else word for word in words)]
    run = benchmark.pedantic(subprocess.run, args=(command,), kwargs={"capture_output": True}, rounds=3)
    assert run.returncode == 0
