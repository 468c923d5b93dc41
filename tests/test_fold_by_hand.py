"""Folds of shapes that the package's chain does not make, scanned by a scanner of its own."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scan_by_hand import read, scan_by_hand, values

from patternscore.standard import STANDARD_525

ACTIVE = STANDARD_525.active_us
Place = Callable[[np.ndarray], np.ndarray]


def _speed(length: float, cut: bool) -> tuple[float, float]:
    """Forward speed, and the place where the scan turns: the content is cut off, or moved up."""
    return (1.0 / ACTIVE, length / ACTIVE) if cut else (1.0 / (ACTIVE - length), 0.0)


def sharp(length: float, ratio: float, cut: bool) -> Place:
    speed, bottom = _speed(length, cut)
    return lambda t: bottom + speed * np.where(t < length, ratio * (length - t), t - length)


def hyperbolic(length: float, ratio: float, cut: bool) -> Place:
    """Speed that passes from backward to forward as a hyperbolic tangent of time."""
    speed, bottom = _speed(length, cut)
    time = np.linspace(-2.0, ACTIVE + 2.0, 300_001)
    zero = np.arctanh((ratio - 1) / (ratio + 1))
    rate = speed * ((1 - ratio) / 2 + (1 + ratio) / 2 * np.tanh(zero + (time - length) / 0.15))
    place = np.concatenate([[0.0], np.cumsum((rate[1:] + rate[:-1]) / 2)]) * (time[1] - time[0])
    place += bottom - np.interp(length, time, place)
    return lambda t: np.interp(t, time, place)


def resonant(length: float, ratio: float, cut: bool) -> Place:
    """Flyback that is a stretch of a sine and passes smoothly into the forward scan."""
    speed, bottom = _speed(length, cut)
    rate = np.pi / 2 / 2.0
    joins = np.arcsin(1 / ratio) / rate

    def place(t: np.ndarray) -> np.ndarray:
        since = t - length
        sine = ratio / rate * (1 - np.cos(rate * np.clip(since, -2.0, joins)))
        back = ratio * np.maximum(-since - 2.0, 0.0)
        return bottom + speed * (sine + back + np.maximum(since - joins, 0.0))

    return place


@pytest.mark.parametrize("cut", [False, True], ids=["picture's edge at the turn", "content cut off"])
@pytest.mark.parametrize(("length", "ratio"), [(0.5, 5.0), (1.2, 3.0), (1.9, 8.0), (2.5, 4.0)])
@pytest.mark.parametrize("shape", [sharp, hyperbolic])
def test_folds_of_other_shapes_are_read(shape: Callable[..., Place], length: float, ratio: float, cut: bool) -> None:
    frame = scan_by_hand(shape(length, ratio, cut), noise_db=42.0, seed=1)
    found = values(read(frame))
    assert found["fold_left"] == pytest.approx(length, abs=0.15)
    assert found["fold_right"] == 0.0


@pytest.mark.parametrize(("length", "ratio"), [(1.5, 5.0), (2.2, 6.5)])
def test_a_resonant_flyback_is_read(length: float, ratio: float) -> None:
    # Source: resonant retrace is a stretch of a sine (circuit textbooks).
    frame = scan_by_hand(resonant(length, ratio, False), noise_db=42.0, seed=2)
    assert values(read(frame))["fold_left"] == pytest.approx(length, abs=0.15)


def test_a_fold_at_the_right_is_the_mirror_of_one_at_the_left() -> None:
    place = sharp(1.4, 4.0, True)
    frame = scan_by_hand(lambda t: 1.0 - place(ACTIVE - t), noise_db=42.0, seed=3)
    found = values(read(frame))
    assert found["fold_right"] == pytest.approx(1.4, abs=0.15)
    assert found["fold_left"] == 0.0


@pytest.mark.parametrize("border", [0.02, 0.05, 0.09])
def test_a_black_border_is_no_fold(border: float) -> None:
    found = values(read(scan_by_hand(lambda t: (t / ACTIVE - border) / (1 - 2 * border))))
    assert found["fold_left"] == 0.0
    assert found["fold_right"] == 0.0


@pytest.mark.parametrize("slow", [0.3, -0.3])
def test_a_scan_that_settles_late_is_a_crush_and_no_fold(slow: float) -> None:
    # A tail of 1.5 us on the scan speed, as an amplifier that recovers from the flyback gives it.
    tail = 1.5

    def place(t: np.ndarray) -> np.ndarray:
        way = t + slow * tail * (np.exp(-np.maximum(t, -1.0) / tail) - 1.0)
        return way / (ACTIVE + slow * tail * (np.exp(-ACTIVE / tail) - 1.0))

    found = values(read(scan_by_hand(place, noise_db=42.0)))
    assert found["fold_left"] == 0.0
    assert found["crush_left"] * slow > 0
