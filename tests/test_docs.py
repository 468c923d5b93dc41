"""The README tells the truth: its outputs are real, its Python runs, its readings are all there."""

from __future__ import annotations

import re
from pathlib import Path

import pytest
from refresh_readme import outputs, printed

from patternscore.demo import demo_frames
from patternscore.keys import KEYS
from patternscore.load import load_frame

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text("utf-8")


_NUMBER = re.compile(r"[+-]?\d+(?:\.\d+)?")


def alike(shown: str, made: str) -> bool:
    """Whether two outputs say the same: words equal, numbers to one in their last place (processors differ)."""
    words = [" ".join(_NUMBER.sub("#", text).replace("█", "").replace("░", "").split()) for text in (shown, made)]
    if words[0] != words[1]:
        return False
    for one, other in zip(_NUMBER.findall(shown), _NUMBER.findall(made), strict=True):
        step = 10.0 ** -len(one.partition(".")[2])
        if abs(float(one) - float(other)) > 1.01 * step:
            return False
    return True


@pytest.mark.parametrize("command", [command for command, _ in outputs(README)])
def test_what_the_readme_shows_is_what_the_command_prints(command):
    # Made anew by: python tests/refresh_readme.py
    made = printed(command)
    assert alike(dict(outputs(README))[command], made), made


def test_outputs_that_differ_are_seen_to_differ():
    assert alike("a 1.50 +-0.02 MHz", "a 1.51 +-0.02  MHz")
    assert not alike("a 1.50 MHz", "a 1.53 MHz")
    assert not alike("a 1.50 MHz", "b 1.50 MHz")


def test_the_python_of_the_readme_runs(monkeypatch, capsys):
    monkeypatch.chdir(ROOT)
    for block in re.findall(r"```python\n(.*?)```", README, re.DOTALL):
        exec(compile(block, "README", "exec"), {})
    assert capsys.readouterr().out


def test_every_reading_stands_in_the_readme():
    for key in KEYS.values():
        assert f"| {key.group} | `{key.name}` | {key.unit} | {key.meaning} |" in README


def test_the_readme_opens_with_the_job_and_two_commands_of_one_line():
    opening = README.split("\n\n")[1]
    assert opening.startswith("patternscore turns grabbed frames of a test pattern into numbers")
    blocks = re.findall(r"```sh\n(.*?)```", README, re.DOTALL)
    assert all(len(block.strip().splitlines()) == 1 for block in blocks[:2])
    assert "demo_frames" in blocks[0]
    assert "pytest" in blocks[1]


def test_demo_frames_are_those_that_the_program_makes():
    # The same library versions give the same bytes; other ones may round a code in a thousand another way.
    for number, (name, frame) in enumerate(demo_frames()):
        if number % 5:
            continue
        shipped = load_frame(ROOT / "demo_frames" / name)
        apart = abs(shipped.luma - frame.luma) / frame.code_step
        assert apart.max() < 1.5, name
        assert (apart > 0.5).mean() < 1e-3, name


def test_demo_frames_take_at_most_five_megabytes():
    files = list((ROOT / "demo_frames").rglob("*.png"))
    assert len(files) == sum(1 for _ in (ROOT / "demo_frames").rglob("*") if _.is_file())
    assert sum(file.stat().st_size for file in files) <= 5_000_000
