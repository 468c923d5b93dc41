"""The curve of the staircase: gamma, and crush told from lift, from gamma and from noise."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import curve_fit

from patternscore.errors import Unreadable
from patternscore.layout import STEPS_IRE
from patternscore.measure.transfer import fit_transfer

NOMINAL = np.array([0.0, *(float(level) for row in STEPS_IRE for level in row), 100.0])
PART = NOMINAL / 100.0


def _fitted(level, sigma=0.05, seed=1):
    noise = np.random.default_rng(seed).normal(0.0, sigma, len(NOMINAL))
    return fit_transfer(NOMINAL, level + noise, np.full(len(NOMINAL), sigma))


def _camera(light):
    # ITU-R BT.709 camera transfer, from memory: 4.5 L below 0.018, 1.099 L^0.45 - 0.099 above.
    return np.where(light < 0.018, 4.5 * light, 1.099 * np.maximum(light, 1e-9) ** 0.45 - 0.099)


def _srgb_to_light(code):
    # IEC 61966-2-1, from memory: code/12.92 up to 0.04045, ((code + 0.055)/1.055)^2.4 above.
    return np.where(code <= 0.04045, code / 12.92, ((code + 0.055) / 1.055) ** 2.4)


def _exponent_by_scipy(level):
    own = (level - level[0]) / (level[-1] - level[0])
    return curve_fit(lambda part, gamma: part**gamma, PART, own, p0=[1.0])[0][0]


def test_the_camera_transfer_reads_as_the_exponent_that_fits_it_best():
    transfer = _fitted(100.0 * _camera(PART))
    assert transfer.gamma == pytest.approx(_exponent_by_scipy(_camera(PART)), abs=0.03)
    assert 0.45 < transfer.gamma < 0.55  # its power is 0.45, lifted by the straight piece near black


def test_the_camera_transfer_is_no_crush_though_it_is_straight_near_black():
    transfer = _fitted(100.0 * _camera(PART))
    assert transfer.crush("black").value == 0.0
    assert transfer.crush("white").value == 100.0


def test_a_reference_display_reads_gamma_2_4():
    # ITU-R BT.1886 reference exponent, from memory: light = signal^2.4 with no black lift.
    assert _fitted(100.0 * PART**2.4).gamma == pytest.approx(2.4, abs=0.03)


def test_the_srgb_curve_reads_about_2_2():
    # Common practice: the sRGB curve is close to a power of 2.2.
    transfer = _fitted(100.0 * _srgb_to_light(PART))
    assert transfer.gamma == pytest.approx(2.2, abs=0.06)
    assert transfer.gamma == pytest.approx(_exponent_by_scipy(_srgb_to_light(PART)), abs=0.03)


@pytest.mark.parametrize("gamma", [0.6, 0.8, 1.0, 1.3, 2.2])
@pytest.mark.parametrize("setup", [0.0, 7.5, -3.0])
def test_lift_and_gamma_are_not_crush(gamma, setup):
    transfer = _fitted(100.0 * PART**gamma * 0.9 + setup)
    assert transfer.gamma == pytest.approx(gamma, abs=0.02)
    assert transfer.crush("black").value == 0.0
    assert transfer.crush("white").value == 100.0


@pytest.mark.parametrize("clip", [3.0, 5.0, 7.0, 9.1, 13.0, 17.5, 22.0])
@pytest.mark.parametrize("gamma", [0.8, 1.0, 1.4])
def test_a_clip_between_two_steps_is_found_where_it_is(clip, gamma):
    level = np.maximum(100.0 * PART**gamma, clip)
    transfer = _fitted(level)
    assert transfer.crush("black").value == pytest.approx(100.0 * (clip / 100.0) ** (1.0 / gamma), abs=0.8)
    assert transfer.gamma == pytest.approx(gamma, abs=0.03)


@pytest.mark.parametrize("clip", [97.0, 95.3, 91.0, 86.0, 80.0])
def test_a_clip_at_white_is_found_where_it_is(clip):
    transfer = _fitted(np.minimum(100.0 * PART**1.2, clip))
    assert transfer.crush("white").value == pytest.approx(100.0 * (clip / 100.0) ** (1.0 / 1.2), abs=0.5)
    assert transfer.crush("black").value == 0.0


def test_both_ends_crushed_are_told_from_low_contrast():
    transfer = _fitted(np.clip(4.0 + 1.1 * NOMINAL, 10.0, 98.0))
    assert transfer.crush("black").value == pytest.approx(6.0 / 1.1, abs=0.5)
    assert transfer.crush("white").value == pytest.approx(94.0 / 1.1, abs=0.5)
    assert transfer.gamma == pytest.approx(1.0, abs=0.03)


@pytest.mark.parametrize("softness", [0.3, 0.6, 1.0])
def test_a_soft_knee_is_found_near_where_its_straight_parts_meet(softness):
    # A rounded clip: c + s ln(1 + exp((x - c)/s)); its straight parts meet at c = 7.
    level = 7.0 + softness * np.logaddexp(0.0, (NOMINAL - 7.0) / softness)
    assert _fitted(level).crush("black").value == pytest.approx(7.0, abs=1.5)


def test_noise_alone_crushes_nothing():
    for seed in range(150):
        transfer = _fitted(NOMINAL.copy(), sigma=0.25, seed=seed)
        assert transfer.crush("black").value == 0.0
        assert transfer.crush("white").value == 100.0


def test_rounding_to_eight_bits_crushes_nothing_and_bends_no_gamma():
    for setup in np.linspace(0.0, 1.0, 21):
        level = np.rint((NOMINAL * 0.9 + setup) * 2.19) / 2.19
        transfer = fit_transfer(NOMINAL, level, np.full(len(NOMINAL), 0.13))
        assert transfer.crush("black").value == 0.0
        assert transfer.gamma == pytest.approx(1.0, abs=0.02)


@pytest.mark.parametrize("clip", [None, 6.0])
def test_sigma_is_the_scatter(clip):
    level = 100.0 * PART**1.2 if clip is None else np.maximum(100.0 * PART**1.2, clip)
    trials = [_fitted(level, sigma=0.15, seed=seed) for seed in range(60)]
    gamma = np.array([transfer.exponent().value for transfer in trials])
    assert 0.5 < trials[0].exponent().sigma / gamma.std(ddof=1) < 2.0
    if clip is not None:
        crush = np.array([transfer.crush("black").value for transfer in trials])
        assert 0.5 < trials[0].crush("black").sigma / crush.std(ddof=1) < 2.0


def test_what_clips_after_a_tilt_does_not_tilt():
    tilt = 1.5 * np.linspace(-1.0, 1.0, len(NOMINAL)) * np.where(np.arange(len(NOMINAL)) % 2, 1.0, -1.0)
    seen = np.maximum(NOMINAL + tilt, 9.0)
    transfer = fit_transfer(NOMINAL, seen - tilt, np.full(len(NOMINAL), 0.05), held_at=seen)
    assert transfer.crush("black").value == pytest.approx(9.0, abs=0.3)


def test_too_few_steps_or_no_contrast_are_said_to_be_so():
    with pytest.raises(Unreadable, match="too few steps"):
        fit_transfer(np.array([0.0, 50.0, 100.0]), np.array([0.0, 50.0, 100.0]), np.full(3, 0.1))
    with pytest.raises(Unreadable, match="no contrast"):
        fit_transfer(NOMINAL, np.full(len(NOMINAL), 20.0), np.full(len(NOMINAL), 0.1))
