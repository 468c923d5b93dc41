"""The commands as a person types them: help, output, files, exit status, and one line for every mistake."""

from __future__ import annotations

import csv
import json
import os
import re
import subprocess
import sys
from pathlib import Path

import cv2
import numpy as np
import pytest
from PIL import Image

from patternscore.chain import Chain
from patternscore.cli import commands
from patternscore.keys import GROUPS, KEYS
from patternscore.layout import chart_plan
from patternscore.planfile import plan_text
from patternscore.standard import STANDARD_525

README = (Path(__file__).parent.parent / "README.md").read_text("utf-8")


def typed(line: str, **environment: str) -> subprocess.CompletedProcess[str]:
    """Run a line of shell in which ``patternscore`` is the command, as a process of its own."""
    line = line.replace("patternscore", f'"{sys.executable}" -m patternscore')
    told = {**os.environ, "PYTHONIOENCODING": "utf-8", "COLUMNS": "80", **environment}
    return subprocess.run(["bash", "-c", line], capture_output=True, encoding="utf-8", env=told)


def test_every_command_and_option_has_help_and_is_in_the_readme():
    for name, each in commands.commands.items():
        assert each.help, name
        assert f"patternscore {name}" in README
        for parameter in each.params:
            for option in parameter.opts:
                if option.startswith("--"):
                    assert getattr(parameter, "help", ""), option
                    assert f"`{option}" in README, option


def test_every_option_that_the_readme_names_is_one():
    known = {option for each in commands.commands.values() for parameter in each.params for option in parameter.opts}
    named = re.findall(r"`(?:patternscore [^`]*?)?(--[a-z-]+)", README)
    assert set(named) <= known


@pytest.mark.parametrize("name", [None, *commands.commands])
def test_help_reads_well_and_is_no_failure(command, name):
    done = command(*filter(None, [name]), "--help")
    assert done.status == 0
    assert done.err == []
    assert done.out.startswith("Usage: patternscore")
    assert max(map(len, done.out.splitlines())) <= 100
    assert command(*filter(None, [name]), "-h").out == done.out


def test_the_help_warns_of_what_can_kill(command):
    assert "lethal" in command("--help").out


def test_the_version_is_the_packages(command):
    from importlib.metadata import version

    assert command("--version") == (0, f"patternscore {version('patternscore')}\n", [])


def test_a_card_reads_well_in_80_columns(command, good):
    done = command("score", good)
    assert (done.status, done.err) == (0, [])
    assert max(map(len, done.out.splitlines())) <= 80
    for word in ("Resolution", "Fold-back", "Geometry", "Levels", "Stability", "mtf50_h", "score", "Not read"):
        assert word in done.out


def test_a_terminal_without_unicode_gets_plain_signs(good):
    done = typed(f"patternscore score '{good}'", PYTHONIOENCODING="ascii")
    assert done.returncode == 0
    assert done.stdout.isascii()


def test_json_is_one_card_of_the_contract_a_line(command, good):
    done = command("score", "--json", good, good)
    lines = done.out.splitlines()
    assert len(lines) == 2
    assert lines[0] == lines[1]
    card = json.loads(lines[0], parse_constant=pytest.fail)  # NaN and Infinity are no JSON (RFC 8259)
    assert list(card) == ["card", "frame", "plan", "score", "groups", "readings", "missing", "remarks"]
    assert list(card["frame"]) == ["name", "sha256", "rows", "samples", "standard", "levels"]
    assert list(card["groups"]) == list(GROUPS)
    assert set(card["readings"]) | set(card["missing"]) == set(KEYS)
    assert not set(card["readings"]) & set(card["missing"])
    for key, reading in card["readings"].items():
        assert set(reading) - {"doubt"} == {"value", "unit", "sigma", "score", "where"}
        assert reading["unit"] == KEYS[key].unit
        assert np.isfinite(reading["value"])
        assert reading["sigma"] >= 0
    assert all(card["missing"].values())


def test_the_digest_is_that_of_the_file(command, good):
    digest = typed(f"sha256sum < '{good}'").stdout.split()[0]  # the system's own program
    assert json.loads(command("score", "--json", good).out)["frame"]["sha256"] == digest


def test_status_three_says_that_a_score_is_too_low(command, good, tmp_path):
    assert command("score", "--fail-under", 100, good).status == 3
    assert command("score", "--fail-under", 5, good).status == 0
    score = json.loads(command("score", "--json", good).out)["score"]
    assert command("score", "--fail-under", np.ceil(score), good, good).status == 3
    missing = command("score", "--fail-under", 100, good, tmp_path / "none.png")
    assert missing.status == 1  # a frame that could not be scored comes first


def test_frames_taken_together_tell_bounce_and_wander(command, grabbed, write_frame, tmp_path):
    chain = Chain(oversample=4, noise_db=40.0, bounce_percent=1.0, wander_ns=10.0)
    grabs = [write_frame(tmp_path / f"{seed}.png", grabbed(chain, seed)) for seed in range(4)]
    card = json.loads(command("score", "--json", "--together", *grabs).out)
    assert {"bounce", "wander"} <= set(card["readings"])
    pages = [Image.open(path) for path in grabs]
    pages[0].save(tmp_path / "pages.tif", save_all=True, append_images=pages[1:])
    again = json.loads(command("score", "--json", "--together", tmp_path / "pages.tif").out)
    assert again["readings"]["wander"]["value"] == pytest.approx(card["readings"]["wander"]["value"])
    assert {"bounce", "wander"} <= set(json.loads(command("score", "--json", grabs[0]).out)["missing"])


def test_pictures_are_drawn(command, run_folder, good, tmp_path):
    assert command("score", good, "--picture", tmp_path / "card.png").status == 0
    assert command("compare", run_folder, "--picture", tmp_path / "trends.svg").status == 0
    with Image.open(tmp_path / "card.png") as picture:
        assert picture.size == (1600, 1200)
    assert "<svg" in (tmp_path / "trends.svg").read_text("utf-8")[:2000]


def test_a_comparison_marks_change_and_best_and_writes_files(command, run_folder, tmp_path):
    done = command("compare", run_folder, "--csv", tmp_path / "all.csv", "--json", tmp_path / "all.jsonl")
    assert (done.status, done.err) == (0, [])
    assert max(map(len, done.out.splitlines())) <= 80
    rows = done.out.splitlines()
    assert [row.split()[0] for row in rows if "pF" in row] == ["9", "12", "100"]  # 12 before 100: by number
    assert "[+" in done.out
    assert "*" in done.out
    table = list(csv.DictReader((tmp_path / "all.csv").read_text("utf-8").splitlines()))
    assert [float(row["setting"]) for row in table] == [9, 12, 100]
    assert float(table[2]["overshoot [%]"]) > float(table[0]["overshoot [%]"]) + 10
    cards = [json.loads(line) for line in (tmp_path / "all.jsonl").read_text("utf-8").splitlines()]
    assert [card["frame"]["name"] for card in cards] == [row["frame"] for row in table]
    assert command("compare", run_folder, "--json", "-").out == (tmp_path / "all.jsonl").read_text("utf-8")


def test_rows_can_be_ordered_by_a_reading(command, run_folder):
    rows = [row for row in command("compare", run_folder, "--by", "overshoot").out.splitlines() if "pF" in row]
    assert rows[-1].startswith("100 pF")


def test_limits_of_ones_own_change_the_marks(command, good, tmp_path):
    (tmp_path / "mine.toml").write_text("[mtf50_h]\nfull = 100\nnone = 50\n")
    marks = json.loads(command("score", "--json", good, "--limits", tmp_path / "mine.toml").out)["readings"]["mtf50_h"]
    assert marks["score"] == 0


def test_a_plan_file_is_used_and_named(command, good, tmp_path):
    plan = plan_text(chart_plan(STANDARD_525)).replace('name = "chart"', 'name = "mill"')
    (tmp_path / "mine.toml").write_text(plan)
    card = json.loads(command("score", "--json", good, "--plan", tmp_path / "mine.toml").out)
    assert card["plan"] == "mill"
    assert card["readings"] == json.loads(command("score", "--json", good).out)["readings"]


def test_a_size_and_levels_are_read_as_told(command, good, tmp_path):
    pixels = cv2.imread(str(good), cv2.IMREAD_UNCHANGED)
    wide = cv2.copyMakeBorder(pixels, 0, 0, 10, 10, cv2.BORDER_CONSTANT, value=16)
    cv2.imwrite(str(tmp_path / "wide.png"), wide)
    done = command("score", "--json", tmp_path / "wide.png", "--standard", "525", "--sample-rate", "13.5")
    here, there = json.loads(done.out)["readings"], json.loads(command("score", "--json", good).out)["readings"]
    assert here["mtf50_h"]["value"] == pytest.approx(there["mtf50_h"]["value"], rel=0.01)
    assert here["width"]["value"] == pytest.approx(there["width"]["value"], abs=0.2)
    full = json.loads(command("score", "--json", good, "--levels", "full").out)
    assert full["frame"]["levels"] == "full"
    # Code 16 read as of the full range is 16 / 255 of white (BT.601 codes against the whole range): 6.3 IRE of lift.
    assert full["readings"]["black_level"]["value"] == pytest.approx(1600 / 255, abs=0.5)


@pytest.mark.parametrize(("standard", "height"), [("525", 480), ("625", 576)])
def test_the_chart_is_drawn_at_the_size_asked_for(command, tmp_path, standard, height):
    done = command("chart", tmp_path / "c.png", "--standard", standard, "--size", f"1440x{height}", "--bits", "8")
    assert done == (0, "", [])
    chart = cv2.imread(str(tmp_path / "c.png"), cv2.IMREAD_UNCHANGED)
    assert (chart.shape, chart.dtype) == ((height, 1440), np.uint8)


@pytest.mark.parametrize(
    "words",
    [
        [],
        ["score"],
        ["score", "GOOD", "--standard", "405"],
        ["score", "GOOD", "--sample-rate", "nan"],
        ["score", "GOOD", "--limits", "none.toml"],
        ["score", "GOOD", "--plan", "none.toml"],
        ["score", "GOOD", "--picture", "card.doc"],
        ["score", "GOOD", "--picture", "no_such_folder/card.png"],
        ["score", "GOOD", "GOOD", "--picture", "card.png"],
        ["score", "GOOD", "--together"],
        ["score", "GOOD", "--fail-under", "101"],
        ["score", "GOOD", "--fail-under", "nan"],
        ["score", "GOOD", "--shiny"],
        ["compare", "no_such_folder"],
        ["compare", "EMPTY"],
        ["compare", "RUN", "--by", "sharpnes"],
        ["compare", "RUN", "--jobs", "0"],
        ["compare", "RUN", "--csv", "EMPTY"],
        ["compare", "RUN", "--csv", "no_such_folder/a.csv"],
        ["compare", "RUN", "--json", "no_such_folder/a.jsonl"],
        ["compare", "RUN", "--picture", "trends.gif"],
        ["chart", "c.png", "--size", "big"],
        ["chart", "c.png", "--size", "8x8"],
        ["chart", "no_such_folder/c.png", "--size", "720x480"],
        ["chart", "c.gif"],
        ["draw"],
    ],
    ids=" ".join,
)
def test_wrong_use_costs_one_line_and_status_two(command, words, good, run_folder, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    places = {"GOOD": good, "EMPTY": tmp_path, "RUN": run_folder}
    done = command(*(places.get(word, word) for word in words))
    assert (done.status, done.out, len(done.err)) == (2, "", 1)  # nothing printed: refused before the work
    assert done.err[0].startswith("patternscore: ")
    assert "; " in done.err[0]
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize(
    ("word", "hint"),
    [
        ("mtf50", "did you mean mtf50_h or mtf50_h_tvl or mtf50_v?"),
        ("overshot", "did you mean overshoot?"),
        ("bandwith", "did you mean bandwidth_h?"),
        ("quality", "known are name, setting, score, mtf50_h, mtf10_h, mtf50_h_tvl ..."),
        ("", "known are name, setting, "),
    ],
)
def test_a_misspelt_reading_is_guessed(command, run_folder, word, hint):
    assert hint in command("compare", run_folder, "--by", word).err[0]


def test_line_breaks_in_words_do_not_break_the_line(command):
    for words in (["score", "--shi\nny\x1b[31m"], ["dr\naw"], ["score", "a\nb.png"], ["compare", "a\nb"]):
        assert len(command(*words).err) == 1


def test_a_plan_that_does_not_fit_is_said_to_be_not_there(command, good, tmp_path):
    # Dark and light quadrants of all marks change places: no such mark is in the frame.
    hands = {"hand = 1": "hand = -1", "hand = -1": "hand = 1"}
    other = re.sub(r"hand = -?1", lambda found: hands[found[0]], plan_text(chart_plan(STANDARD_525)))
    (tmp_path / "other.toml").write_text(other)
    done = command("score", good, "--plan", tmp_path / "other.toml")
    assert (done.status, done.out, len(done.err)) == (1, "", 1)
    assert done.err[0].startswith(f"patternscore: {good.name}: ")
    assert "; " in done.err[0]


@pytest.mark.parametrize(
    "words", ["score FRAME", "score --json FRAME FRAME", "compare FOLDER", "compare FOLDER --json -"]
)
def test_a_reader_that_goes_away_is_no_error(good, run_folder, words):
    # Printing starts after the reader has gone.
    line = words.replace("FRAME", f"'{good}'").replace("FOLDER", f"'{run_folder}'")
    done = typed(f"set -o pipefail; patternscore {line} | true")
    assert (done.returncode, done.stderr) == (0, "")


@pytest.mark.skipif(not Path("/dev/full").exists(), reason="no device here that is always full")
def test_a_full_disk_costs_one_line(good):
    done = typed(f"patternscore score '{good}' > /dev/full")
    assert done.returncode == 2
    assert done.stderr.splitlines() == [
        "patternscore: output cannot be written (No space left on device); make room, or print to another place"
    ]


def test_closed_outputs_are_done_without(good):
    done = typed(f"patternscore score '{good}' >&-")
    assert (done.returncode, done.stderr) == (0, "")
    assert typed("patternscore score none.png 2>&-").returncode == 1


@pytest.mark.parametrize("columns", ["wide", "0", "-3", ""])
def test_a_width_that_is_none_is_80(command, good, monkeypatch, columns):
    as_usual = command("score", good).out
    monkeypatch.setenv("COLUMNS", columns)
    assert command("score", good).out == as_usual


def test_an_interrupted_command_says_so(command, good, monkeypatch):
    def interrupted(*_: object, **__: object) -> None:
        raise KeyboardInterrupt

    monkeypatch.setattr("patternscore.load.load_frames", interrupted)
    done = command("score", good)
    assert (done.status, [line for line in done.err if line]) == (130, ["patternscore: stopped"])


def test_a_fault_of_ours_costs_a_batch_one_line_and_a_single_frame_its_traceback(command, good, monkeypatch):
    from patternscore.load import load_frames

    def faulty(path: Path, **told: object) -> object:
        if path.name == "other.png":
            raise ZeroDivisionError
        return load_frames(path, **told)

    monkeypatch.setattr("patternscore.load.load_frames", faulty)
    done = command("score", "--json", good.with_name("other.png"), good)
    assert (done.status, len(done.out.splitlines())) == (1, 1)
    assert done.err == ["patternscore: other.png: scoring stopped (ZeroDivisionError); score it alone to see why"]
    with pytest.raises(ZeroDivisionError):
        commands.main(["score", str(good.with_name("other.png"))], standalone_mode=False)
