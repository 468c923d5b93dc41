"""Noise and hum of one frame; bounce and wander between frames."""

from __future__ import annotations

import numpy as np
import pytest
from levels_by_hand import chart_levels, coded, laid, readings, uncoded
from scipy.signal import convolve2d

from patternscore.averaging import average
from patternscore.chain import Chain, grab, responses
from patternscore.layout import GROUND, chart_plan
from patternscore.locate import locate
from patternscore.measure.ground import line_seconds
from patternscore.measure.stability import read_between, read_stability
from patternscore.plan import Plan
from patternscore.standard import STANDARD_525, STANDARD_625


def _of_chain(chain, seed=1):
    frame = grab(chain, seed=seed)
    return readings(read_stability(frame, locate(frame, chart_plan(chain.standard))))


def _by_hand(frame, plan=None):
    return readings(read_stability(frame, laid(frame, plan)))


def _noise(rms, seed=2, shape=(480, 720)):
    return np.random.default_rng(seed).normal(0.0, rms, shape)


def test_one_percent_of_white_is_40_db():
    # Definition: 20 log10(100 / 1).
    assert _by_hand(uncoded(chart_levels() + _noise(1.0)))["noise"].value == pytest.approx(40.0, abs=0.2)


@pytest.mark.parametrize("decibels", [20.0, 25.0, 30.0, 34.0, 40.0, 45.0, 50.0, 52.5, 55.0])
@pytest.mark.parametrize("offset", [0.0, 0.11, 0.23])
def test_noise_is_read_through_eight_bit_coding(decibels, offset):
    rms = 100.0 * 10.0 ** (-decibels / 20.0)
    frame = coded(chart_levels() + offset + _noise(rms))
    assert _by_hand(frame)["noise"].value == pytest.approx(decibels, abs=0.5)


def test_a_frame_with_no_noise_reads_the_noise_of_its_coding():
    # 219 steps from black to white: 1/(219 sqrt 12) of white, 57.6 dB (derived from BT.601).
    assert _by_hand(coded(chart_levels()))["noise"].value == pytest.approx(57.6, abs=0.05)


def test_noise_agrees_with_an_estimate_by_a_mask_that_no_slope_passes():
    # J. Immerkaer, "Fast noise variance estimation", Computer Vision and Image Understanding 64 (1996): the mean
    # size of the picture under this mask is 6 sqrt(2 / pi) times the rms of white noise (from memory).
    mask = np.outer([1.0, -2.0, 1.0], [1.0, -2.0, 1.0])
    noisy = uncoded(chart_levels() + _noise(2.0))
    flat = noisy.luma[int(2.25 * 40) : int(2.75 * 40), int(5.4 * 45) : int(6.8 * 45)]  # the black patch
    rms = float(np.abs(convolve2d(flat, mask, mode="valid")).mean()) * np.sqrt(np.pi / 2.0) / 6.0
    assert _by_hand(noisy)["noise"].value == pytest.approx(20.0 * np.log10(100.0 / rms), abs=0.8)


@pytest.mark.parametrize(
    "changes",
    [
        {"response": (responses.second_order(1.5, 0.3),)},
        {"response": (responses.gaussian(1.0),)},
        {"hum_percent": 3.0},
        {"tilt_line": 6.0, "tilt_field": -6.0},
        {"jitter_ns": 50.0},
        {"field_level_offset": 2.0, "field_offset_lines": 0.4},
        {"rotation": 3.0},
        {"black_clip": 6.0},
        {"standard": STANDARD_625, "gamma": 1.4},
    ],
    ids=lambda changes: " ".join(changes),
)
def test_noise_is_not_mistaken_for_picture(changes):
    assert _of_chain(Chain(noise_db=44.0, **changes))["noise"].value == pytest.approx(44.0, abs=0.6)


def test_sigma_of_noise_and_hum_is_their_scatter():
    trials = [_of_chain(Chain(noise_db=34.0, hum_percent=1.0), seed) for seed in range(24)]
    for key in ("noise", "hum"):
        values = np.array([trial[key].value for trial in trials])
        sigma = float(np.mean([trial[key].sigma for trial in trials]))
        assert 0.5 < sigma / values.std(ddof=1) < 2.0, key


@pytest.mark.parametrize("standard", [STANDARD_525, STANDARD_625], ids=lambda standard: standard.name)
@pytest.mark.parametrize("mains", [50.0, 60.0])
@pytest.mark.parametrize("phase", [0.3, 2.4])
def test_hum_is_read_at_either_mains_beside_a_tilt(standard, mains, phase):
    chain = Chain(standard=standard, hum_percent=2.0, hum_hz=mains, hum_phase=phase, tilt_field=2.0, noise_db=40.0)
    assert _of_chain(chain)["hum"].value == pytest.approx(2.0, abs=0.2)


def test_hum_at_twice_mains_is_read():
    assert _of_chain(Chain(hum_percent=1.5, hum_hz=120.0, noise_db=40.0))["hum"].value == pytest.approx(1.5, abs=0.15)


def test_hum_agrees_with_a_sinusoid_fitted_to_line_means_by_numpy():
    levels = chart_levels()
    ground = np.abs(levels - GROUND) < 1e-3
    seconds = line_seconds(uncoded(levels), np.arange(480))
    hummed = levels + _noise(1.0) + 1.7 * np.sin(2.0 * np.pi * 60.0 * seconds + 1.0)[:, None]
    count = ground.sum(1)
    rows = np.nonzero(count > 20)[0]
    means = (hummed * ground).sum(1)[rows] / count[rows]
    turn = 2.0 * np.pi * 60.0 * seconds[rows]
    design = np.stack([np.ones(len(rows)), np.sin(turn), np.cos(turn)], 1)
    root = np.sqrt(count[rows])[:, None]
    fitted = np.linalg.lstsq(design * root, means * root[:, 0], rcond=None)[0]
    assert _by_hand(uncoded(hummed))["hum"].value == pytest.approx(float(np.hypot(*fitted[1:])), abs=0.1)


def test_lines_of_the_fields_are_scanned_half_a_frame_apart():
    # 525: the line that is scanned first lies in the lower field; a field lasts 16.683 ms (SMPTE ST 170M).
    seconds = line_seconds(uncoded(chart_levels()), np.arange(4))
    assert seconds[1] == pytest.approx(0.0)
    assert seconds[0] == pytest.approx(16.683e-3, abs=1e-6)
    assert seconds[3] - seconds[1] == pytest.approx(63.556e-6, abs=1e-9)


@pytest.mark.parametrize("changes", [{}, {"field_level_offset": 1.5}, {"tilt_field": 4.0}, {"noise_db": None}])
def test_no_hum_is_seen_where_there_is_none(changes):
    assert _of_chain(Chain(**{"noise_db": 40.0, **changes}))["hum"].value < 0.15


def test_a_pattern_without_flat_areas_says_so():
    frame = coded(chart_levels())
    found = read_stability(frame, laid(frame, Plan("bare", "525")))
    assert "flat patch" in found.missing["noise"]
    assert "ground" in found.missing["hum"]
    assert "crosshatch" in found.missing["jitter"]


def _grabs(chain, count=6, first=0):
    return [grab(chain, seed=first + number) for number in range(count)]


def _between(frames):
    return read_between(frames, laid(average(frames)))


def test_one_frame_tells_nothing_about_what_changes():
    found = _between(_grabs(Chain(), 1))
    assert found.missing == dict.fromkeys(("bounce", "wander"), "needs several frames of one picture")


@pytest.mark.parametrize("noise_db", [None, 40.0, 30.0])
def test_steady_frames_neither_bounce_nor_wander(noise_db):
    found = readings(_between(_grabs(Chain(noise_db=noise_db, jitter_ns=10.0))))
    assert found["bounce"].value < 0.06
    assert found["wander"].value < 1.5


@pytest.mark.parametrize("share", [0.2, 1.0])
@pytest.mark.parametrize("noise_db", [None, 34.0])
def test_wander_is_the_spread_of_the_shifts_made(share, noise_db):
    picture = grab(Chain(bits=None), seed=0)
    shifts = share * np.array([0.0, 0.7, -0.4, 1.1, -0.2])  # samples
    turn = -2j * np.pi * np.fft.rfftfreq(720)
    spectrum = np.fft.rfft(picture.luma.astype(np.float64), axis=1)
    frames = []
    for number, shift in enumerate(shifts):
        moved = np.fft.irfft(spectrum * np.exp(turn * shift), 720, axis=1)
        rms = 0.0 if noise_db is None else 100.0 * 10.0 ** (-noise_db / 20.0)
        frames.append(coded(moved + _noise(rms, seed=number)))
    found = readings(_between(frames))
    assert found["wander"].value == pytest.approx(np.std(shifts, ddof=1) * 1e3 / 13.5, rel=0.02)
    assert found["bounce"].value < 0.15


@pytest.mark.parametrize("noise_db", [None, 34.0])
def test_bounce_is_the_spread_of_the_gains_made(noise_db):
    gains = np.array([1.0, 0.99, 1.015, 0.985, 1.0])
    rms = 0.0 if noise_db is None else 100.0 * 10.0 ** (-noise_db / 20.0)
    frames = [coded(gain * chart_levels() + _noise(rms, seed=number)) for number, gain in enumerate(gains)]
    found = readings(_between(frames))
    assert found["bounce"].value == pytest.approx(100.0 * np.std(gains, ddof=1), abs=0.1)
    assert found["wander"].value < 0.5


@pytest.mark.parametrize("swing", [2.0, 20.0])
def test_a_bar_that_flashes_is_bounce(swing):
    frames = []
    for number in range(6):
        levels = chart_levels() + _noise(1.0, seed=number)
        levels[270:330, 330:400] += swing * (number % 2)
        frames.append(coded(levels))
    expected = swing * np.std([0, 1, 0, 1, 0, 1], ddof=1)
    assert readings(_between(frames))["bounce"].value == pytest.approx(expected, rel=0.05)


def test_sigma_of_bounce_and_wander_is_their_scatter():
    chain = Chain(noise_db=40.0, wander_ns=20.0, bounce_percent=1.0)
    trials = [readings(_between(_grabs(chain, 5, 100 * trial))) for trial in range(14)]
    for key, made in (("bounce", 1.0), ("wander", 20.0)):
        values = np.array([trial[key].value for trial in trials])
        assert np.sqrt(np.mean(values**2)) == pytest.approx(made, rel=0.35)
        sigma = float(np.mean([trial[key].sigma for trial in trials]))
        assert 0.5 < sigma / values.std(ddof=1) < 2.0, key
