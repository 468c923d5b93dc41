"""Levels group: frames of known levels, by hand and from the chain model."""

from __future__ import annotations

import numpy as np
import pytest
from levels_by_hand import chart_levels, coded, laid, readings, uncoded

from patternscore.chain import Chain, grab, responses, truth
from patternscore.layout import GROUND, chart_plan
from patternscore.locate import locate
from patternscore.measure.levels import read_levels
from patternscore.plan import Patch, Plan, Rect
from patternscore.standard import STANDARD_525, STANDARD_625


def _levels(frame, plan=None):
    return read_levels(frame, laid(frame, plan))


def _of_chain(chain, seed=1):
    frame = grab(chain, seed=seed)
    return readings(read_levels(frame, locate(frame, chart_plan(chain.standard))))


def _noisy(levels, rms, seed=3):
    return levels + np.random.default_rng(seed).normal(0.0, rms, levels.shape)


@pytest.mark.parametrize("full", [False, True])
@pytest.mark.parametrize("bits", [8, 10])
def test_codes_of_black_and_white_read_as_0_and_100(full, bits):
    # ITU-R BT.601: 16 and 235 at 8 bits, 64 and 940 at 10 bits.
    frame = coded(chart_levels(), full=full, bits=bits)
    found = readings(_levels(frame))
    assert found["black_level"].value == pytest.approx(0.0, abs=0.05)
    assert found["white_level"].value == pytest.approx(100.0, abs=0.05)


def test_a_clean_chart_has_nothing_amiss_in_its_levels():
    found = _levels(coded(chart_levels()))
    values = {key: reading.value for key, reading in readings(found).items()}
    assert not found.missing
    assert (values["black_crush"], values["white_crush"], values["steps_lost"]) == (0.0, 100.0, 0.0)
    assert values["gamma"] == pytest.approx(1.0, abs=0.01)
    assert values["clipped_black"] == values["clipped_white"] == 0.0
    assert max(abs(values["tilt_line"]), abs(values["tilt_field"])) < 0.1


def test_setup_lifts_black_and_crushes_nothing():
    # SMPTE ST 170M: 7.5 IRE of setup, the picture squeezed into 92.5 IRE (from memory).
    found = readings(_levels(coded(_noisy(7.5 + 0.925 * chart_levels(), 1.0))))
    assert found["black_level"].value == pytest.approx(7.5, abs=0.2)
    assert found["white_level"].value == pytest.approx(100.0, abs=0.2)
    assert found["black_crush"].value == 0.0
    assert found["steps_lost"].value == 0.0
    assert found["gamma"].value == pytest.approx(1.0, abs=0.03)


# Bars about black for setting a display, 2 % under it, at it and 2 % over it: ITU-R BT.814, from memory.
NEAR_BLACK = (-2.0, 0.0, 2.0, 10.0, 30.0, 50.0, 70.0, 90.0, 100.0)


def _near_black_bars():
    width = 1.0 / len(NEAR_BLACK)
    steps = tuple(
        Patch(f"bar {level}", Rect(width * n, 0.2, width * (n + 1), 0.8), level) for n, level in enumerate(NEAR_BLACK)
    )
    edges = np.minimum((np.arange(720) + 0.5) / 720.0 / width, len(NEAR_BLACK) - 1).astype(int)
    return Plan("near black", "525", steps=steps), np.tile(np.array(NEAR_BLACK)[edges], (480, 1))


def test_the_bars_about_black_are_all_told_apart_when_black_is_right():
    plan, bars = _near_black_bars()
    found = readings(_levels(coded(_noisy(bars, 1.0)), plan))
    assert found["steps_lost"].value == 0.0
    assert found["black_level"].value == pytest.approx(-2.0, abs=0.3)


def test_the_bar_under_black_is_lost_in_black_when_the_chain_clips_there():
    plan, bars = _near_black_bars()
    found = readings(_levels(coded(_noisy(np.maximum(bars, 0.0), 1.0)), plan))
    assert found["steps_lost"].value == 2.0
    assert found["black_crush"].value == 0.0


@pytest.mark.parametrize(("clip", "lost"), [(5.0, 3), (7.0, 4), (2.9, 2)])
def test_steps_under_a_clip_are_counted_as_lost(clip, lost):
    found = readings(_levels(coded(_noisy(np.maximum(chart_levels(), clip), 0.5))))
    assert found["steps_lost"].value == lost
    assert found["black_crush"].value == pytest.approx(clip, abs=0.4)


@pytest.mark.parametrize("noise_db", [None, 40.0, 30.0])
@pytest.mark.parametrize(
    "changes",
    [
        {"black_clip": 5.0, "gamma": 1.3},
        {"setup": -6.0, "black_clip": 0.0},
        {"white_clip": 93.0, "gain": 1.05},
        {"gamma": 2.0, "gain": 0.9, "setup": 5.0},
        {"gamma": 0.7},
    ],
    ids=lambda changes: " ".join(changes),
)
def test_levels_of_a_chain_are_read_as_set(changes, noise_db):
    chain = Chain(noise_db=noise_db, **changes)
    found, known = _of_chain(chain), truth(chain)
    for key, within in (("black_level", 0.5), ("white_level", 0.5), ("black_crush", 1.5), ("white_crush", 1.5)):
        assert found[key].value == pytest.approx(known[key], abs=within), key
    assert found["gamma"].value == pytest.approx(known["gamma"], abs=0.03)


@pytest.mark.parametrize("standard", [STANDARD_525, STANDARD_625], ids=lambda standard: standard.name)
@pytest.mark.parametrize(
    "response", [responses.gaussian(1.0), responses.first_order(1.0), responses.second_order(1.5, 0.3)]
)
def test_a_soft_or_ringing_response_does_not_move_levels(standard, response):
    chain = Chain(standard=standard, response=(response,), noise_db=40.0, black_clip=6.0)
    found = _of_chain(chain)
    assert found["black_level"].value == pytest.approx(6.0, abs=0.5)
    assert found["white_level"].value == pytest.approx(100.0, abs=0.5)
    assert found["black_crush"].value == pytest.approx(6.0, abs=1.5)
    assert found["gamma"].value == pytest.approx(1.0, abs=0.03)


@pytest.mark.parametrize("hum", [0.0, 2.5])
@pytest.mark.parametrize("standard", [STANDARD_525, STANDARD_625], ids=lambda standard: standard.name)
def test_tilt_is_read_and_moves_no_level_even_beside_hum(standard, hum):
    chain = Chain(standard=standard, noise_db=40.0, tilt_line=4.0, tilt_field=-3.0, hum_percent=hum, gamma=1.2)
    found = _of_chain(chain)
    assert found["tilt_line"].value == pytest.approx(4.0, abs=0.2)
    assert found["tilt_field"].value == pytest.approx(-3.0, abs=0.2 if hum == 0.0 else 0.9)
    assert found["black_level"].value == pytest.approx(0.0, abs=0.5)
    assert found["white_level"].value == pytest.approx(100.0, abs=0.5)
    assert found["gamma"].value == pytest.approx(1.2, abs=0.03)
    assert found["black_crush"].value == 0.0


def test_slopes_agree_with_a_plane_laid_through_the_ground_by_numpy():
    levels = chart_levels()
    rows, columns = np.mgrid[:480, :720]
    ground = np.abs(levels - GROUND) < 1e-3
    tilted = _noisy(levels + 3.0 * (columns / 720 - 0.5) - 2.0 * (rows / 480 - 0.5), 1.0)
    inside = ground & (columns > 60) & (columns < 660) & (rows > 60) & (rows < 420)
    design = np.stack([np.ones(inside.sum()), columns[inside] / 720, rows[inside] / 480], 1)
    plane = np.linalg.lstsq(design, tilted[inside], rcond=None)[0]
    found = readings(_levels(uncoded(tilted)))
    # The active line is 710.9 of 720 samples (BT.601 with 52.66 us), so a slope over it is that much less.
    assert found["tilt_line"].value == pytest.approx(plane[1] * 710.9 / 720, abs=0.15)
    assert found["tilt_field"].value == pytest.approx(plane[2], abs=0.15)


def test_samples_beyond_the_coding_range_are_counted():
    levels = 1.25 * chart_levels() - 12.0
    inside = np.s_[2:-2, 2:-2]
    beyond = 100.0 * float((levels[inside] > 100.0 * 239.0 / 219.0).mean())
    below = 100.0 * float((levels[inside] < -100.0 * 16.0 / 219.0).mean())
    assert min(beyond, below) > 0.5
    found = readings(_levels(coded(levels)))
    assert found["clipped_white"].value == pytest.approx(beyond, abs=0.15)
    assert found["clipped_black"].value == pytest.approx(below, abs=0.15)


def test_black_at_the_lowest_code_of_a_full_range_frame_is_not_clipping():
    found = readings(_levels(coded(chart_levels(), full=True)))
    assert found["clipped_black"].value == 0.0
    assert found["clipped_white"].value == 0.0


def test_steps_pushed_under_the_lowest_code_are_clipping():
    found = readings(_levels(coded(chart_levels() - 5.0, full=True)))
    assert found["clipped_black"].value > 0.5
    assert found["black_crush"].value == pytest.approx(5.0, abs=0.5)


def test_a_converter_that_holds_levels_at_black_and_white_is_noticed_in_noise():
    noisy = _noisy(chart_levels(), 1.5)
    held = readings(_levels(coded(np.clip(noisy, 0.0, 100.0))))
    free = readings(_levels(coded(noisy)))
    # Of the samples whose level is black (white), noise carries half beyond it.
    share = 50.0 * float((chart_levels() == 0.0).mean())
    assert held["clipped_black"].value == pytest.approx(share, rel=0.35)
    assert held["clipped_white"].value > 0.1
    assert free["clipped_black"].value < 0.02
    assert free["clipped_white"].value < 0.02
    assert held["black_level"].value == pytest.approx(0.0, abs=0.3)
    assert held["white_level"].value == pytest.approx(100.0, abs=0.3)


def test_sigma_of_levels_is_their_scatter():
    chain = Chain(noise_db=34.0, black_clip=5.0, gamma=1.2)
    trials = [_of_chain(chain, seed) for seed in range(24)]
    for key in ("black_level", "white_level", "black_crush", "gamma", "tilt_line", "tilt_field"):
        values = np.array([trial[key].value for trial in trials])
        sigma = float(np.mean([trial[key].sigma for trial in trials]))
        assert 0.5 < sigma / values.std(ddof=1) < 2.0, key


def test_a_pattern_without_steps_says_so():
    frame = coded(chart_levels())
    found = _levels(frame, Plan("bare", "525"))
    assert "no staircase" in found.missing["gamma"]
    assert "no flat patches" in found.missing["black_level"]
    assert "too little plain ground" in found.missing["tilt_line"]
    assert {reading.key for reading in found.readings} == {"clipped_black", "clipped_white"}


def test_a_frame_of_one_level_gives_no_gamma():
    found = _levels(coded(np.full((480, 720), 30.0)))
    assert "no contrast" in found.missing["gamma"]
    assert "black_crush" in found.missing
