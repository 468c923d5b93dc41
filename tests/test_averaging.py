"""Averaging grabs of one picture, and refusing what is none."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.ndimage import shift

from patternscore.averaging import average, displacement
from patternscore.chain import Chain
from patternscore.errors import UnscorableFrame, UsageError

PLAIN = Chain(noise_db=34.0)


def test_the_mean_of_many_grabs_has_less_noise_by_the_root_of_their_number(grabbed):
    grabs = [grabbed(PLAIN, seed) for seed in range(4)]
    still = grabbed(Chain())
    noise = [float((frame.luma - still.luma).std()) for frame in (grabs[0], average(grabs))]
    assert noise[1] / noise[0] == pytest.approx(0.5, rel=0.05)  # 1 / sqrt(4)
    assert average(grabs).averaged == 4


def test_averages_count_by_the_grabs_they_hold(grabbed):
    first, second, third = (grabbed(PLAIN, seed) for seed in range(3))
    twice = average([average([first, second]), third])
    assert twice.averaged == 3
    np.testing.assert_allclose(twice.luma, average([first, second, third]).luma, atol=1e-4)


def test_notes_of_all_grabs_are_kept_once(grabbed):
    first = grabbed(PLAIN).with_luma(grabbed(PLAIN).luma, notes=("one",))
    second = first.with_luma(first.luma, notes=("one", "two"))
    assert average([first, second]).notes == ("one", "two")


def test_one_frame_is_its_own_average(grabbed):
    np.testing.assert_array_equal(average([grabbed(PLAIN)]).luma, grabbed(PLAIN).luma)


def test_no_frames_cannot_be_averaged():
    with pytest.raises(UsageError, match="no frames"):
        average([])


@pytest.mark.parametrize(("along", "down"), [(0.0, 0.0), (0.7, 0.0), (-1.3, 0.0), (0.0, 0.6), (-1.0, -0.8)])
def test_displacement_follows_a_shift_by_scipy(grabbed, along, down):
    luma = grabbed(Chain()).luma
    moved = displacement(luma, shift(luma, (down, along), order=3, mode="nearest"))
    assert moved.along == pytest.approx(along, abs=0.05 + 0.2 * abs(along))
    assert moved.down == pytest.approx(down, abs=0.05 + 0.25 * abs(down))
    assert moved.likeness > 0.9


@pytest.mark.parametrize(
    "change",
    [{"gain": 0.7}, {"setup": 5.0}, {"gamma": 1.5}, {"noise_db": 20.0}, {"hum_percent": 8.0}, {"jitter_ns": 100.0}],
    ids=str,
)
def test_what_changes_from_grab_to_grab_is_no_reason_to_refuse(grabbed, change):
    assert average([grabbed(PLAIN), grabbed(PLAIN.changed(**change), 1)]).averaged == 2


@pytest.mark.parametrize(("axis", "step", "words"), [(1, 3, "samples"), (0, 2, "lines")])
def test_a_grab_that_has_moved_is_refused(grabbed, axis, step, words):
    frame = grabbed(PLAIN)
    moved = frame.with_luma(np.roll(frame.luma, step, axis=axis), name="late.png")
    with pytest.raises(UnscorableFrame, match=rf"^late\.png: .*{words}.*; leave it out") as refusal:
        average([frame, moved])
    assert "\n" not in str(refusal.value)


def test_a_grab_of_another_picture_is_refused(grabbed):
    frame = grabbed(PLAIN)
    for other in (frame.luma[::-1], np.random.default_rng(0).normal(50, 20, frame.luma.shape), 0 * frame.luma):
        with pytest.raises(UnscorableFrame, match="shows another picture"):
            average([frame, frame.with_luma(other)])


def test_frames_of_no_picture_at_all_are_alike(grabbed):
    black = grabbed(PLAIN).with_luma(np.zeros((480, 720)))
    assert average([black, black]).averaged == 2


def test_grabs_must_agree_in_size_clock_and_range(grabbed):
    frame = grabbed(PLAIN)
    with pytest.raises(UnscorableFrame, match="720 x 240 cannot be averaged with grab, 720 x 480"):
        average([frame, frame.field(0)])
    for change in ({"sample_rate": 14.75}, {"levels": "full"}):
        with pytest.raises(UnscorableFrame, match=f"its {next(iter(change)).replace('_', ' ')} is not that of"):
            average([frame, frame.with_luma(frame.luma, **change)])
