"""The stages of the chain against facts of linear systems."""

import math

import numpy as np
import pytest
from scipy import signal

from patternscore.chain import Chain, responses, truth
from patternscore.chain.curves import delay_us, step_response
from patternscore.errors import UsageError

FREQUENCY = np.linspace(0.0, 12.0, 241)
BARE = Chain(band_limit=None)  # no grabber filter: the stages alone


def known_of(*stages):
    return truth(BARE.changed(response=stages))


@pytest.mark.parametrize("corner", [0.8, 2.0, 4.0])
def test_first_order_rise_time_is_ln_9_over_2_pi_fc(corner):
    # Source: textbooks; the 10 % and 90 % points of 1 - exp(-2 pi fc t).
    known = known_of(responses.first_order(corner))
    assert known["rise_time"] == pytest.approx(1e3 * math.log(9) / (2 * math.pi * corner), rel=2e-3)
    assert known["bandwidth_h"] == pytest.approx(corner, rel=3e-3)  # 10^(-3/20) is not quite 1/sqrt(2)
    assert known["mtf50_h"] == pytest.approx(corner * math.sqrt(3), rel=1e-4)
    assert known["overshoot"] < 0.01


@pytest.mark.parametrize(
    ("damping", "overshoot"), [(0.3, 37.2), (0.4, 25.4), (0.5, 16.3), (0.6, 9.48), (0.7, 4.60), (0.8, 1.52)]
)
def test_second_order_overshoot_follows_damping(damping, overshoot):
    # Source: exp(-pi z / sqrt(1 - z^2)), control textbooks.
    assert known_of(responses.second_order(2.5, damping))["overshoot"] == pytest.approx(overshoot, abs=0.05)


def test_second_order_rings_at_its_damped_frequency():
    # Source: fn sqrt(1 - z^2), control textbooks.
    assert known_of(responses.second_order(2.5, 0.3))["ringing"] == pytest.approx(2.5 * math.sqrt(1 - 0.09))
    times, levels = step_response(responses.second_order(2.5, 0.3))
    top, bottom = times[np.argmax(levels)], times[np.argmin(np.where(times > 0.15, levels, 2.0))]
    assert bottom - top == pytest.approx(0.5 / (2.5 * math.sqrt(1 - 0.09)), abs=0.003)  # half a period


@pytest.mark.parametrize("limit", [1.5, 3.0, 4.2])
def test_brick_wall_overshoots_by_the_gibbs_constant_on_both_sides(limit):
    # Source: Wilbraham-Gibbs constant, mathematical handbooks: 8.949 % of the step.
    known = known_of(responses.brick_wall(limit))
    assert known["overshoot"] == pytest.approx(8.949, abs=0.1)
    assert known["preshoot"] == pytest.approx(8.949, abs=0.1)


@pytest.mark.parametrize("sigma_us", [0.05, 0.1, 0.2])
def test_gaussian_spot_has_its_known_mtf_and_rise_time(sigma_us):
    # Source: textbooks; MTF50 = 0.1874/s, rise 10-90 % = 2.563 s.
    known = truth(BARE.changed(spot_us=sigma_us))
    assert known["mtf50_h"] == pytest.approx(0.1874 / sigma_us, rel=1e-3)
    assert known["rise_time"] == pytest.approx(2563 * sigma_us, rel=1e-3)


def test_gaussian_filter_passes_half_at_its_frequency():
    assert known_of(responses.gaussian(2.2))["mtf50_h"] == pytest.approx(2.2, rel=1e-4)


def test_rise_times_of_gaussian_stages_add_as_squares():
    # Source: textbooks, root of the sum of squares.
    first, second = (known_of(responses.gaussian(mhz))["rise_time"] for mhz in (2.0, 3.0))
    both = known_of(responses.gaussian(2.0), responses.gaussian(3.0))["rise_time"]
    assert both == pytest.approx(math.hypot(first, second), rel=1e-3)


def test_aperture_is_the_moving_average_of_its_width():
    # Source: textbooks, |sin(pi f w) / (pi f w)|; here against the mean of a wave over the aperture.
    width = 0.23
    inside = np.linspace(-width / 2, width / 2, 20_001)
    averaged = [np.trapezoid(np.cos(2 * np.pi * f * inside), inside) / width for f in FREQUENCY]
    np.testing.assert_allclose(responses.aperture(width)(FREQUENCY).real, averaged, atol=1e-6)


def test_lead_network_is_the_divider_it_is_built_as():
    # Source: circuit textbooks; R1 bypassed by C, into R2. Low-frequency gain R2/(R1 + R2) is taken out.
    r1, r2, farad = 4700.0, 1200.0, 18e-12
    omega = 2e6 * np.pi * FREQUENCY
    upper = r1 / (1 + 1j * omega * r1 * farad)
    divider = r2 / (r2 + upper)
    network = responses.lead(1e-6 / (2 * np.pi * r1 * farad), 1e-6 / (2 * np.pi * (r1 * r2 / (r1 + r2)) * farad))
    np.testing.assert_allclose(network(FREQUENCY), divider * (r1 + r2) / r2, rtol=1e-9)


@pytest.mark.parametrize("design", ["butter", "bessel"])
@pytest.mark.parametrize("order", [2, 5])
def test_poles_and_zeros_of_the_reference_library_give_its_response(design, order):
    # Source: scipy.signal.butter / bessel and freqs.
    corner = 2 * np.pi * 3.0
    make = getattr(signal, design)
    b, a = make(order, corner, analog=True)
    expected = signal.freqs(b, a, 2 * np.pi * FREQUENCY)[1]
    stage = responses.zpk(*make(order, corner, analog=True, output="zpk"))
    np.testing.assert_allclose(stage(FREQUENCY), expected, atol=1e-9)


@pytest.mark.parametrize("design", ["butter", "bessel"])
def test_step_response_agrees_with_the_reference_library(design):
    # Source: scipy.signal.step.
    zpk = getattr(signal, design)(3, 2 * np.pi * 2.0, analog=True, output="zpk")
    times, levels = step_response(responses.zpk(*zpk))
    grid, expected = signal.step(signal.ZerosPolesGain(*zpk), T=np.linspace(0.0, 2.0, 401))
    np.testing.assert_allclose(np.interp(grid, times, levels), expected, atol=1e-3)


def test_delay_shifts_an_edge_by_its_time():
    soft = responses.gaussian(3.0)
    late = responses.cascade((soft, responses.delay(0.25)))
    assert delay_us(late) - delay_us(soft) == pytest.approx(0.25, abs=1e-4)


@pytest.mark.parametrize(
    "stage",
    [
        responses.first_order(2.0),
        responses.lead(1.0, 4.0),
        responses.second_order(3.0, 0.4),
        responses.gaussian(2.0),
        responses.gaussian_spot(0.1),
        responses.aperture(0.1),
        responses.brick_wall(3.0),
        responses.raised_cosine(3.0, 5.0),
        responses.delay(0.1),
        responses.zpk([-3.0], np.array([-2.0 + 1j, -2.0 - 1j])),
        responses.cascade((responses.first_order(1.0),)),
    ],
)
def test_every_stage_passes_low_frequencies_unchanged_and_can_be_compared(stage):
    assert abs(complex(stage(np.zeros(1))[0]) - 1.0) < 1e-12
    assert hash(Chain(response=(stage,))) == hash(Chain(response=[stage]))


def test_a_zero_at_zero_frequency_is_refused():
    with pytest.raises(UsageError, match="zeros at 0"):
        responses.zpk([0.0], [-1.0])
