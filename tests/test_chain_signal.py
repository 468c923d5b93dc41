"""Levels, coding, noise and timing of the chain."""

import doctest
import importlib

import numpy as np
import pytest

from patternscore.chain import Chain, Sweep, grab, responses, truth
from patternscore.errors import UsageError
from patternscore.standard import STANDARD_525, STANDARD_625, code_from_ire

GREY = np.full((16, 16), 50.0, dtype=np.float32)
INSIDE = np.s_[4:-4, 24:-24]
PLAIN = Chain(bits=None)
RAMP = np.tile(np.arange(1440) / 14.40 + 0.5 / 14.40, (8, 1)).astype(np.float32)
STAIR = np.repeat(np.linspace(0.0, 100.0, 21), 96)[None, :].repeat(8, 0).astype(np.float32)


def stair_levels(chain):
    """Nominal levels of a staircase of 21 steps, and what the frame shows at the middle of each."""
    frame = grab(chain, STAIR)
    middles = frame.raster.left + (np.arange(21) + 0.5) / 21 * frame.raster.width_samples
    return np.linspace(0.0, 100.0, 21), frame.luma[frame.rows // 2, np.rint(middles).astype(int)]


@pytest.mark.parametrize(
    ("bits", "levels", "codes"),
    [
        (8, "video", {0.0: 16, 40.0: 104, 100.0: 235}),
        (10, "video", {0.0: 64, 40.0: 414, 100.0: 940}),
        (8, "full", {0.0: 0, 40.0: 102, 100.0: 255}),
        (16, "full", {0.0: 0, 40.0: 26214, 100.0: 65535}),
    ],
)
def test_levels_take_the_codes_of_bt_601(bits, levels, codes):
    # Source: ITU-R BT.601: black 16, white 235 at 8 bits, 64 and 940 at 10; Y = round(219 V + 16).
    for level, code in codes.items():
        frame = grab(Chain(bits=bits, levels=levels), np.full((4, 4), level, dtype=np.float32))
        shown = np.rint(code_from_ire(frame.luma[200, 300:400], levels, bits))
        assert set(shown) == {code}
        assert frame.levels == levels


def test_samples_lie_on_codes_and_end_where_coding_ends():
    frame = grab(Chain(gain=1.4, noise_db=30.0))
    codes = code_from_ire(frame.luma)
    np.testing.assert_allclose(codes, np.rint(codes), atol=2e-4)
    assert codes.max() == pytest.approx(255)
    assert codes.min() >= -1e-4
    assert frame.code_step == pytest.approx(100 / 219)


def test_setup_lifts_the_picture_and_not_blanking():
    luma = grab(PLAIN.changed(setup=7.5, samples=720), GREY * 0).luma
    np.testing.assert_allclose(luma[INSIDE], 7.5, atol=0.05)
    np.testing.assert_allclose(luma[:, 0], 0.0, atol=0.7)  # 4.6 samples before the edge of blanking


def test_gamma_is_the_exponent_of_output_against_input():
    # Source: ITU-R BT.1886 reference exponent 2.4 (from memory): L = V^2.4.
    nominal, seen = stair_levels(PLAIN.changed(gamma=2.4))
    np.testing.assert_allclose(seen, 100 * (nominal / 100) ** 2.4, atol=0.1)


def test_levels_of_the_truth_are_those_of_the_frame():
    chain = PLAIN.changed(gamma=1.3, gain=0.9, setup=-6.0, black_clip=0.0, white_clip=75.0)
    nominal, seen = stair_levels(chain)
    known = truth(chain)
    assert seen[0] == pytest.approx(known["black_level"], abs=0.2)
    assert seen[-1] == pytest.approx(known["white_level"], abs=0.2)
    held_black, held_white = nominal < known["black_crush"], nominal > known["white_crush"]
    assert 0 < held_black.sum() < 6
    np.testing.assert_allclose(seen[held_black], 0.0, atol=0.2)
    np.testing.assert_allclose(seen[held_white], 75.0, atol=0.2)
    assert np.all(np.diff(seen[~held_black & ~held_white]) > 1.0)


def test_coding_clips_too():
    # Derived: code 0 is -16/219 of white, -7.31 IRE; a setup of -10 puts levels up to 2.69 IRE there.
    known = truth(Chain(setup=-10.0))
    assert known["black_crush"] == pytest.approx(10.0 - 1600 / 219, abs=0.01)
    assert known["black_level"] == pytest.approx(-1600 / 219, abs=0.01)
    assert truth(Chain(setup=-10.0, bits=None))["black_crush"] == 0.0


def test_tilt_is_the_slope_over_the_width_and_the_height():
    luma = grab(PLAIN.changed(tilt_line=4.0, tilt_field=-3.0), GREY).luma
    raster = STANDARD_525.raster(480, 720, 13.5)
    along = np.polyfit(np.arange(30, 690), luma[:, 30:690].mean(0), 1)[0] * raster.width_samples
    down = np.polyfit(np.arange(480), luma[:, 30:690].mean(1), 1)[0] * 480
    assert along == pytest.approx(4.0, abs=0.02)
    assert down == pytest.approx(-3.0, abs=0.02)
    assert luma[240, 360] == pytest.approx(50.0, abs=0.05)


@pytest.mark.parametrize(("standard", "mains"), [(STANDARD_525, 60.0), (STANDARD_625, 50.0)])
def test_hum_runs_at_mains_rate_through_both_fields(standard, mains):
    luma = grab(PLAIN.changed(standard=standard, hum_percent=2.0), GREY).luma[:, 300:400].mean(1) - 50.0
    # Derived: lines of a field follow each other by a line period, the other field by a field period.
    first = 0 if standard.first_field == "top" else 1
    rows = np.arange(len(luma))
    times = 1e-6 * ((rows // 2) * standard.line_us + np.where(rows % 2 == first, 0.0, 1e6 / standard.field_hz))
    waves = np.stack([np.sin(2 * np.pi * mains * times), np.cos(2 * np.pi * mains * times)], 1)
    solved, left, *_ = np.linalg.lstsq(waves, luma, rcond=None)
    assert np.hypot(*solved) == pytest.approx(2.0, abs=0.01)
    assert left[0] < 1e-3


def test_fields_differ_by_their_level_offset():
    luma = grab(PLAIN.changed(field_level_offset=3.0), GREY).luma[:, 300:400].mean(1)
    assert luma[1::2].mean() - luma[::2].mean() == pytest.approx(3.0, abs=1e-3)


@pytest.mark.parametrize("decibel", [30.0, 40.0, 46.0])
def test_noise_has_its_rms_in_the_frame(decibel):
    # Source: definition; 1 % of white is 40 dB.
    luma = grab(PLAIN.changed(noise_db=decibel), GREY, seed=3).luma[INSIDE]
    assert 20 * np.log10(100.0 / luma.std()) == pytest.approx(decibel, abs=0.05)
    rest = luma - luma.mean()
    assert abs((rest[:, 1:] * rest[:, :-1]).mean()) < 0.01 * luma.var()  # white along the line
    assert abs((rest[1:] * rest[:-1]).mean()) < 0.01 * luma.var()


def test_coding_adds_the_noise_of_its_steps():
    # Derived: 1/(219 sqrt 12) of white, 57.6 dB.
    luma = grab(Chain(noise_db=46.0), GREY, seed=3).luma[INSIDE]
    expected = np.hypot(10 ** (-46 / 20), 1 / (219 * np.sqrt(12)))
    assert luma.std() / 100 == pytest.approx(expected, rel=0.01)


def line_shifts(frame, still):
    """Shift of each line in ns, from how far a ramp has moved."""
    slope = 100.0 / frame.standard.active_us
    return -1e3 * (frame.luma - still.luma)[:, 100:620].mean(1) / slope


def test_jitter_shifts_each_line_on_its_own():
    still = grab(PLAIN, RAMP)
    shifts = line_shifts(grab(PLAIN.changed(jitter_ns=20.0), RAMP, seed=7), still)
    assert shifts.std() == pytest.approx(20.0, rel=0.12)  # 480 lines
    assert abs(np.corrcoef(shifts[1:], shifts[:-1])[0, 1]) < 0.15


def test_jitter_moves_lines_without_changing_their_shape():
    still, moved = (grab(PLAIN.changed(jitter_ns=ns, rows=32), seed=7).luma.astype(np.float64) for ns in (0.0, 30.0))
    shifts = np.random.default_rng(7).normal(0.0, 0.03, 32)  # us, the chain's own order of drawing
    frequency = np.fft.rfftfreq(720, 1 / 13.5)
    turned = np.fft.irfft(np.fft.rfft(still, axis=1) * np.exp(-2j * np.pi * shifts[:, None] * frequency), 720, axis=1)
    np.testing.assert_allclose(moved[:, 40:-40], turned[:, 40:-40], atol=0.05)


def test_wander_and_bounce_change_from_grab_to_grab():
    still = grab(PLAIN, RAMP)
    moved = [line_shifts(grab(PLAIN.changed(wander_ns=30.0), RAMP, seed=k), still) for k in range(40)]
    assert max(shift.std() for shift in moved) < 0.5  # the whole frame moves
    assert np.std([shift.mean() for shift in moved]) == pytest.approx(30.0, rel=0.25)
    level = [grab(PLAIN.changed(bounce_percent=2.0), GREY, seed=k).luma[240, 360] for k in range(40)]
    assert np.std(level) == pytest.approx(1.0, rel=0.25)
    assert truth(PLAIN.changed(bounce_percent=2.0))["bounce"] == pytest.approx(2.0)


def sine(mhz, swing):
    """Picture of 50 IRE and a sine along the line, each pixel its mean over the pixel."""
    time = (np.arange(5760) + 0.5) / 5760 * STANDARD_525.active_us
    swing = swing * np.sinc(mhz * STANDARD_525.active_us / 5760)
    return np.tile(50 + swing * np.sin(2 * np.pi * mhz * time), (4, 1)).astype(np.float32)


def test_a_grabber_without_a_filter_folds_what_lies_above_half_its_clock():
    # Source: sampling theorem; 9 MHz at 13.5 MHz shows as 4.5 MHz.
    open_line = grab(PLAIN.changed(band_limit=None), sine(9.0, 40.0)).luma[240, 100:640] - 50.0
    spectrum = np.abs(np.fft.rfft(open_line * np.hanning(540))) / 270 * 2
    assert np.argmax(spectrum) == pytest.approx(4.5 / 13.5 * 540, abs=0.51)
    assert spectrum.max() == pytest.approx(40.0, rel=0.005)
    assert np.ptp(grab(PLAIN, sine(9.0, 40.0)).luma[240, 100:640]) < 0.5  # the default filter stops it


def test_a_burst_passes_by_the_response_at_its_frequency():
    stage = responses.second_order(3.0, 0.4)
    for mhz in (0.5, 2.0, 3.58, 5.0):
        luma = grab(PLAIN.changed(response=(stage,)), sine(mhz, 20.0)).luma[240, 100:640] - 50.0
        phase = 2 * np.pi * mhz * np.arange(540) / 13.5
        solved, *_ = np.linalg.lstsq(np.stack([np.sin(phase), np.cos(phase)], 1), luma, rcond=None)
        assert np.hypot(*solved) / 20 == pytest.approx(abs(stage(np.array([mhz]))[0]), rel=1e-3)


def test_one_seed_gives_one_frame_and_chains_do_not_disturb_each_other():
    chain = Chain(noise_db=40.0, jitter_ns=10.0)
    first = grab(chain, seed=5).luma
    grab(chain.changed(gain=0.5, sweep_h=Sweep(size=0.9)), seed=5)
    np.testing.assert_array_equal(grab(chain, seed=5).luma, first)
    assert np.any(grab(chain, seed=6).luma != first)


def test_a_changed_picture_is_not_taken_for_the_old_one():
    picture = GREY.copy()
    before = grab(PLAIN, picture).luma[240, 360]
    picture += 20.0
    assert grab(PLAIN, picture).luma[240, 360] - before == pytest.approx(20.0, abs=0.1)


@pytest.mark.parametrize("picture", [np.zeros(5), np.full((4, 4), np.nan)])
def test_what_is_no_picture_is_refused(picture):
    with pytest.raises(UsageError, match="picture"):
        grab(PLAIN, picture)


def test_the_chart_is_shown_where_no_picture_is_given(grabbed):
    frame = grabbed(Chain())
    assert frame.luma.shape == (480, 720)
    assert grabbed(Chain()) is frame
    assert frame.luma.max() > 95
    assert grabbed(Chain(standard=STANDARD_625)).luma.shape == (576, 720)


@pytest.mark.parametrize("module", ["render", "truth"])
def test_the_examples_given_to_users_are_true(module):
    found = doctest.testmod(importlib.import_module(f"patternscore.chain.{module}"))
    assert found.attempted >= 3
    assert found.failed == 0
