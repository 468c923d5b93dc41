"""Limits: the shipped ones make sense, a file replaces some, and what means nothing is refused in one line."""

from __future__ import annotations

import pytest

from patternscore.errors import UsageError
from patternscore.keys import KEYS
from patternscore.limits import Limit, read_limits, shipped_limits


@pytest.fixture
def written(tmp_path):
    """Limits of a file with a text."""

    def read(text):
        (tmp_path / "mine.toml").write_text(text, encoding="utf-8")
        return read_limits(tmp_path / "mine.toml")

    return read


@pytest.fixture
def refused(written):
    """The one line that refuses a text."""

    def line(text):
        with pytest.raises(UsageError) as caught:
            written(text)
        said = str(caught.value)
        assert said.isprintable()
        assert said.startswith("mine.toml")
        assert "; " in said
        return said

    return line


@pytest.mark.parametrize("key", KEYS)
def test_shipped_limits_reward_what_the_key_calls_better(key):
    limit, better = shipped_limits()[key], KEYS[key].better
    assert (limit.target is not None) == (better == "near")
    assert limit.full > limit.none if better == "high" else limit.full < limit.none


def test_shipped_limits_agree_with_facts_of_the_trade():
    limits = shipped_limits()
    # Kell factor 0.7 x 485 picture lines = 339 lines (trade press worked example): a full-mark picture nearly has them.
    assert limits["mtf50_v"].mark(0.7 * 485) == 100
    # 0.35 / 4.2 MHz = 83 ns: rise time of a first-order chain of the 525 luma bandwidth (textbooks; ST 170M).
    assert limits["rise_time"].mark(0.3497e3 / 4.2) == 100
    # A brick-wall band limit overshoots by 8.949 % both before and after (Wilbraham-Gibbs): no fault before the edge.
    assert limits["preshoot"].mark(8.949) == 100
    # 1 to 2 % linearity error is permissible in studio cameras and monitors (common practice, from memory).
    assert limits["linearity_h"].mark(1.0) == 100
    assert limits["linearity_h"].mark(2.0) > 90
    # Setup of 7.5 IRE is usual in 525 (SMPTE ST 170M, from memory), 0 IRE in 625: neither black level costs much.
    assert limits["black_level"].mark(0.0) == 100
    assert limits["black_level"].mark(7.5) > 75
    # 720 samples at 13.5 MHz (BT.601) last 53.33 us and so show (53.33 - 51.95) / 2 = 0.69 us of blanking in 625.
    assert limits["blank_left"].mark((720 / 13.5 - 51.95) / 2) == 100


@pytest.mark.parametrize(
    ("limit", "value", "marks"),
    [
        (Limit(full=5, none=25), 5, 100),
        (Limit(full=5, none=25), 15, 50),
        (Limit(full=5, none=25), 26, 0),
        (Limit(full=46, none=24), 35, 50),
        (Limit(full=46, none=24), 60, 100),
        (Limit(full=1, none=3, target=100), 98, 50),
        (Limit(full=1, none=3, target=100), 102, 50),
        (Limit(full=0, none=8, target=-4), -4, 100),
    ],
)
def test_marks_run_straight_between_the_two_values(limit, value, marks):
    assert limit.mark(value) == pytest.approx(marks)


def test_a_file_replaces_only_what_it_names(written):
    limits = written("[overshoot]\nfull = 3\n\n[noise]\nmarks = false\n")
    shipped = shipped_limits()
    assert limits["overshoot"] == Limit(full=3.0, none=shipped["overshoot"].none)
    assert limits["noise"] == Limit(shipped["noise"].full, shipped["noise"].none, marks=False)
    changed = {key for key in KEYS if limits[key] != shipped[key]}
    assert changed == {"overshoot", "noise"}


def test_a_target_may_be_set_where_none_was(written):
    rise = written("[rise_time]\ntarget = 83\nfull = 10\nnone = 60\n")["rise_time"]
    assert [rise.mark(value) for value in (83, 48, 118, 200)] == [100, 50, 50, 0]


def test_reading_a_file_leaves_the_shipped_limits_alone(written):
    before = dict(shipped_limits())
    written("[overshoot]\nfull = 1\n")
    assert dict(shipped_limits()) == before


def test_a_file_with_nothing_but_remarks_changes_nothing(written):
    assert written("# nothing yet\n") == shipped_limits()


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("[overshot]\nfull = 3\n", "overshot is no reading; did you mean overshoot?"),
        ("[zzzz]\nfull = 3\n", "zzzz is no reading; known are "),
        ('["a\\nb"]\nfull = 3\n', "a?b is no reading; "),
        ("[overshoot]\nful = 3\n", "[overshoot] has no field ful; did you mean full?"),
        ("[overshoot]\nweight = 3\n", "[overshoot] has no field weight; known are full, none, target, marks"),
        ("overshoot = 3\n", "overshoot needs full and none; write [overshoot] and a line for each"),
        ("[[overshoot]]\nfull = 3\n", "overshoot needs full and none; "),
        ('[overshoot]\nfull = "3"\n', "[overshoot] needs a number for full; write full = 3.5"),
        ("[overshoot]\nnone = true\n", "[overshoot] needs a number for none; "),
        ("[overshoot]\nfull = nan\n", "[overshoot] needs a number for full; "),
        ("[overshoot]\nnone = inf\n", "[overshoot] needs a number for none; "),
        ("[width]\ntarget = nan\n", "[width] needs a number for target; "),
        ("[overshoot]\nmarks = 1\n", "[overshoot] marks must be true or false; write marks = true"),
        ("[overshoot]\nfull = 7\nnone = 7\n", "[overshoot] has one value for full and none; make them differ"),
        ("[overshoot]\nfull = 2\nfull = 3\n", " line 3: is not TOML"),
        ("[overshoot\n", "is not TOML"),
    ],
)
def test_what_means_nothing_is_refused_with_its_remedy(refused, text, said):
    assert said in refused(text)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("[overshoot]\nfull = 30\n", "full = 30 must lie under none = 25; give both"),
        ("[noise]\nfull = 20\n", "full = 20 must lie over none = 24; give both"),
        ("[width]\nfull = 12\n", "full = 12 must lie under none = 10; give both"),
        ("[width]\nfull = -3\n", "full is a distance from the target; give 0 or more"),
    ],
)
def test_limits_that_would_reward_what_is_worse_are_refused(refused, text, said):
    assert said in refused(text)
