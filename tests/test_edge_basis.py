"""The step basis and the fit's own parts against closed forms."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import erf

from patternscore.measure.family import transfer
from patternscore.measure.stepbasis import BINS, edge_of, step_basis


def times(edge):
    return (np.arange(len(edge)) - len(edge) // 2) / BINS


@pytest.mark.parametrize("sigma", [0.6, 1.5, 4.0])
def test_the_basis_gives_the_step_of_a_gaussian(sigma):
    # Source: the step response of a Gaussian is its error function: textbooks.
    edge = edge_of(np.exp(-2 * (np.pi * step_basis().nu * sigma) ** 2) + 0j, 40)
    # Straight lines between its frequencies cost it 1 part in 10 000, a fiftieth of one 8-bit code of the chart's step.
    assert edge == pytest.approx(erf(times(edge) / sigma / np.sqrt(2)) / 2, abs=2e-4)


@pytest.mark.parametrize("corner", [0.05, 0.2])
def test_the_basis_gives_the_step_of_one_pole_at_any_time_but_its_kink(corner):
    # Source: 1 - exp(-2 pi fc t): textbooks.
    edge = edge_of(1 / (1 + 1j * step_basis().nu / corner), 60)
    t = times(edge)
    expected = np.where(t > 0, -np.expm1(-2 * np.pi * corner * np.maximum(t, 0)), 0.0) - 0.5
    apart = np.abs(t) > 0.3
    assert edge[apart] == pytest.approx(expected[apart], abs=1e-3)


def test_the_basis_gives_the_gibbs_ripple():
    # Source: sine integral of a brick wall, largest at 1.08949 of the step: mathematical handbooks.
    nu = step_basis().nu
    fall = np.interp(nu, [0.0, 0.1499, 0.1501, 20.0], [1.0, 1.0, 0.0, 0.0])
    edge = edge_of(fall + 0j, 40)
    assert edge.max() + 0.5 == pytest.approx(1.08949, abs=2e-3)


@pytest.mark.parametrize("scale", [0.1, 0.3])
def test_slopes_of_the_family_are_its_differences(scale):
    theta = np.array([0.2, 0.8, 0.6, 0.4, 0.3, 0.4, 0.1, 0.3])
    nu = step_basis().nu[:180]
    slopes = transfer(theta, scale, nu)[1]
    for k in range(len(theta)):
        step = np.zeros_like(theta)
        step[k] = 1e-6
        difference = (transfer(theta + step, scale, nu)[0] - transfer(theta - step, scale, nu)[0]) / 2e-6
        assert slopes[k] == pytest.approx(difference, abs=1e-5), k
