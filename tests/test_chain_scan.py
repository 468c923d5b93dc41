"""Deflection and geometry of the chain, read off frames of plain pictures.

A picture whose level rises from 0 IRE at one edge to 100 at the other makes each sample of the frame tell
which point of the picture it shows; a white picture on black tells its own outline by area.
"""

import math

import numpy as np
import pytest

from patternscore.chain import Chain, Sweep, grab, truth
from patternscore.chain.raster_truth import frame_points
from patternscore.errors import UsageError
from patternscore.standard import STANDARD_525, STANDARD_625

CLEAR = Chain(bits=None, band_limit=None, spot_lines=0.0)
SMALL = CLEAR.changed(sweep_h=Sweep(size=0.9), sweep_v=Sweep(size=0.9))
ALONG = np.tile(np.arange(2880) / 28.80 + 0.5 / 28.80, (8, 1)).astype(np.float32)
DOWN = np.tile(((np.arange(960) + 0.5) / 9.60)[:, None], (1, 8)).astype(np.float32)
WHITE = np.full((8, 8), 100.0, dtype=np.float32)


def scanned(chain):
    """Picture x of each sample of the middle line, and its time from the start of active line time, us."""
    frame = grab(chain, ALONG)
    times = (np.arange(frame.samples) - frame.raster.left) / frame.sample_rate
    seen = (times > 0.1) & (times < chain.standard.active_us - 0.1)
    return times[seen], frame.luma[frame.rows // 2, seen] / 100.0


def outline(chain):
    """Ends of a white picture: left and right of each row, top and bottom of each column, frame coordinates.

    By area and its centre, which a grabber's filter keeps; NaN where there is no picture.
    """
    luma = grab(chain.changed(band_limit=Chain().band_limit), WHITE).luma.astype(np.float64) / 100.0
    found = []
    for axis in (1, 0):
        places = np.arange(720)[None, :] if axis else np.arange(luma.shape[0])[:, None]
        size = luma.sum(axis)
        size = np.where(size > 0.25 * size.max(), size, np.nan)
        middle = (luma * places).sum(axis) / size
        found += [middle - size / 2, middle + size / 2]
    return found


def across_picture(values, start, end, at):
    """Values at picture fractions ``at`` of the other coordinate, by a parabola through the inner 90 %."""
    place = (np.arange(len(values)) - start) / (end - start)
    inner = (place > 0.05) & (place < 0.95)
    return np.polyval(np.polyfit(place[inner], values[inner], 2), at)


@pytest.mark.parametrize(("standard", "samples"), [(STANDARD_525, 710.9), (STANDARD_625, 701.3)])
def test_the_active_line_takes_its_known_number_of_samples(standard, samples):
    # Source: 52.66 us and 51.95 us of active line (SMPTE ST 170M, BT.470) at 13.5 MHz (BT.601).
    left, right, top, bottom = outline(CLEAR.changed(standard=standard))
    assert right[100] - left[100] == pytest.approx(samples, abs=0.1)
    assert (left[100] + right[100]) / 2 == pytest.approx(359.5, abs=0.01)
    assert bottom[360] - top[360] == pytest.approx(standard.coded_lines, abs=0.01)


def test_taller_frames_hold_485_picture_lines():
    # Source: common practice; 485 lines of a 525 frame carry picture.
    _, _, top, bottom = outline(CLEAR.changed(rows=486))
    assert bottom[360] - top[360] == pytest.approx(485.0, abs=0.01)


def test_square_pixel_clocks_show_the_same_line():
    # Source: common practice (from memory): 12 + 3/11 MHz and 14.75 MHz.
    for standard, samples, rate in ((STANDARD_525, 640, 135 / 11), (STANDARD_625, 768, 14.75)):
        frame = grab(CLEAR.changed(standard=standard, samples=samples, sample_rate=rate), ALONG)
        times = np.arange(20, samples - 20) / rate
        speed = np.polyfit(times, frame.luma[240, 20:-20] / 100.0, 1)[0]
        assert 1 / speed == pytest.approx(standard.active_us, rel=1e-4)


def test_an_undistorted_line_scans_evenly():
    times, x = scanned(CLEAR)
    np.testing.assert_allclose(x, times / STANDARD_525.active_us, atol=2e-4)


@pytest.mark.parametrize("droop", [0.05, 0.15, 0.3])
def test_droop_is_the_current_of_a_yoke_on_a_fixed_voltage(droop):
    # Source: circuit textbooks; i(t) = V/R (1 - exp(-t R/L)), end speed over start speed exp(-T R/L).
    duration = STANDARD_525.active_us
    rate = -math.log(1.0 - droop) / duration
    times, x = scanned(CLEAR.changed(sweep_h=Sweep(droop=droop)))
    np.testing.assert_allclose(x, (1 - np.exp(-times * rate)) / (1 - np.exp(-duration * rate)), atol=2e-4)
    speed = Sweep(droop=droop).speed([0.0, duration], duration)
    assert speed[1] / speed[0] == pytest.approx(1.0 - droop, rel=1e-3)


def test_s_error_speeds_both_ends_alike():
    speed = Sweep(s_error=0.12).speed([0.0, 25.0, 50.0], 50.0)
    assert speed[0] / speed[1] == pytest.approx(1.12, rel=1e-3)
    assert speed[2] / speed[1] == pytest.approx(1.12, rel=1e-3)


@pytest.mark.parametrize("retrace", [3.0, 8.0])
@pytest.mark.parametrize("fold", [0.5, 1.5, 2.5])
def test_the_beam_turns_exactly_where_the_fold_ends_and_flies_back_at_its_speed(fold, retrace):
    duration = STANDARD_525.active_us
    sweep = Sweep(fold_start=fold, fold_end=fold / 2, retrace=retrace, turn=0.2)
    fine = np.linspace(0.0, duration, 200_001)
    place, speed = sweep.position(fine, duration), sweep.speed(fine, duration)
    assert fine[np.argmin(place[:100_000])] == pytest.approx(fold, abs=0.002)
    assert fine[100_000 + np.argmax(place[100_000:])] == pytest.approx(duration - fold / 2, abs=0.002)
    assert speed[0] / speed[100_000] == pytest.approx(-retrace, rel=1e-6)
    run = np.concatenate([[0.0], np.cumsum((speed[1:] + speed[:-1]) / 2) * (fine[1] - fine[0])])
    np.testing.assert_allclose(place - place[0], run, atol=1e-5)

    times, x = scanned(CLEAR.changed(sweep_h=sweep))
    start = times < 5.0
    assert times[start][np.argmin(x[start])] == pytest.approx(fold, abs=0.06)  # within a sample


def test_the_forward_scan_does_not_move_when_a_fold_appears():
    times = np.linspace(5.0, 45.0, 50)
    plain, folded = Sweep(droop=0.1), Sweep(droop=0.1, fold_start=2.0, fold_end=1.0)
    np.testing.assert_allclose(folded.position(times, 52.0), plain.position(times, 52.0), atol=1e-6)


def test_size_and_shift_move_the_outline_as_the_card_says():
    chain = CLEAR.changed(sweep_h=Sweep(size=0.92, shift=0.03), sweep_v=Sweep(size=0.95, shift=-0.02))
    left, right, top, bottom = (ends[240] for ends in outline(chain))
    raster = chain.standard.raster(480, 720, 13.5)
    known = truth(chain)
    assert 100 * (right - left) / raster.width_samples == pytest.approx(known["width"], abs=0.01)
    assert 100 * (bottom - top) / 480 == pytest.approx(known["height"], abs=0.01)
    assert 100 * ((left + right) / 2 - 359.5) / raster.width_samples == pytest.approx(known["centre_h"], abs=0.01)
    assert 100 * ((top + bottom) / 2 - 239.5) / 480 == pytest.approx(known["centre_v"], abs=0.01)
    assert known["width"] == pytest.approx(92.0)
    assert known["centre_h"] == pytest.approx(3.0)
    assert known["aspect_error"] == pytest.approx(100 * (0.92 / 0.95 - 1))
    assert (left + 0.5) / 13.5 == pytest.approx(known["blank_left"], abs=0.003)
    assert (719.5 - right) / 13.5 == pytest.approx(known["blank_right"], abs=0.003)


@pytest.mark.parametrize("value", [-2.0, 2.0])
def test_trapezoid_is_the_difference_of_the_ends_over_the_mean(value):
    left, right, top, bottom = outline(SMALL.changed(trapezoid_h=value))
    upper, lower = across_picture(right - left, np.nanmin(top), np.nanmax(bottom), np.array([0.0, 1.0]))
    assert 200 * (lower - upper) / (lower + upper) == pytest.approx(value, abs=0.02)

    left, right, top, bottom = outline(SMALL.changed(trapezoid_v=value))
    ends = across_picture(bottom - top, np.nanmin(left), np.nanmax(right), np.array([0.0, 1.0]))
    assert 200 * (ends[1] - ends[0]) / ends.sum() == pytest.approx(value, abs=0.02)


@pytest.mark.parametrize("value", [-2.0, 2.0])
def test_bow_is_the_bulge_of_the_outermost_lines_over_the_size(value):
    left, right, top, bottom = outline(SMALL.changed(bow_h=value))
    wide = across_picture(right - left, np.nanmedian(top), np.nanmedian(bottom), np.array([0.0, 0.5, 1.0]))
    assert 100 * (wide[1] - wide[[0, 2]].mean()) / 2 / wide[0] == pytest.approx(value, abs=0.02)

    left, right, top, bottom = outline(SMALL.changed(bow_v=value))
    tall = across_picture(bottom - top, np.nanmedian(left), np.nanmedian(right), np.array([0.0, 0.5, 1.0]))
    assert 100 * (tall[1] - tall[[0, 2]].mean()) / 2 / tall[0] == pytest.approx(value, abs=0.02)


@pytest.mark.parametrize(("rotation", "skew"), [(2.0, 0.0), (-1.0, 0.0), (0.0, 1.5), (2.0, -1.0)])
def test_turn_and_skew_are_clockwise_angles_on_a_4_to_3_screen(rotation, skew):
    left, _, top, _ = outline(SMALL.changed(rotation=rotation, skew=skew))
    raster = SMALL.standard.raster(480, 720, 13.5)
    wide = raster.width_samples / (4 / 3)  # samples that make a picture height
    rows, columns = np.arange(60, 420), np.arange(100, 620)
    fall = np.polyfit(columns / wide, top[columns] / 480, 1)[0]
    lean = -np.polyfit(rows / 480, left[rows] / wide, 1)[0]  # top to the right
    assert math.degrees(math.atan(fall)) == pytest.approx(rotation, abs=0.01)
    assert math.degrees(math.atan(lean) - math.atan(fall)) == pytest.approx(skew, abs=0.01)


def test_the_frame_shows_each_point_where_the_truth_puts_it():
    chain = CLEAR.changed(
        sweep_h=Sweep(size=0.97, shift=0.01, droop=0.1),
        sweep_v=Sweep(size=0.95, s_error=0.08),
        rotation=1.5,
        skew=-0.5,
        trapezoid_h=1.5,
        trapezoid_v=-1.0,
        bow_h=-1.2,
        bow_v=0.8,
    )
    points = np.random.default_rng(5).uniform(0.1, 0.9, (40, 2))
    shown = []
    for picture in (ALONG, DOWN):
        luma = grab(chain, picture).luma / 100.0
        columns, rows = frame_points(chain, points).T
        left, top = columns.astype(int), rows.astype(int)
        a, b = columns - left, rows - top
        upper = luma[top, left] * (1 - a) + luma[top, left + 1] * a
        lower = luma[top + 1, left] * (1 - a) + luma[top + 1, left + 1] * a
        shown.append(upper * (1 - b) + lower * b)
    np.testing.assert_allclose(np.stack(shown, 1), points, atol=2e-4)


def test_linearity_is_half_the_spread_of_the_speeds_of_sixteenths():
    # Derived: with an L/R sweep of droop d the speed falls as exp(-k t); sixteenths of the picture.
    known = truth(Chain(sweep_h=Sweep(droop=0.15)))
    edges = -np.log(1 - 0.15 * np.arange(17) / 16) / -math.log(1 - 0.15)
    speeds = 1 / np.diff(edges)
    assert known["linearity_h"] == pytest.approx(50 * (speeds.max() - speeds.min()) / speeds.mean(), rel=1e-3)
    assert known["linearity_v"] == pytest.approx(0.0, abs=1e-6)


def test_an_ideal_grid_that_is_only_turned_or_resized_has_no_position_error():
    assert truth(Chain(sweep_h=Sweep(size=0.9, shift=0.05)))["position_error"] == pytest.approx(0.0, abs=1e-6)
    assert truth(Chain(rotation=0.2))["position_error"] < 0.002
    assert truth(Chain(bow_h=2.0))["position_error"] > 0.3


def test_the_second_field_lies_lower_by_its_offset():
    plain, moved = (grab(CLEAR.changed(field_offset_lines=lines), DOWN).luma[:, 360] for lines in (0.0, 0.5))
    step = 100.0 / 480
    np.testing.assert_allclose((plain - moved)[101:300:2], 0.5 * step, atol=1e-3)
    np.testing.assert_allclose((plain - moved)[100:300:2], 0.0, atol=1e-3)


@pytest.mark.parametrize(
    "settings",
    [
        {"samples": 900},
        {"rows": 1},
        {"gamma": 0.0},
        {"spot_us": -1.0},
        {"rotation": 45.0},
        {"bow_h": 30.0},
        {"oversample": 1},
    ],
)
def test_settings_that_mean_nothing_are_refused(settings):
    with pytest.raises(UsageError):
        Chain(**settings)


@pytest.mark.parametrize("settings", [{"size": 0.0}, {"droop": 1.0}, {"fold_start": -1.0}, {"retrace": 0.0}])
def test_sweeps_that_do_not_run_forward_are_refused(settings):
    with pytest.raises(UsageError):
        Sweep(**settings)


def test_a_fold_beyond_the_middle_of_the_line_is_refused():
    with pytest.raises(UsageError, match="middle"):
        grab(CLEAR.changed(sweep_h=Sweep(fold_start=30.0)), WHITE)
