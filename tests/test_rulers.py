"""Orientable sequences, and the rulers that the chart makes of them."""

from __future__ import annotations

import itertools

import numpy as np
import pytest

from patternscore.chart import render
from patternscore.layout import H_BARS, H_ORDER, V_BARS, V_ORDER, chart_plan
from patternscore.plan import Ruler
from patternscore.rulers import LONGEST_RUN, is_orientable, most_windows, orientable_sequence
from patternscore.standard import STANDARD_525, STANDARD_625

ORDERS = {"top": H_ORDER, "bottom": H_ORDER, "left": V_ORDER, "right": V_ORDER}


def _windows(bits: tuple[bool, ...] | tuple[int, ...], order: int) -> list[str]:
    word = "".join("01"[int(bit)] for bit in bits)
    return [word[start : start + order] for start in range(len(word) - order + 1)]


@pytest.mark.parametrize(("length", "order"), [(H_BARS, H_ORDER), (V_BARS, V_ORDER), (62, 8), (76, 9), (30, 7)])
def test_no_window_of_a_sequence_is_seen_twice_in_either_direction(length, order):
    # Definition: Dai, Martin, Robshaw and Wild, "Orientable sequences", Cryptography and Coding III, 1993.
    forward = _windows(orientable_sequence(length, order), order)
    backward = [window[::-1] for window in forward]
    assert len(forward) == length - order + 1
    assert len(set(forward)) == len(forward)
    assert not set(forward) & set(backward)


# Source: Gabric and Sawada, bound on the period of an orientable sequence of order n.
@pytest.mark.parametrize(("order", "bound"), [(6, 28), (7, 56), (8, 120), (9, 240)])
def test_the_bound_on_the_number_of_windows_is_the_published_one(order, bound):
    assert most_windows(order) == bound


def test_no_sequence_of_all_that_there_are_has_more_windows_than_the_bound():
    order = 5
    words = itertools.product((0, 1), repeat=most_windows(order) + order)
    assert not any(is_orientable(word, order) for word in words)


def test_a_longer_sequence_than_the_bound_allows_is_refused_at_once():
    with pytest.raises(ValueError, match="no orientable sequence of 34 bits and order 6"):
        orientable_sequence(34, 6)


def test_a_window_that_repeats_or_reads_the_same_backwards_is_not_orientable():
    assert is_orientable((0, 0, 1, 0, 1, 1), 4)
    assert not is_orientable((0, 0, 1, 0, 0, 1, 0), 4)  # 0010 and 0100
    assert not is_orientable((0, 1, 1, 0), 4)
    assert not is_orientable((0, 0, 1, 1, 1, 0, 0, 1), 4)


@pytest.mark.parametrize("standard", [STANDARD_525, STANDARD_625])
def test_every_ruler_tells_place_and_direction_by_itself(standard):
    for ruler in chart_plan(standard).rulers:
        assert is_orientable(tuple(map(int, ruler.bits)), ORDERS[ruler.side])
        assert len(ruler.boundaries) == len(ruler.bits) + 1
        assert max(len(list(run)) for _, run in itertools.groupby(ruler.bits)) <= LONGEST_RUN


def test_rulers_fill_the_rim_of_the_picture_once():
    rim = np.zeros((1200, 1600), dtype=int)
    for ruler in chart_plan(STANDARD_525).rulers:
        along = (round(1e6 * ruler.boundaries[0]) / 1e6, round(1e6 * ruler.boundaries[-1]) / 1e6)
        (x0, x1), (y0, y1) = (along, ruler.band) if ruler.side in ("top", "bottom") else (ruler.band, along)
        rim[round(1200 * y0) : round(1200 * y1), round(1600 * x0) : round(1600 * x1)] += 1
    expected = np.ones_like(rim)
    expected[80:-80, 80:-80] = 0
    np.testing.assert_array_equal(rim, expected)


def _read_off(picture: np.ndarray, ruler: Ruler) -> tuple[bool, ...]:
    """Bars as a person reads them, at the middle of each, along the middle of the band."""
    height, width = picture.shape
    upright = ruler.side in ("top", "bottom")
    middles = (np.array(ruler.boundaries[:-1]) + ruler.boundaries[1:]) / 2
    across = int(sum(ruler.band) / 2 * (height if upright else width))
    along = (middles * (width if upright else height)).astype(int)
    return tuple((picture[across, along] if upright else picture[along, across]) > 50)


@pytest.mark.parametrize("size", [(720, 480), (640, 480), (768, 576)])
def test_a_strip_of_the_drawn_ruler_is_found_once_and_its_mirror_image_never(size):
    picture = render(STANDARD_525, *size)
    for ruler in chart_plan(STANDARD_525).rulers:
        order = ORDERS[ruler.side]
        whole = "".join("01"[bit] for bit in ruler.bits)
        seen = _windows(_read_off(picture, ruler), order)
        assert len(seen) == len(ruler.bits) - order + 1
        for strip in seen:
            assert whole.count(strip) == 1
            assert strip[::-1] not in whole
