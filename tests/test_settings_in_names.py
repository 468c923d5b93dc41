"""Settings of knobs in the names of files, as people at a bench write them."""

from __future__ import annotations

import random

import pytest

from patternscore.settings_in_names import Setting, setting_in_name, settings_in_names


@pytest.mark.parametrize(
    ("name", "number", "unit", "knob"),
    [
        ("07_peaking_18pF.png", 18, "pF", "peaking"),
        ("07-peaking-18pF.png", 18, "pF", "peaking"),
        ("peaking.18pF.png", 18, "pF", "peaking"),
        ("peaking=18pF.png", 18, "pF", "peaking"),
        ("peaking (18 pF).png", 18, "pF", "peaking"),
        ("peaking_18_pF.tif page 3", 18, "pF", "peaking"),
        ("18pF.png", 18, "pF", ""),
        ("C12p.png", 12, "pF", "C"),
        ("01_black_-0.5turns.png", -0.5, "turns", "black"),
        ("02_black_+0.5turns.png", 0.5, "turns", "black"),
        ("black--3.5V.png", -3.5, "V", "black"),
        ("-3.5V.png", -3.5, "V", ""),
        ("black\u22122V.png", -2, "V", "black"),
        ("black_.5V.png", 0.5, "V", "black"),
        ("gain 2,5V.png", 2.5, "V", "gain"),
        ("width (45%).png", 45, "%", "width"),
        ("hold_31.75us.png", 31.75, "us", "hold"),
        ("hold_2\u00b5s.png", 2, "us", "hold"),
        ("hold_2\u03bcs.png", 2, "us", "hold"),
        ("drive_350 mV.png", 350, "mV", "drive"),
        ("turn_90deg.png", 90, "degrees", "turn"),
        ("turn_90\u00b0.png", 90, "degrees", "turn"),
        ("focus_3.2kHz.png", 3.2, "kHz", "focus"),
        ("clock 13.5MHz.png", 13.5, "MHz", "clock"),
        ("noise_34dB.png", 34, "dB", "noise"),
        ("linearity_4turns.png", 4, "turns", "linearity"),
        ("height_2 steps.png", 2, "steps", "height"),
        ("peaking_3.png", 3, "", "peaking"),
        ("step_03_peaking_18.png", 18, "", "peaking"),
        ("focus left 7.png", 7, "", "focus left"),
    ],
)
def test_a_setting_is_read_with_its_unit_and_knob(name, number, unit, knob):
    assert setting_in_name(name) == Setting(number, unit, knob)


@pytest.mark.parametrize(
    ("written", "number", "unit"),
    [
        # Source: IEC 60062 (from memory) puts the multiplier's letter where the decimal point would be: 4k7, 0R22, 4p7.
        ("4k7", 4700, "ohm"), ("4K7", 4700, "ohm"), ("0R22", 0.22, "ohm"), ("3R3", 3.3, "ohm"), ("2M2", 2.2e6, "ohm"),
        ("4p7", 4.7, "pF"), ("6n8", 6.8, "nF"), ("1u5", 1.5, "uF"), ("4u7H", 4.7, "uH"), ("1m5H", 1.5, "mH"),
        ("2V5", 2.5, "V"), ("2.2k", 2200, "ohm"), ("2.2K", 2200, "ohm"), ("820R", 820, "ohm"), ("1M", 1e6, "ohm"),
        ("12p", 12, "pF"), ("100n", 100, "nF"), ("10u", 10, "uF"), ("1.5kohm", 1500, "ohm"), ("47ohms", 47, "ohm"),
        ("1,5k\u03a9", 1500, "ohm"), ("47\u2126", 47, "ohm"), ("-10mV", -10, "mV"), ("18PF", 18, "pF"),
        ("18pf", 18, "pF"), ("5mhz", 5, "MHz"), ("5v", 5, "V"), ("5DB", 5, "dB"), ("7ire", 7, "IRE"),
    ],
)  # fmt: skip
def test_values_are_read_as_they_stand_on_parts(written, number, unit):
    assert setting_in_name(f"03_trim_{written}.png") == Setting(pytest.approx(number), unit, "trim")
    assert setting_in_name(f"{written}.png") == Setting(pytest.approx(number), unit, "")


@pytest.mark.parametrize(
    "name",
    [
        "step_03.png", "03.png", "IMG_0034.png", "frame 12.png", "capture12.png", "take2.png", "run 3 take 2.png",
        "chart_525.png", "chart_625.png", "frame_720x480.png", "480p.png", "720p60.png", "1080p25.png",
        "20261201_120000.png", "2026-12-01 12-00-00.png", "v1.2.3.png", "peaking.png", "x_mohm5.png", "5mohm.png",
        "_.png", "-.png", ".png", "", "...", "+", "%", "pF.png",
    ],
)  # fmt: skip
def test_an_index_a_size_or_a_date_is_no_setting(name):
    assert setting_in_name(name) is None


@pytest.mark.parametrize(
    "name",
    [
        "2026-12-01_peaking_18pF.png", "20261201_120000_peaking_18pF.png", "03_peaking_18pF_retake_2.png",
        "525_peaking_18pF.png", "take 2 peaking 18pF.png", "peaking_18pF_720x480.png", "frame_0012_peaking_18pF.png",
    ],
)  # fmt: skip
def test_other_numbers_do_not_hide_the_setting(name):
    found = setting_in_name(name)
    assert (found.number, found.unit) == (18, "pF")


def test_a_number_with_a_unit_counts_before_one_without():
    assert setting_in_name("focus_3_peaking_18pF.png") == Setting(18, "pF", "peaking")


def test_a_setting_shows_itself_as_a_person_writes_it():
    assert str(setting_in_name("trim_4k7.png")) == "4700 ohm"
    assert str(setting_in_name("peaking_3.png")) == "3"


def test_a_run_in_several_prefixes_comes_in_one_unit():
    found = settings_in_names(["1_680pF.png", "2_1nF.png", "3_1.5nF.png"])
    assert [(setting.number, setting.unit) for setting in found] == [(0.68, "nF"), (1.0, "nF"), (1.5, "nF")]


def test_resistances_can_be_put_in_order():
    found = settings_in_names(["1M.png", "820R.png", "4k7.png"])
    assert [setting.number for setting in found] == [1e6, 820, 4700]
    assert {setting.unit for setting in found} == {"ohm"}


@pytest.mark.parametrize(
    ("names", "numbers"),
    [
        (["gain_2V_peaking_12pF.png", "gain_2V_peaking_18pF.png"], [12, 18]),
        (["gain_1V_peaking_12pF.png", "gain_2V_peaking_12pF.png"], [1, 2]),
        (["focus_1_take_1.png", "focus_2_take_1.png"], [1, 2]),
        (["gain_2V_x_1.png", "gain_2V_x_5.png", "gain_2V_x_9.png"], [1, 5, 9]),
    ],
)
def test_of_several_settings_the_one_that_changes_is_the_runs(names, numbers):
    assert [setting.number for setting in settings_in_names(names)] == numbers


def test_frames_without_a_setting_keep_their_place():
    found = settings_in_names(["before.png", "1_peaking_12pF.png", "2_peaking_18pF.png", "after.png"])
    assert [setting and setting.number for setting in found] == [None, 12, 18, None]
    assert settings_in_names(["a.png", "b.png"]) == [None, None]
    assert settings_in_names([]) == []


def test_any_name_is_read_without_complaint():
    fate = random.Random(2)
    for _ in range(3000):
        name = "".join(
            fate.choice("07_ -+.,=()pFnukMRVHz%\u00b5\u03a9\u2212\u00b2\u0667e") for _ in range(fate.randrange(24))
        )
        found = setting_in_name(name)
        assert found is None or isinstance(found.number, float)
        assert len(settings_in_names([name, "07_peaking_18pF.png"])) == 2
