"""Timing of the standards and the conversions, against published figures and facts of the trade."""

from __future__ import annotations

import numpy as np
import pytest

from patternscore.errors import UsageError
from patternscore.standard import (
    ASPECT,
    KNOWN_SIZES,
    LUMA_CLOCK_MHZ,
    STANDARD_525,
    STANDARD_625,
    Standard,
    code_from_ire,
    code_range,
    decibels,
    ire_from_code,
    millivolts_from_ire,
    samples_from_us,
    standard_named,
    us_from_samples,
)

BOTH = [STANDARD_525, STANDARD_625]


def test_line_times_are_those_of_the_standards():
    # Source: SMPTE ST 170M (15 734.264 Hz, 63.556 us); ITU-R BT.470 (15 625 Hz, 64 us).
    assert 1e6 / STANDARD_525.line_us == pytest.approx(15734.264, abs=0.002)
    assert STANDARD_525.line_us == pytest.approx(63.556, abs=0.001)
    assert 1e6 / STANDARD_625.line_us == 15625.0


def test_field_times_are_those_of_the_standards():
    # Source: SMPTE ST 170M (16.683 ms); ITU-R BT.470 (20 ms).
    assert STANDARD_525.field_us == pytest.approx(16683, abs=1)
    assert STANDARD_625.field_us == pytest.approx(20000)


@pytest.mark.parametrize("standard", BOTH, ids=lambda standard: standard.name)
def test_two_fields_hold_the_lines_of_a_frame(standard):
    assert 2 * standard.field_us / standard.line_us == pytest.approx(standard.lines)


def test_blanking_leaves_the_published_active_line():
    # Source: SMPTE ST 170M, blanking 10.9 +- 0.2 us; ITU-R BT.470, 12.05 +- 0.25 us; active line derived from them.
    assert STANDARD_525.active_us == pytest.approx(52.66, abs=0.01)
    assert STANDARD_625.active_us == pytest.approx(51.95, abs=0.01)
    for standard in BOTH:
        # Common practice: on a scope, line blanking is about 10 to 12 us of the line.
        assert 10.0 < standard.blanking_us < 12.5


def test_half_a_line_is_that_of_a_horizontal_drive():
    # Common practice: a drive of equal halves lasts 31.75 us (525), 32 us (625).
    assert STANDARD_525.line_us / 2 == pytest.approx(31.75, abs=0.05)
    assert STANDARD_625.line_us / 2 == 32.0


@pytest.mark.parametrize(("standard", "samples"), [(STANDARD_525, 858), (STANDARD_625, 864)])
def test_a_line_holds_the_samples_of_the_digital_standard(standard, samples):
    # Source: ITU-R BT.601: 13.5 MHz, 858 and 864 samples a line.
    assert samples_from_us(standard.line_us, LUMA_CLOCK_MHZ) == pytest.approx(samples, abs=0.001)


@pytest.mark.parametrize(("standard", "samples"), [(STANDARD_525, 710.9), (STANDARD_625, 701.3)])
def test_the_active_line_in_samples(standard, samples):
    # Source: derived from BT.601 and the blanking; summaries of practice use 711 and 702.
    assert samples_from_us(standard.active_us, LUMA_CLOCK_MHZ) == pytest.approx(samples, abs=0.06)  # given to 0.1
    raster = standard.raster(standard.coded_lines, 720, LUMA_CLOCK_MHZ)
    assert raster.width_samples == pytest.approx(samples, abs=0.06)
    assert (raster.left + raster.right) / 2 == pytest.approx(359.5)


def test_720_samples_last_53_and_a_third_us():
    # Source: derived from BT.601.
    assert us_from_samples(720, LUMA_CLOCK_MHZ) == pytest.approx(53.333, abs=0.001)


@pytest.mark.parametrize(("samples", "clock"), [(640, 12 + 3 / 11), (768, 14.75)])
def test_square_pixels_have_the_clocks_of_common_practice(samples, clock):
    # Source: common practice, from memory: 12 3/11 MHz for 640 samples, 14.75 MHz for 768.
    rows = 480 if samples == 640 else 576
    assert KNOWN_SIZES[samples, rows][1] == pytest.approx(clock)


@pytest.mark.parametrize(("samples", "rows", "aspect"), [(640, 480, 10 / 11), (768, 576, 59 / 54)])
def test_sample_aspects_follow_from_the_square_clocks(samples, rows, aspect):
    # Source: derived: 13.5 MHz samples are wider or narrower than square ones as the clocks go, 10:11 and 59:54.
    square = KNOWN_SIZES[samples, rows][1]
    assert square / LUMA_CLOCK_MHZ == pytest.approx(aspect, rel=1e-6)


@pytest.mark.parametrize(("standard", "lines"), [(STANDARD_525, 79.0), (STANDARD_625, 77.9)])
def test_lines_per_megahertz(standard, lines):
    # Source: 2 f T_active / (4/3); common practice says about 80.
    assert standard.tvl_from_mhz(1.0) == pytest.approx(lines, abs=0.05)
    assert standard.mhz_from_tvl(standard.tvl_from_mhz(3.3)) == pytest.approx(3.3)


def test_broadcast_bandwidth_gives_the_broadcast_resolution():
    # Source: derived, 332; public tables of television lines print 330 for broadcast 525.
    assert STANDARD_525.tvl_from_mhz(STANDARD_525.luma_mhz) == pytest.approx(332, abs=0.5)


def test_240_lines_of_home_tape_are_about_three_megahertz():
    # Source: public tables of television lines, 240 for the home tape of the 1970s, whose luma is said to reach 3 MHz.
    assert STANDARD_525.mhz_from_tvl(240) == pytest.approx(3.04, abs=0.01)


def test_worked_examples_with_the_kell_factor():
    # Source: trade press worked example: 0.7 x 485 lines is 339.
    assert 0.7 * STANDARD_525.picture_lines == pytest.approx(339, abs=0.6)
    # Source: textbook problem: 875 lines, 30 frames/s, 815 active, Kell 0.7, horizontal fraction 0.83, aspect 1:
    # line rate 26 250 Hz, active 31.62 us, 570.5 lines, 9.02 MHz. Our lines are per height of a 4:3 picture.
    line = 1e6 / (875 * 30)
    odd = Standard("875", line, 0.17 * line, 60.0, 875, 815, 815, 9.02, "top")
    assert odd.active_us == pytest.approx(31.62, abs=0.005)
    assert odd.mhz_from_tvl(0.7 * odd.picture_lines / ASPECT) == pytest.approx(9.02, abs=0.01)


@pytest.mark.parametrize(("bits", "black", "white"), [(8, 16, 235), (10, 64, 940)])
def test_video_codes_are_those_of_the_digital_standard(bits, black, white):
    # Source: ITU-R BT.601: 16 and 235 at 8 bits, 64 and 940 at 10.
    assert code_range("video", bits) == (black, white)
    assert ire_from_code(black, "video", bits) == 0.0
    assert ire_from_code(white, "video", bits) == pytest.approx(100.0)


def test_codes_follow_the_published_formula():
    # Source: ITU-R BT.601: Y = round(219 V + 16) for V from 0 to 1.
    volts = np.linspace(0.0, 1.0, 257)
    np.testing.assert_allclose(code_from_ire(100 * volts), 219 * volts + 16)


@pytest.mark.parametrize("bits", [8, 10, 12, 16])
def test_full_range_takes_all_codes(bits):
    assert code_range("full", bits) == (0.0, 2.0**bits - 1)


@pytest.mark.parametrize("levels", ["video", "full"])
def test_levels_and_codes_are_each_others_inverse(levels):
    codes = np.arange(256.0)
    np.testing.assert_allclose(code_from_ire(ire_from_code(codes, levels), levels), codes, atol=1e-9)


def test_sync_and_white_have_the_voltages_of_the_standards():
    # Source: SMPTE ST 170M: sync 286 mV is 40 IRE, white 714 mV; ITU-R BT.470: 700 mV, sync 300 mV.
    assert millivolts_from_ire(40, STANDARD_525) == pytest.approx(286, abs=0.5)
    assert millivolts_from_ire(100, STANDARD_525) == pytest.approx(714, abs=0.5)
    assert millivolts_from_ire(140, STANDARD_525) == pytest.approx(1000)
    assert millivolts_from_ire(100, STANDARD_625) == 700
    # Derived: 1 IRE is 7.14 mV (1 V / 140), 7 mV in 625.
    assert millivolts_from_ire(1, STANDARD_525) == pytest.approx(7.14, abs=0.005)


def test_a_divider_of_177_is_made_up_by_two_stages_of_13_3():
    # Common practice: 177 times is 45 dB, and two stages of 13.3 make it up.
    assert decibels(177) == pytest.approx(45, abs=0.05)
    assert 2 * decibels(13.3) == pytest.approx(decibels(177), abs=0.02)


def test_noise_of_one_percent_is_40_db():
    # Definition.
    assert decibels(100 / 1.0) == pytest.approx(40)


def test_quantising_noise_of_the_video_codes():
    # Derived: 1/(219 sqrt 12) of white, 57.6 dB.
    step = ire_from_code(17.0) - ire_from_code(16.0)
    assert decibels(100 / (step / np.sqrt(12))) == pytest.approx(57.6, abs=0.05)


@pytest.mark.parametrize(
    ("rows", "top", "bottom"),
    [(480, -0.5, 479.5), (486, 0.0, 485.0), (240, -0.5, 239.5), (960, -0.5, 959.5)],
)
def test_the_picture_fills_the_frame_but_for_lines_that_carry_none(rows, top, bottom):
    # Common practice: about 485 picture lines, of which 480 are coded.
    raster = STANDARD_525.raster(rows, 720, LUMA_CLOCK_MHZ)
    assert (raster.top, raster.bottom) == (top, bottom)
    assert raster.height_lines == bottom - top


def test_625_fills_all_576_coded_lines():
    raster = STANDARD_625.raster(576, 720, LUMA_CLOCK_MHZ)
    assert (raster.top, raster.bottom) == (-0.5, 575.5)


def test_an_unknown_standard_is_refused_with_the_known_ones():
    assert standard_named("625") is STANDARD_625
    with pytest.raises(UsageError, match="819 is no scanning standard; name 525 or 625"):
        standard_named("819")
