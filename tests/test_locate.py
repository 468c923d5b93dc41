"""Finding the chart: sub-pixel in every state that a trimmer can put it in, and never where it is not."""

from __future__ import annotations

import cv2
import numpy as np
import pytest
import skimage.data

from patternscore.chain import Chain, Sweep, grab, responses
from patternscore.chain.scanmap import distort
from patternscore.crosshatch import predicted
from patternscore.errors import UnscorableFrame
from patternscore.frame import Frame
from patternscore.layout import chart_plan
from patternscore.locate import locate
from patternscore.standard import STANDARD_525, STANDARD_625

PLAIN = Chain(oversample=4)
STATES = {
    "plain": PLAIN,
    "shifted by 8 %": PLAIN.changed(sweep_h=Sweep(shift=0.08), sweep_v=Sweep(shift=-0.08)),
    "10 % too large": PLAIN.changed(sweep_h=Sweep(size=1.1), sweep_v=Sweep(size=1.1)),
    "10 % too small": PLAIN.changed(sweep_h=Sweep(size=0.9), sweep_v=Sweep(size=0.9)),
    "turned by 3 degrees": PLAIN.changed(rotation=3.0),
    "turned back by 3 degrees": PLAIN.changed(rotation=-3.0),
    "non-linear by 15 %": PLAIN.changed(sweep_h=Sweep(droop=0.26), sweep_v=Sweep(s_error=0.3)),
    "folded": PLAIN.changed(sweep_h=Sweep(fold_start=2.5, fold_end=1.5)),
    "lifted and dark": PLAIN.changed(setup=8.0, gain=0.6, gamma=1.6),
    "625": PLAIN.changed(standard=STANDARD_625, rotation=-2.0),
    "640 samples": PLAIN.changed(samples=640, sample_rate=135 / 11),
    "768 samples": PLAIN.changed(standard=STANDARD_625, samples=768, sample_rate=14.75),
    "704 samples": PLAIN.changed(samples=704),
    "486 lines": PLAIN.changed(rows=486),
}
HARD = {
    "bent": PLAIN.changed(bow_h=3.0, bow_v=-3.0, trapezoid_h=3.0, trapezoid_v=-3.0),
    "soft": PLAIN.changed(response=(responses.gaussian(1.0),)),
    "noisy": PLAIN.changed(noise_db=30.0),
    "soft and noisy": PLAIN.changed(response=(responses.gaussian(1.0),), noise_db=30.0),
}


def crossing_errors(chain: Chain) -> np.ndarray:
    """Found less true crossings, samples and lines, their common shift (delay of the chain) taken out."""
    frame = grab(chain, seed=3)
    crossings = locate(frame, chart_plan(chain.standard)).crossings
    raster = frame.raster
    x, y = distort(chain, *crossings.xy.T)
    true = []
    for sweep, place, duration, scale, start in (
        (chain.sweep_h, x, chain.standard.active_us, chain.sample_rate, raster.left),
        (chain.sweep_v, y, raster.height_lines, 1.0, raster.top),
    ):
        times = np.linspace(sweep.fold_start, duration - sweep.fold_end, 100_001)
        true.append(np.interp(place, sweep.position(times, duration), times) * scale + start)
    error = crossings.found - np.stack(true, 1)
    assert len(error) >= 60
    return error - error.mean(0)


@pytest.mark.parametrize("chain", STATES.values(), ids=STATES.keys())
def test_crossings_are_found_to_a_twentieth_of_a_sample_at_40_db(chain):
    error = crossing_errors(chain.changed(noise_db=40.0))
    assert np.sqrt(np.mean(error**2, axis=0)).max() < 0.05


@pytest.mark.parametrize("chain", HARD.values(), ids=HARD.keys())
def test_crossings_are_found_below_a_sample_when_bent_soft_or_noisy(chain):
    error = crossing_errors(chain)
    assert np.sqrt(np.mean(error**2)) < 0.25
    assert np.abs(error).max() < 1.0


def test_sigmas_of_crossings_match_their_scatter():
    chain = PLAIN.changed(noise_db=34.0)
    plan = chart_plan(chain.standard)
    found = [locate(grab(chain, seed=seed), plan).crossings for seed in range(12)]
    scatter = np.std([each.found for each in found], axis=0, ddof=1)
    ratio = np.median(scatter, axis=0) / np.median(found[0].sigma, axis=0)
    assert (ratio > 0.5).all()
    assert (ratio < 2.0).all()


def test_crossings_agree_with_opencv_corners():
    # Reference library: OpenCV's cornerSubPix, on crossings whose four arms are clear.
    frame = grab(PLAIN.changed(rotation=1.0, response=(responses.gaussian(3.5),)))
    plan = chart_plan(frame.standard)
    crossings = locate(frame, plan).crossings
    index, _ = predicted(plan.grid)
    whole = {tuple(at) for at, arms in zip(index, plan.grid.arms, strict=True) if len(arms) == 4}
    own = np.array([place for at, place in zip(crossings.index, crossings.found, strict=True) if tuple(at) in whole])
    picture = np.clip(frame.luma * 2, 0, 255).astype(np.uint8)
    stop = (cv2.TERM_CRITERIA_EPS + cv2.TERM_CRITERIA_MAX_ITER, 60, 0.001)
    corners = cv2.cornerSubPix(picture, np.ascontiguousarray(own[:, None], dtype=np.float32), (6, 6), (-1, -1), stop)[
        :, 0
    ]
    apart = corners - own
    assert len(own) >= 12
    assert np.sqrt(np.mean((apart - apart.mean(0)) ** 2)) < 0.08


def test_a_broken_crosshatch_still_gives_the_other_crossings():
    frame = grab(PLAIN)
    luma = frame.luma.copy()
    luma[100:180, 60:130] = 50.0  # a stain over a few crossings
    luma[:, 478:482] = 20.0
    plan = chart_plan(frame.standard)
    broken = locate(frame.with_luma(luma), plan).crossings
    whole = locate(frame, plan).crossings
    kept = {tuple(at): place for at, place in zip(broken.index, broken.found, strict=True)}
    apart = [kept[tuple(at)] - place for at, place in zip(whole.index, whole.found, strict=True) if tuple(at) in kept]
    assert len(whole.index) - 12 <= len(apart)
    assert np.sqrt(np.mean(np.square(apart))) < 0.05


def picture_frames() -> list[tuple[str, np.ndarray]]:
    """Pictures that hold no chart: snow, blobs, other patterns, photographs that scikit-image carries."""
    random = np.random.default_rng(1)
    found = [("black", np.zeros((480, 720))), ("white", np.full((480, 720), 100.0))]
    found += [(f"snow {n}", random.normal(50, 30, (480, 720))) for n in range(10)]
    for n in range(10):
        noise = random.normal(50, 400, (480, 720)).astype(np.float32)
        found.append((f"blobs {n}", cv2.GaussianBlur(noise, (0, 0), random.uniform(1, 12))))
    y, x = np.mgrid[:480, :720]
    for pitch in (20, 40, 44.4, 60, 90):
        found.append((f"squares {pitch}", 100.0 * ((x // pitch + y // pitch) % 2)))
        found.append((f"grid {pitch}", 85.0 * ((x % pitch < 3) | (y % pitch < 3))))
        found.append((f"bars {pitch}", 100.0 * ((x // pitch) % 2)))
    for name in ("camera", "coins", "text", "page", "moon", "brick", "grass", "gravel", "clock"):
        photo = getattr(skimage.data, name)().astype(np.float32)
        photo = photo.mean(2) if photo.ndim == 3 else photo
        found.append((name, cv2.resize(photo / photo.max() * 100, (720, 480))))
    chart = grab(PLAIN).luma
    return [*found, ("mirrored", chart[:, ::-1]), ("upside down", chart[::-1]), ("negative", 100 - chart)]


def test_a_picture_without_the_chart_is_refused():
    plan = chart_plan(STANDARD_525)
    taken = []
    said = []
    for name, picture in picture_frames():
        frame = Frame(np.ascontiguousarray(picture, dtype=np.float32), STANDARD_525, 13.5, name=name)
        try:
            locate(frame, plan)
            taken.append(name)
        except UnscorableFrame as error:
            said.append((name, str(error)))
    assert taken == []
    assert all(message.startswith(f"{name}: ") and "\n" not in message for name, message in said)


def test_ends_of_the_raster_are_read_against_blanking():
    ends = locate(grab(PLAIN.changed(sweep_h=Sweep(size=0.9), sweep_v=Sweep(size=0.9))), chart_plan(STANDARD_525)).edges
    # The nominal active line reaches from 4.0 to 715.0; a tenth is missing, half at each end.
    assert ends.left == pytest.approx(39.6, abs=0.3)
    assert ends.right == pytest.approx(679.4, abs=0.3)
    assert ends.top == pytest.approx(23.5, abs=0.5)
    assert ends.bottom == pytest.approx(455.5, abs=0.5)


def test_no_end_is_claimed_where_the_picture_fills_the_frame():
    ends = locate(grab(PLAIN.changed(samples=640, sample_rate=135 / 11)), chart_plan(STANDARD_525)).edges
    assert (ends.left, ends.right, ends.top, ends.bottom) == (None, None, None, None)


@pytest.mark.parametrize("size", [1.05, 1.065, 1.08])
def test_a_picture_cut_by_blanking_is_still_known(size):
    # 625: the active line leaves nine samples of blanking at each side, where a larger picture would go on.
    sweep = Sweep(size=size, shift=0.005)
    chain = PLAIN.changed(standard=STANDARD_625, sweep_h=sweep, sweep_v=sweep, noise_db=40.0)
    assert locate(grab(chain), chart_plan(STANDARD_625)).misfit < 0.1
