"""Plans as TOML: nothing is lost, a person can read it, and a mistake is named with its line and remedy."""

from __future__ import annotations

import random
import tomllib
from dataclasses import replace

import pytest

from patternscore.errors import UsageError
from patternscore.layout import chart_plan
from patternscore.plan import Burst, Edge, Grid, Mark, Patch, Plan, Rect, Ruler
from patternscore.planfile import plan_from_text, plan_text, read_plan, write_plan
from patternscore.standard import STANDARD_525, STANDARD_625
from patternscore.tomlfile import lines_of

SMALL = """\
name = "mine"          # what the card will call it
standard = "525"

[[edges]]
name = "left 1"
axis = "h"
start = [0.30, 0.4]
end = [
    0.28,
    0.6,
]
before = 25
after = 75
clear_before = 0.03
clear_after = 0.03
place = "centre"
block = "centre"

[[steps]]
name = "step 10"
rect = [0.1, 0.8, 0.2, 0.9]
level = 10

[[rulers]]
side = "top"
band = [0.0, 0.05]
boundaries = [0.1, 0.2, 0.3, 0.4]
bits = "011"
dark = 0
light = 100

[[bursts]]
rect = [0.3, 0.8, 0.4, 0.9]
mhz = 2.0
middle = 50
swing = 35

[[marks]]
x = 0.1
y = 0.1
hand = 1
radius = 0.02
dark = 15
light = 85

[grid]
columns = [0.25, 0.5, 0.75]
rows = [0.25, 0.75]
shown = [[0, 0], [2, 1]]
arms = ["rd", "lu"]
line = 85
ground = 50
thickness = 0.005
"""


def fault(old, new, count=1):
    """What is said about SMALL with a part of it replaced, after the file's name."""
    text = SMALL.replace(old, new, count)
    assert text != SMALL
    with pytest.raises(UsageError) as caught:
        plan_from_text(text, "mine.toml")
    line = str(caught.value)
    assert line.isprintable()
    assert line.startswith("mine.toml")
    assert "; " in line
    return line.removeprefix("mine.toml ")


@pytest.mark.parametrize("standard", [STANDARD_525, STANDARD_625], ids=["525", "625"])
def test_the_charts_plan_comes_back_as_it_was(standard, tmp_path):
    plan = chart_plan(standard)
    write_plan(plan, tmp_path / "chart.toml")
    assert read_plan(tmp_path / "chart.toml") == plan


def test_a_plan_of_odd_values_comes_back_as_it_was():
    plan = Plan(
        name='Prüf "bild" \\ 日本 \U0001f4fa',
        standard="625",
        steps=(Patch("", Rect(-0.01, 1 / 3, 1e-9, 1.01), -4.0),),
        bursts=(Burst(Rect(0.1, 0.2, 0.30000000000000004, 0.4), 3.58, 50.0, 1e-3),),
    )
    assert plan_from_text(plan_text(plan), "x") == plan


def test_a_plan_of_nothing_but_a_name_is_a_plan():
    plan = Plan("bare", "525")
    assert plan_from_text(plan_text(plan), "x") == plan


def test_the_text_is_one_that_a_person_can_read():
    text = plan_text(chart_plan(STANDARD_525))
    assert len(text.splitlines()) < 600
    assert max(map(len, text.splitlines())) < 160
    for section in ("steps", "flats", "field", "bursts", "marks", "grid", "edges", "rulers"):
        about = text[: text.index(f"\n{section} = [" if f"\n{section} = [" in text else f"[{section}]")].rstrip("[\n")
        assert about.splitlines()[-1].startswith("# ")  # a word on each section stands above it
    assert 'bits = "0110' in text


def test_a_plan_written_by_hand_is_read():
    plan = plan_from_text(SMALL, "mine.toml")
    assert plan.edges == (
        Edge("left 1", "h", (0.3, 0.4), (0.28, 0.6), 25.0, 75.0, 0.03, 0.03, "centre", "centre"),
    )  # fmt: skip
    assert plan.steps == (Patch("step 10", Rect(0.1, 0.8, 0.2, 0.9), 10.0),)
    assert plan.rulers == (Ruler("top", (0.0, 0.05), (0.1, 0.2, 0.3, 0.4), (False, True, True), 0.0, 100.0),)
    assert plan.bursts == (Burst(Rect(0.3, 0.8, 0.4, 0.9), 2.0, 50.0, 35.0),)
    assert plan.marks == (Mark(0.1, 0.1, 1, 0.02, 15.0, 85.0),)
    assert plan.grid == Grid(
        (0.25, 0.5, 0.75), (0.25, 0.75), ((0, 0), (2, 1)), ("rd", "lu"), 85.0, 50.0, 0.005
    )  # fmt: skip


def test_a_rectangle_may_be_written_by_its_sides():
    sides = SMALL.replace("rect = [0.1, 0.8, 0.2, 0.9]", "rect = { x0 = 0.1, y0 = 0.8, x1 = 0.2, y1 = 0.9 }")
    assert plan_from_text(sides, "x") == plan_from_text(SMALL, "x")


def test_line_ends_and_marks_of_other_systems_do_no_harm(tmp_path):
    (tmp_path / "mine.toml").write_bytes(b"\xef\xbb\xbf" + SMALL.replace("\n", "\r\n").encode())
    assert read_plan(tmp_path / "mine.toml") == plan_from_text(SMALL, "x")


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('axis = "h"', 'axis = "x"', 'line 6: edge "left 1" has axis "x"; write "h" or "v"'),
        ('axis = "h"', 'axes = "h"', "line 6: axes means nothing here; did you mean axis?"),
        ('axis = "h"\n', "", 'line 4: edge "left 1" lacks axis; add axis = "h" or "v"'),
        ("    0.6,", '    "low",', 'line 10: edge "left 1" has end[1] "low"; write a number'),
        ("    0.6,\n", "", 'line 8: edge "left 1" has end [0.28]; write 2 numbers in brackets'),
        ("before = 25", "before = true", 'line 12: edge "left 1" has before true; write a number'),
        ('name = "left 1"', "name = 1", "line 5: edge 1 has name 1; write a text in quotes"),
        ('standard = "525"', 'standard = "819"', 'line 2: the plan has standard "819"; write "525" or "625"'),
        ('standard = "525"', "", 'line 1: the plan lacks standard; add standard = a text in quotes'),
        ('name = "mine" ', 'name = " " ', "line 1: the plan has no name that can be printed; write one in quotes"),
        ("[grid]", "[gird]", "line 46: gird means nothing here; did you mean grid?"),
        ("[[steps]]", "[steps]", "line 19: steps is {"),
        ("hand = 1", "hand = 1.5", "line 41: mark 1 has hand 1.5; write a whole number"),
        ("[[0, 0], [2, 1]]", "[[0, 0], [2]]", "line 49: grid has shown[1] [2]; write 2 numbers in brackets"),
        ('bits = "011"', 'bits = "012"', 'line 28: ruler "top" has bits "012"; write bits = "0110..."'),
        ('bits = "011"', "bits = [0, 1, 1]", 'line 28: ruler "top" has bits [0, 1, 1]; write bits = "0110..."'),
        ('side = "top"', 'side = "upper"', 'write "left", "right", "top" or "bottom"'),
        ("rect = [0.1, 0.8, 0.2, 0.9]", "rect = [0.1, 0.8]", 'line 21: step "step 10" has rect [0.1, 0.8]; write [x0'),
    ],
)  # fmt: skip
def test_a_wrong_key_or_type_is_named_with_its_line_and_remedy(old, new, said):
    assert said in fault(old, new)


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("start = [0.30, 0.4]", "start = [3.0, 0.4]", 'line 7: edge "left 1": start 3 lies far outside the picture'),
        ("start = [0.30, 0.4]", "start = [nan, 0.4]", 'line 7: edge "left 1": start holds nan, which is no number'),
        ("start = [0.30, 0.4]", "start = [0.30, 0.7]", 'line 8: edge "left 1": axis "h" is a near-vertical edge'),
        ('axis = "h"', 'axis = "v"', 'line 8: edge "left 1": axis "v" is a near-horizontal edge'),
        ("after = 75", "after = 25", "line 13: "),
        ("after = 75", "after = 750", 'line 13: edge "left 1": after 750 is no level of a picture; write it in IRE'),
        ("clear_after = 0.03", "clear_after = 0", "line 15: "),
        ('place = "centre"', 'place = "middle"', "line 16: "),
        ("rect = [0.1, 0.8, 0.2, 0.9]", "rect = [0.2, 0.8, 0.1, 0.9]", 'line 21: step "step 10": its rectangle is'),
        ("boundaries = [0.1, 0.2, 0.3, 0.4]", "boundaries = [0.1, 0.2, 0.3]", "3 bars have 4 boundaries, not 3"),
        ("boundaries = [0.1, 0.2, 0.3, 0.4]", "boundaries = [0.1, 0.3, 0.2, 0.4]", "line 27: "),
        ("light = 100", "light = 0", 'line 30: ruler "top": light 0 does not stand out from 0'),
        ("mhz = 2.0", "mhz = 0", "line 34: burst 1: mhz 0 is no frequency of a burst; write it in MHz"),
        ("mhz = 2.0", "mhz = 2e6", "line 34: burst 1: mhz 2e+06 is no frequency of a burst; write it in MHz"),
        ("swing = 35", "swing = -35", "line 36: burst 1: swing -35 is none"),
        ("hand = 1", "hand = 2", "line 41: mark 1: hand 2 is none; write 1 or -1"),
        ("radius = 0.02", "radius = 20", "line 42: mark 1: radius 20 is no size"),
        ("[[0, 0], [2, 1]]", "[[0, 0], [3, 1]]", "line 49: grid: crossing 2 is [3, 1], of 3 columns and 2 rows"),
        ("[[0, 0], [2, 1]]", "[[0, 0], [0, 0]]", "line 49: grid: a crossing is shown twice"),
        ('arms = ["rd", "lu"]', 'arms = ["rd"]', "line 50: grid: 2 crossings are shown and 1 arms given"),
        ('arms = ["rd", "lu"]', 'arms = ["rd", "lx"]', 'line 50: grid: arms "lx" are none; write letters of "lrud"'),
        ("columns = [0.25, 0.5, 0.75]", "columns = [0.25, 0.75, 0.5]", "line 47: grid: columns must rise"),
        ("line = 85", "line = 50", "line 51: grid: line 50 does not stand out from 50"),
    ],
)
def test_what_makes_no_sense_is_named_with_its_line_and_remedy(old, new, said):
    assert said in fault(old, new)


def test_the_second_of_two_entries_is_the_one_named():
    edge = SMALL[SMALL.index("[[edges]]") : SMALL.index("[[steps]]")]
    text = SMALL + edge.replace("left 1", "left 2").replace("before = 25", "before = 1e9")
    with pytest.raises(UsageError, match=rf'line {SMALL.count(chr(10)) + 9}: edge "left 2": before 1e\+09 is no level'):
        plan_from_text(text, "mine.toml")


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("name = 'mine'\nstandard = 525'\n", "line 2: is not TOML"),
        ("name = 'mine'\nedges = [", "is not TOML"),
        ("a = 1\na = 2\n", "is not TOML"),
        ("[" * 100_000, "mine.toml"),
        ("a = " + "[" * 100_000, "has brackets or digits without end"),
        ("a = " + "9" * 100_000, "has brackets or digits without end"),
        ("a." * 100_000 + "a = 1", "has keys within keys without end"),
        ("name = '\x1b[31m'", "is not TOML"),
        ('name = "\\u001b[31m"\nstandard = "525"', "the plan has no name that can be printed"),
        ('"a\\nb" = 1', "means nothing here"),
    ],
)
def test_what_is_no_toml_is_called_that(text, said):
    with pytest.raises(UsageError) as caught:
        plan_from_text(text, "mine.toml")
    assert said in str(caught.value)
    assert str(caught.value).isprintable()
    assert "; " in str(caught.value)


def test_files_that_are_no_plans_are_refused(tmp_path):
    path = tmp_path / "mine.toml"
    for data, said in ((b"", "is empty"), (b"\xff\xfe", "is no text"), (b"#" * 2**20, "is over 512 KiB")):
        path.write_bytes(data)
        with pytest.raises(UsageError, match=f"mine.toml: {said}"):
            read_plan(path)
    with pytest.raises(UsageError, match="is a folder"):
        read_plan(tmp_path)
    with pytest.raises(UsageError, match="no such file"):
        read_plan(tmp_path / "none.toml")


def test_a_place_that_cannot_be_written_is_named(tmp_path):
    with pytest.raises(UsageError, match="cannot be written"):
        write_plan(Plan("bare", "525"), tmp_path / "none" / "mine.toml")


def leaves(value, way=()):
    if isinstance(value, dict | list):
        for key, item in value.items() if isinstance(value, dict) else enumerate(value):
            yield from leaves(item, (*way, key))
    else:
        yield way, value


@pytest.mark.parametrize("text", [plan_text(chart_plan(STANDARD_525)), SMALL], ids=["chart", "by hand"])
def test_every_entry_of_a_file_is_found_on_its_line(text):
    places, lines = lines_of(text), text.splitlines()
    for way, value in leaves(tomllib.loads(text)):
        assert str(value).rstrip("0") in lines[places[way] - 1]


def test_entries_are_found_between_brackets_in_strings_and_comments():
    text = """\
a.b."c.d" = 1
[x.y]
z = \'\'\'
]
[q]
\'\'\'
w = [ # ]
  "]", [1, 2], { k = 3, l = [4,
  5] },
]
[[t]]
u = '['
[[t]]
[t.s]
v = 2.5
"""
    tomllib.loads(text)
    places = lines_of(text)
    expected = {
        ("a", "b", "c.d"): 1, ("x", "y"): 2, ("x", "y", "z"): 3, ("x", "y", "w"): 7, ("x", "y", "w", 0): 8,
        ("x", "y", "w", 1, 1): 8, ("x", "y", "w", 2, "k"): 8, ("x", "y", "w", 2, "l", 1): 9, ("t", 0): 11,
        ("t", 0, "u"): 12, ("t", 1): 13, ("t", "s", "v"): 15,
    }  # fmt: skip
    assert {way: places.get(way) for way in expected} == expected


def test_broken_plans_are_plans_or_refused_in_one_line():
    whole = plan_text(chart_plan(STANDARD_525))
    fate = random.Random(3)
    for _ in range(60):
        letters = list(whole)
        for _ in range(fate.randrange(1, 4)):
            at = fate.randrange(len(letters))
            if fate.random() < 0.5:
                letters[at] = fate.choice("[]{}=\",\n#.x0'\\\0é")
            else:
                del letters[at : at + fate.randrange(1, 40)]
        assert _plan_or_refusal("".join(letters))


def _plan_or_refusal(text):
    try:
        return plan_from_text(text, "mine.toml").name
    except UsageError as error:
        return str(error).isprintable() and "; " in str(error)


def test_any_value_of_the_wrong_kind_is_refused_in_one_line():
    table = tomllib.loads(SMALL)
    fate = random.Random(5)
    ways = [way for way, _ in leaves(table)]
    for _ in range(60):
        way, changed = fate.choice(ways), tomllib.loads(SMALL)
        holder = changed
        for part in way[:-1]:
            holder = holder[part]
        holder[way[-1]] = fate.choice([[], {}, [1.5, "a"], {"a": 1}, True, 10**30, -1, "x", float("inf")])
        assert _plan_or_refusal(_as_toml(changed))


def _as_toml(table):
    def value(item):
        if isinstance(item, dict):
            return "{ " + ", ".join(f"{key} = {value(inner)}" for key, inner in item.items()) + " }"
        if isinstance(item, list):
            return "[" + ", ".join(map(value, item)) + "]"
        return str(item).lower() if not isinstance(item, str) else f'"{item}"'

    return "\n".join(f"{key} = {value(item)}" for key, item in table.items())


def test_a_changed_chart_is_another_plan(tmp_path):
    plan = replace(chart_plan(STANDARD_525), name="other")
    write_plan(plan, tmp_path / "other.toml")
    assert read_plan(tmp_path / "other.toml") != chart_plan(STANDARD_525)
