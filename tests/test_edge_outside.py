"""The resolution group held against facts from outside the package."""

from __future__ import annotations

import numpy as np
import pytest
from edge_frames import edge_frame, edge_located, response_of
from scipy import ndimage, signal

from patternscore.measure.edge import read_edges
from patternscore.reading import Findings, Reading


def readings(response, **frame) -> dict[str, Reading]:
    return {reading.key: reading for reading in found(response, **frame).readings}


def found(response, **frame) -> Findings:
    made = edge_frame(response, **frame)
    return read_edges(made, edge_located(made))


def analogue(zeros, poles, gain):
    """Step response of scipy.signal for poles and zeros in rad/us, nothing before the step."""
    system = signal.ZerosPolesGain(zeros, poles, gain)
    times = np.linspace(0.0, 12.0, 24_001)
    levels = signal.step(system, T=times)[1]
    levels = levels / (gain * np.real(np.prod(-np.asarray(zeros)) / np.prod(-np.asarray(poles))))
    return lambda t: np.where(t > 0, np.interp(t, times, levels), 0.0)


@pytest.mark.parametrize("corner", [1.0, 2.0, 2.8])
def test_rise_time_of_a_first_order_chain(corner):
    # Source: ln 9 / (2 pi fc) = 0.3497 / fc, textbooks.
    seen = readings(lambda t: np.where(t > 0, -np.expm1(-2 * np.pi * corner * np.maximum(t, 0)), 0.0))
    assert seen["rise_time"].value == pytest.approx(349.7 / corner, rel=0.03)
    assert seen["bandwidth_h"].value == pytest.approx(corner, rel=0.02)
    # |H| = 1/2 where f = sqrt(3) fc: textbooks.
    assert seen["mtf50_h"].value == pytest.approx(np.sqrt(3.0) * corner, rel=0.01)


@pytest.mark.parametrize(("damping", "overshoot"), [(0.3, 37.2), (0.4, 25.4), (0.5, 16.3), (0.6, 9.48), (0.7, 4.60)])
def test_overshoot_and_ringing_of_a_second_order_chain(damping, overshoot):
    # Source: overshoot exp(-pi z / sqrt(1 - z^2)), ringing at fn sqrt(1 - z^2): control textbooks.
    natural = 2 * np.pi * 2.5
    pole = natural * complex(-damping, np.sqrt(1 - damping**2))
    seen = readings(analogue([], [pole, pole.conjugate()], natural**2))
    assert seen["overshoot"].value == pytest.approx(overshoot, abs=1.0)
    assert seen["preshoot"].value == pytest.approx(0.0, abs=1.0)
    if damping < 0.6:
        assert seen["ringing"].value == pytest.approx(2.5 * np.sqrt(1 - damping**2), rel=0.03)


@pytest.mark.parametrize("limit", [2.5, 3.0, 4.0])
def test_gibbs_overshoot_of_a_brick_wall(limit):
    # Source: Wilbraham-Gibbs constant, 8.949 % of the step: mathematical handbooks.
    from scipy.special import sici

    seen = readings(lambda t: 0.5 + sici(2 * np.pi * limit * t)[0] / np.pi)
    assert seen["overshoot"].value == pytest.approx(8.949, abs=0.7)
    assert seen["preshoot"].value == pytest.approx(8.949, abs=0.7)
    assert seen["mtf50_h"].value == pytest.approx(limit, rel=0.01)


@pytest.mark.parametrize("order", [2, 4, 6])
def test_butterworth_responses_are_read_back_at_whole_megahertz(order):
    zeros, poles, gain = signal.butter(order, 2 * np.pi * 3.0, analog=True, output="zpk")
    check_against_freqs(zeros, poles, gain)


@pytest.mark.parametrize("order", [3, 5])
def test_bessel_responses_are_read_back_at_whole_megahertz(order):
    zeros, poles, gain = signal.bessel(order, 2 * np.pi * 3.0, analog=True, output="zpk", norm="mag")
    check_against_freqs(zeros, poles, gain)


def check_against_freqs(zeros, poles, gain):
    # Source: scipy.signal, whose step response makes the frame and whose freqs_zpk gives the answer.
    seen = readings(analogue(zeros, poles, gain))
    for mhz in (1, 2, 3, 4, 5):
        expected = 20 * np.log10(abs(signal.freqs_zpk(zeros, poles, gain, [2 * np.pi * mhz])[1][0]))
        if expected > -15.0:
            assert seen[f"response_{mhz}mhz"].value == pytest.approx(expected, abs=0.3), mhz
    assert seen["bandwidth_h"].value == pytest.approx(3.0, rel=0.02)


@pytest.mark.parametrize("sigma", [1.2, 2.0])
def test_a_gaussian_blur_is_read_back_as_its_transfer_function(sigma):
    # Source: scipy.ndimage blurs; MTF exp(-2 (pi f s)^2), so MTF50 = 0.1874 / s and rise 2.563 s: textbooks.
    fine = 50
    steps = np.repeat([0.0, 1.0], 40 * fine)
    blurred = ndimage.gaussian_filter1d(steps, sigma * fine, mode="nearest")
    times = (np.arange(steps.size) - steps.size / 2 + 0.5) / fine / 13.5
    seen = readings(lambda t: np.interp(t, times, blurred))
    assert seen["mtf50_h"].value == pytest.approx(13.5 * 0.18739 / sigma, rel=0.01)
    assert seen["mtf10_h"].value == pytest.approx(13.5 * 0.34155 / sigma, rel=0.02)
    assert seen["rise_time"].value == pytest.approx(1e3 * 2.563 * sigma / 13.5, rel=0.03)


@pytest.mark.parametrize("width", [0.16, 0.3])
def test_an_aperture_is_read_back_as_its_sinc(width):
    # Source: |sin(pi f w) / (pi f w)| is 1/2 at f w = 0.6034: textbooks.
    seen = readings(lambda t: np.clip(0.5 + t / width, 0.0, 1.0))
    assert seen["mtf50_h"].value == pytest.approx(0.6034 / width, rel=0.01)
    assert seen["rise_time"].value == pytest.approx(800.0 * width, rel=0.03)


def test_rise_of_a_step_made_by_a_sine_squared_pulse():
    # Source: 10-90 % rise 0.964 T of the integrated sine-squared pulse of half-amplitude duration T
    # (broadcast measurement handbook, PAL); here T = 100 ns.
    duration = 0.1

    def response(t):
        u = np.clip(t / (2 * duration), -0.5, 0.5)
        return 0.5 + u + np.sin(2 * np.pi * u) / (2 * np.pi)

    assert readings(response)["rise_time"].value == pytest.approx(96.4, rel=0.03)


def test_cascaded_rise_times_add_as_squares():
    # Source: root of the sum of squares for Gaussian-like stages: textbooks.
    alone = [readings(response_of(gaussian(mhz)))["rise_time"].value for mhz in (2.5, 3.5)]
    both = readings(response_of(lambda f: gaussian(2.5)(f) * gaussian(3.5)(f)))["rise_time"].value
    assert both == pytest.approx(np.hypot(*alone), rel=0.02)


def gaussian(mhz_at_half):
    return lambda f: np.exp2(-((f / mhz_at_half) ** 2)) + 0j


@pytest.mark.parametrize("mhz_at_half", [1.5, 4.0])
def test_tv_lines_follow_from_megahertz(mhz_at_half):
    # Source: 2 f T_active / (4/3) with 52.66 us: 79 lines a MHz, 'about 80' common practice.
    seen = readings(response_of(gaussian(mhz_at_half)))
    assert seen["mtf50_h_tvl"].value == pytest.approx(79.0 * mhz_at_half, rel=0.011)
