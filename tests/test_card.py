"""Marks, scores, limits, remarks and settings in names."""

from __future__ import annotations

import json

import pytest

from patternscore.card import card_from_dict, group_score, make_card, overall_score
from patternscore.keys import KEYS
from patternscore.limits import Limit, shipped_limits
from patternscore.reading import Estimate, Findings, Reading
from patternscore.remarks import remarks_on
from patternscore.standard import STANDARD_525

FRAME = {"name": "a.png", "sha256": "", "rows": 480, "samples": 720, "standard": "525", "levels": "video"}


def reading(key: str, value: float, sigma: float = 0.1, doubt: str | None = None) -> Reading:
    return Reading(key, value, KEYS[key].unit, sigma, doubt=doubt)


def test_marks_run_straight_from_none_to_full():
    limit = Limit(full=4.0, none=2.0)
    assert [limit.mark(value) for value in (1.0, 2.0, 3.0, 4.0, 9.0)] == [0, 0, 50, 100, 100]
    around = Limit(full=1.0, none=5.0, target=100.0)
    assert [around.mark(value) for value in (100.0, 101.0, 97.0, 95.0, 106.0)] == [100, 100, 50, 0, 0]


def test_every_reading_has_its_limits_and_every_limit_its_reading():
    assert set(shipped_limits()) == set(KEYS)


def test_a_failed_group_cannot_hide_behind_the_others():
    assert overall_score([100, 100, 100, 100, 10]) == pytest.approx(5 / 0.14)
    for lowest in (0.0, 5.0, 30.0):
        assert overall_score([100, 100, 100, 100, lowest]) <= 5 * max(lowest, 1.0)
    assert overall_score([None, 80.0]) == pytest.approx(80.0)
    assert overall_score([None, None]) is None


def test_a_group_is_half_its_mean_and_half_its_lowest():
    assert group_score([100.0, 100.0, 40.0]) == pytest.approx((80 + 40) / 2)
    assert group_score([]) is None


def test_a_doubted_reading_has_no_marks():
    card = make_card(FRAME, "chart", [reading("overshoot", 40.0, doubt="sharpened")], {}, shipped_limits())
    assert card["overshoot"].score is None
    assert card.groups["resolution"] is None
    assert json.loads(card.to_json())["readings"]["overshoot"]["doubt"] == "sharpened"


def test_a_card_survives_json_and_back():
    card = make_card(FRAME, "chart", [reading("noise", 41.234567)], {"gamma": "no staircase"}, shipped_limits(), ("a",))
    again = card_from_dict(json.loads(card.to_json()))
    assert again.as_dict() == card.as_dict()
    assert again.missing["gamma"] == "no staircase"
    assert set(again.missing) | set(again.readings) == set(KEYS)


def test_a_value_that_is_no_number_becomes_a_reason():
    findings = Findings()
    findings.add("noise", "dB", Estimate(float("nan"), 1.0))
    assert findings.readings == []
    assert findings.missing == {"noise": "the fit did not settle on a value"}
    with pytest.raises(ValueError, match="finite"):
        reading("noise", float("inf"))


def test_a_change_counts_only_beyond_the_two_sigmas():
    assert not reading("noise", 40.0).differs_from(reading("noise", 40.25))
    assert reading("noise", 40.0).differs_from(reading("noise", 40.3))


def test_remarks_say_what_the_numbers_mean_for_the_adjustment():
    said = remarks_on(
        {"overshoot": reading("overshoot", 14.0), "bandwidth_h": reading("bandwidth_h", 4.6)}, STANDARD_525
    )
    assert said[0] == "Overshoot is 14 % with the -3 dB point at 4.6 MHz: peaking is past its optimum."
    assert remarks_on({"overshoot": reading("overshoot", 14.0, sigma=5.0)}, STANDARD_525) == ()


def test_no_remark_sends_a_hand_to_the_high_voltage():
    worst = {key: reading(key, value, 0.0) for key in KEYS for value in [-60.0 if KEYS[key].better == "high" else 60.0]}
    for sentence in remarks_on(worst, STANDARD_525, most=99):
        assert not any(word in sentence.lower() for word in ("anode", "flyback", "high voltage", "eht"))
