"""The commands as a person types them: help, output, files, exit status, and one line for every mistake."""

from __future__ import annotations

import csv
import json
import os
import struct
import subprocess
import sys
import zlib
from pathlib import Path

import cv2
import numpy as np
import pytest
from PIL import Image

from patternscore.chain import Chain, grab, responses
from patternscore.cli import commands
from patternscore.keys import GROUPS, KEYS
from patternscore.layout import chart_plan
from patternscore.planfile import plan_text
from patternscore.standard import STANDARD_525, code_from_ire

README = (Path(__file__).parent.parent / "README.md").read_text("utf-8")


def run(*words: str | Path, **environment: str) -> subprocess.CompletedProcess[str]:
    return subprocess.run(
        [sys.executable, "-m", "patternscore", *map(str, words)],
        capture_output=True,
        encoding="utf-8",
        env={**os.environ, "PYTHONIOENCODING": "utf-8", "COLUMNS": "80", **environment},
    )


def codes_of(chain: Chain, seed: int = 0) -> np.ndarray:
    return np.clip(np.rint(code_from_ire(grab(chain, seed=seed).luma)), 0, 255).astype(np.uint8)


@pytest.fixture(scope="module")
def run_folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A run of three peaking settings; the third rings."""
    folder = tmp_path_factory.mktemp("run")
    for number, (setting, damping) in enumerate((("9pF", 0.9), ("12pF", 0.6), ("100pF", 0.3)), start=1):
        chain = Chain(oversample=4, noise_db=44.0, response=(responses.second_order(3.0, damping),))
        cv2.imwrite(str(folder / f"{number:02d}_peaking_{setting}.png"), codes_of(chain, number))
    return folder


@pytest.fixture(scope="module")
def frame(run_folder: Path) -> Path:
    return run_folder / "02_peaking_12pF.png"


def test_every_command_and_option_has_help_and_is_in_the_readme():
    for name, command in commands.commands.items():
        assert command.help, name
        assert f"patternscore {name}" in README
        for parameter in command.params:
            for option in parameter.opts:
                if option.startswith("--") and option != "--help":
                    assert getattr(parameter, "help", ""), option
                    assert option in README, option


def test_a_card_reads_well_in_80_columns(frame):
    done = run("score", frame)
    assert done.returncode == 0
    assert done.stderr == ""
    assert max(map(len, done.stdout.splitlines())) <= 80
    for word in ("Resolution", "Geometry", "Stability", "mtf50_h", "score"):
        assert word in done.stdout


def test_a_terminal_without_unicode_gets_plain_signs(frame):
    done = run("score", frame, PYTHONIOENCODING="ascii")
    assert done.returncode == 0
    assert done.stdout.isascii()


def test_json_is_the_card_of_the_contract(frame):
    done = run("score", "--json", frame, frame)
    lines = done.stdout.splitlines()
    assert len(lines) == 2
    card = json.loads(lines[0])
    assert list(card) == ["card", "frame", "plan", "score", "groups", "readings", "missing", "remarks"]
    assert list(card["frame"]) == ["name", "sha256", "rows", "samples", "standard", "levels"]
    assert list(card["groups"]) == list(GROUPS)
    assert set(card["readings"]) | set(card["missing"]) == set(KEYS)
    assert not set(card["readings"]) & set(card["missing"])
    for key, reading in card["readings"].items():
        assert reading["unit"] == KEYS[key].unit
        assert np.isfinite(reading["value"])
        assert reading["sigma"] >= 0
    assert all(card["missing"].values())


def test_status_three_says_that_a_score_is_too_low(frame):
    assert run("score", "--fail-under", "100", frame).returncode == 3
    assert run("score", "--fail-under", "5", frame).returncode == 0


def test_frames_taken_together_tell_bounce_and_wander(run_folder, tmp_path):
    chain = Chain(oversample=4, noise_db=40.0, bounce_percent=1.0, wander_ns=10.0)
    grabs = [tmp_path / f"{seed}.png" for seed in range(4)]
    for seed, path in enumerate(grabs):
        cv2.imwrite(str(path), codes_of(chain, seed))
    card = json.loads(run("score", "--json", "--together", *grabs).stdout)
    assert {"bounce", "wander"} <= set(card["readings"])
    pages = [Image.fromarray(codes_of(chain, seed)) for seed in range(4)]
    pages[0].save(tmp_path / "pages.tif", save_all=True, append_images=pages[1:])
    again = json.loads(run("score", "--json", "--together", tmp_path / "pages.tif").stdout)
    assert again["readings"]["wander"]["value"] == pytest.approx(card["readings"]["wander"]["value"])


def test_pictures_are_drawn(run_folder, frame, tmp_path):
    assert run("score", frame, "--picture", tmp_path / "card.png").returncode == 0
    assert run("compare", run_folder, "--picture", tmp_path / "trends.svg").returncode == 0
    with Image.open(tmp_path / "card.png") as picture:
        assert picture.size == (1600, 1200)
    assert "<svg" in (tmp_path / "trends.svg").read_text("utf-8")[:2000]


def test_a_comparison_marks_change_and_best_and_writes_files(run_folder, tmp_path):
    done = run("compare", run_folder, "--csv", tmp_path / "all.csv", "--json", tmp_path / "all.jsonl")
    assert done.returncode == 0
    assert max(map(len, done.stdout.splitlines())) <= 80
    rows = done.stdout.splitlines()
    assert [row.split()[0] for row in rows if "pF" in row] == ["9", "12", "100"]  # 12 before 100: by number
    assert "[+" in done.stdout
    assert "*" in done.stdout
    table = list(csv.DictReader((tmp_path / "all.csv").read_text("utf-8").splitlines()))
    assert [float(row["setting"]) for row in table] == [9, 12, 100]
    assert float(table[2]["overshoot [%]"]) > float(table[0]["overshoot [%]"]) + 10
    assert len((tmp_path / "all.jsonl").read_text().splitlines()) == 3


def test_rows_can_be_ordered_by_a_reading(run_folder):
    rows = [row for row in run("compare", run_folder, "--by", "overshoot").stdout.splitlines() if "pF" in row]
    assert rows[-1].startswith("100 pF")


def test_one_process_and_two_give_the_same_cards(run_folder, tmp_path):
    for number in range(12):
        (tmp_path / f"{number}.png").write_bytes((run_folder / "01_peaking_9pF.png").read_bytes())
    one, two = (run("compare", tmp_path, "--json", "-", "--jobs", jobs).stdout for jobs in ("1", "2"))
    assert one == two
    assert len(one.splitlines()) == 12


def test_limits_of_ones_own_change_the_marks(frame, tmp_path):
    (tmp_path / "mine.toml").write_text("[mtf50_h]\nfull = 100\nnone = 50\n")
    marks = json.loads(run("score", "--json", frame, "--limits", tmp_path / "mine.toml").stdout)["readings"]["mtf50_h"]
    assert marks["score"] == 0


def test_a_plan_file_is_used_and_named(frame, tmp_path):
    (tmp_path / "mine.toml").write_text(plan_text(chart_plan(STANDARD_525)))
    assert run("score", frame, "--plan", tmp_path / "mine.toml").returncode == 0


def test_the_chart_is_drawn_at_the_size_asked_for(tmp_path):
    assert run("chart", tmp_path / "c.png", "--standard", "625", "--size", "1440x576").returncode == 0
    assert cv2.imread(str(tmp_path / "c.png"), cv2.IMREAD_UNCHANGED).shape == (576, 1440)


def png_header(width: int, height: int) -> bytes:
    """A PNG that claims a size and holds next to nothing."""
    chunks = [(b"IHDR", struct.pack(">IIBBBBB", width, height, 8, 0, 0, 0, 0)), (b"IDAT", zlib.compress(b"\0" * 9))]
    parts = [
        struct.pack(">I", len(d)) + t + d + struct.pack(">I", zlib.crc32(t + d)) for t, d in [*chunks, (b"IEND", b"")]
    ]
    return b"\x89PNG\r\n\x1a\n" + b"".join(parts)


@pytest.fixture(scope="module")
def bad(tmp_path_factory: pytest.TempPathFactory, frame: Path) -> Path:
    """A folder with one bad file of every kind."""
    folder = tmp_path_factory.mktemp("bad")
    good = frame.read_bytes()
    random = np.random.default_rng(0)
    (folder / "cut.png").write_bytes(good[: len(good) // 2])
    (folder / "empty.png").write_bytes(b"")
    (folder / "text.png").write_text("this is no picture")
    (folder / "bomb.png").write_bytes(png_header(60_000, 60_000))
    Image.new("L", (1, 1)).save(folder / "dot.png")
    Image.new("L", (720, 480), 16).save(folder / "black.png")
    Image.new("L", (800, 600), 90).save(folder / "size.png")
    Image.fromarray(random.integers(0, 255, (480, 720), dtype=np.uint8)).save(folder / "snow.png")
    return folder


KINDS = ["cut.png", "empty.png", "text.png", "bomb.png", "dot.png", "black.png", "size.png", "snow.png", "missing.png"]


@pytest.mark.parametrize("kind", KINDS)
def test_a_bad_frame_costs_one_line_and_nothing_else(bad, frame, kind):
    done = run("score", "--json", bad / kind, frame)
    assert done.returncode == 1
    assert len(done.stderr.splitlines()) == 1
    assert kind in done.stderr
    assert ";" in done.stderr  # what is wrong; what to do
    assert "Traceback" not in done.stderr
    assert json.loads(done.stdout)["frame"]["name"] == frame.name


def test_a_folder_with_bad_frames_still_gives_its_table(bad, frame, tmp_path):
    for path in bad.iterdir():
        (tmp_path / path.name).write_bytes(path.read_bytes())
    (tmp_path / "good.png").write_bytes(frame.read_bytes())
    done = run("compare", tmp_path)
    assert done.returncode == 1
    assert len(done.stderr.splitlines()) == len(list(bad.iterdir()))
    assert "good.png" in done.stdout


@pytest.mark.parametrize(
    "words",
    [
        ["score"],
        ["score", "FRAME", "--standard", "405"],
        ["score", "FRAME", "--limits", "none.toml"],
        ["score", "FRAME", "--plan", "none.toml"],
        ["score", "FRAME", "--picture", "card.doc"],
        ["score", "FRAME", "--together"],
        ["score", "FRAME", "--shiny"],
        ["compare", "no_such_folder"],
        ["compare", "EMPTY"],
        ["compare", "RUN", "--by", "sharpnes"],
        ["chart", "c.png", "--size", "big"],
        ["chart", "c.gif"],
        ["draw"],
    ],
    ids=" ".join,
)
def test_wrong_use_costs_one_line_and_status_two(words, frame, run_folder, tmp_path):
    places = {"FRAME": frame, "EMPTY": tmp_path, "RUN": run_folder}
    done = run(*(places.get(word, word) for word in words))
    assert done.returncode == 2
    assert len(done.stderr.splitlines()) == 1
    assert done.stderr.startswith("patternscore: ")


@pytest.mark.parametrize(
    ("text", "hint"),
    [("[overshot]\nfull = 3\n", "overshoot"), ("[overshoot]\nful = 3\n", "full"), ("[overshoot\n", "TOML")],
)
def test_limits_that_mean_nothing_name_what_may_be_meant(frame, tmp_path, text, hint):
    (tmp_path / "limits.toml").write_text(text)
    done = run("score", frame, "--limits", tmp_path / "limits.toml")
    assert done.returncode == 2
    assert hint in done.stderr
    assert len(done.stderr.splitlines()) == 1


def test_a_plan_that_does_not_fit_is_said_to_be_not_there(frame, tmp_path):
    # The marks are moved to where the chart has none.
    moved = plan_text(chart_plan(STANDARD_525)).replace("radius =", "radius = 0.02 #")
    moved = "\n".join(line.replace("hand = 1", "hand = -1") for line in moved.splitlines())
    (tmp_path / "other.toml").write_text(moved)
    done = run("score", frame, "--plan", tmp_path / "other.toml")
    assert done.returncode in (1, 2)
    assert len(done.stderr.splitlines()) == 1


def test_a_reader_that_goes_away_is_no_error(frame):
    command = f'"{sys.executable}" -m patternscore score "{frame}" | head -n 1'
    done = subprocess.run(["bash", "-c", command], capture_output=True, encoding="utf-8")
    assert "Traceback" not in done.stderr
