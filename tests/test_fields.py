"""The two fields of a frame: place, movement and level of one against the other."""

from __future__ import annotations

import numpy as np
import pytest

from patternscore.chain import Chain, Sweep, grab, responses
from patternscore.errors import Unreadable
from patternscore.layout import chart_plan
from patternscore.locate import locate
from patternscore.measure.fields import field_difference
from patternscore.plan import Plan
from patternscore.standard import STANDARD_625

PLAIN = Chain(noise_db=40.0)


def difference(frame):
    return field_difference(frame, locate(frame, chart_plan(frame.standard)))


def moved_along(frame, samples):
    """Second field shifted, as of a picture that moved between the fields."""
    luma = frame.luma.copy()
    luma[1::2] = np.roll(luma[1::2], samples, axis=1)
    return frame.with_luma(luma)


@pytest.mark.parametrize(
    "chain",
    [
        PLAIN,
        PLAIN.changed(standard=STANDARD_625),
        PLAIN.changed(noise_db=30.0),
        PLAIN.changed(jitter_ns=60.0),
        PLAIN.changed(hum_percent=6.0),
        PLAIN.changed(rotation=2.0),
        PLAIN.changed(response=(responses.second_order(2.0, 0.2),)),
        PLAIN.changed(response=(responses.first_order(1.0),), spot_lines=1.2),
        PLAIN.changed(sweep_v=Sweep(s_error=0.1, droop=0.1)),
    ],
    ids=["plain", "625", "noisy", "jitter", "hum", "turned", "ringing", "soft", "not linear"],
)
def test_a_still_picture_whose_lines_interleave_is_no_reason_to_speak(grabbed, chain):
    found = difference(grabbed(chain, 3))
    assert found.sentences() == ()
    assert abs(found.down.value) < 4 * found.down.sigma + 0.03
    assert abs(found.along.value) < 4 * found.along.sigma + 0.03
    assert abs(found.level.value) < 4 * found.level.sigma + 0.02


@pytest.mark.parametrize("offset", [-1.0, -0.3, 0.3, 2.0])
def test_a_field_that_lies_too_far_down_is_measured(grabbed, offset):
    found = difference(grabbed(PLAIN.changed(field_offset_lines=offset)))
    assert found.down.value == pytest.approx(offset, abs=0.08)
    assert found.along.value == pytest.approx(0.0, abs=0.1)
    assert f"{abs(found.down.value):.2f} lines too far {'down' if offset > 0 else 'up'}" in found.sentences()[0]


@pytest.mark.parametrize("samples", [-4, 1, 4])
def test_a_picture_that_moved_between_the_fields_is_said_to_have(grabbed, samples):
    found = difference(moved_along(grabbed(PLAIN), samples))
    assert found.along.value == pytest.approx(samples, abs=0.1)
    assert found.down.value == pytest.approx(0.0, abs=0.08)
    assert "moved between them" in found.sentences()[0]


@pytest.mark.parametrize("level", [-0.8, 2.0])
def test_a_field_of_another_level_is_measured_and_taken_for_nothing_else(grabbed, level):
    found = difference(grabbed(PLAIN.changed(field_level_offset=level)))
    assert found.level.value == pytest.approx(level, abs=0.1)
    assert found.sentences() == (f"The fields differ in level by {abs(found.level.value):.1f} IRE.",)


def test_fields_in_the_wrong_order_lie_two_lines_off(grabbed):
    frame = grabbed(PLAIN)
    luma = frame.luma.reshape(-1, 2, frame.samples)[:, ::-1].reshape(frame.luma.shape)
    assert difference(frame.with_luma(luma)).down.value == pytest.approx(2.0, abs=0.1)


@pytest.mark.parametrize("jitter_ns", [0.0, 20.0])
def test_sigmas_match_the_scatter_over_grabs(jitter_ns):
    still = grab(Chain(jitter_ns=jitter_ns, bits=None))
    located = locate(still, chart_plan(still.standard))
    values, sigmas = [], []
    for seed in range(24):
        frame = grab(Chain(jitter_ns=jitter_ns, bits=None), seed=seed) if jitter_ns else still
        noise = np.random.default_rng(seed).normal(0.0, 1.0, still.luma.shape)
        found = field_difference(frame.with_luma(frame.luma + noise), located)
        parts = found.down, found.along, found.level
        values.append([part.value for part in parts])
        sigmas.append([part.sigma for part in parts])
    ratio = np.mean(sigmas, axis=0) / np.std(values, axis=0, ddof=1)
    assert (ratio > 0.5).all()
    assert (ratio < 2.0).all()


def test_a_pattern_without_edges_gives_a_reason(grabbed):
    frame = grabbed(PLAIN)
    located = locate(frame, chart_plan(frame.standard))
    bare = Plan("bare", "525", field=located.plan.field, flats=located.plan.flats, steps=located.plan.steps)
    with pytest.raises(Unreadable, match="no edges"):
        field_difference(frame, type(located)(bare, located.warp, None, located.edges, located.misfit))


def test_a_field_taken_out_holds_its_own_lines(grabbed):
    frame = grabbed(PLAIN)
    for parity in (0, 1):
        field = frame.field(parity)
        assert (field.rows, field.samples) == (240, 720)
        np.testing.assert_array_equal(field.luma, frame.luma[parity::2])
        assert field.raster.height_lines == 240
