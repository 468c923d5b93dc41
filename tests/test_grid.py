"""Geometry from the crosshatch, against the chain's truth and against warps made by other libraries."""

from __future__ import annotations

import cv2
import numpy as np
import pytest
from skimage.transform import PolynomialTransform, warp

from patternscore.chain import Chain, Sweep, grab, truth
from patternscore.chart import render
from patternscore.frame import Frame
from patternscore.layout import chart_plan
from patternscore.locate import locate
from patternscore.measure.grid import fit_geometry, read_grid, scan_from_grid
from patternscore.standard import STANDARD_525, STANDARD_625

PLAIN = Chain(oversample=4)
TOLERANCE = {"rotation": 0.05, "skew": 0.05, "trapezoid_h": 0.5, "trapezoid_v": 0.5, "bow_h": 0.5, "bow_v": 0.5}


def readings(frame: Frame) -> dict[str, float]:
    located = locate(frame, chart_plan(frame.standard))
    found = [*read_grid(frame, located).readings, *scan_from_grid(frame, located).readings]
    return {reading.key: reading.value for reading in found}


@pytest.mark.parametrize(
    "chain",
    [
        PLAIN.changed(rotation=1.5, skew=-0.8),
        PLAIN.changed(trapezoid_h=2.0, trapezoid_v=-1.5, noise_db=40.0),
        PLAIN.changed(bow_h=-2.0, bow_v=1.5, noise_db=40.0),
        PLAIN.changed(rotation=3.0, sweep_h=Sweep(droop=0.15), sweep_v=Sweep(droop=0.1)),
        PLAIN.changed(bow_h=-2.0, trapezoid_h=2.0, trapezoid_v=-2.0, sweep_h=Sweep(droop=0.15)),
        PLAIN.changed(standard=STANDARD_625, rotation=-2.0, bow_v=2.0, noise_db=36.0),
    ],
)
def test_what_a_person_adjusts_is_told_apart(chain):
    found, true = readings(grab(chain)), truth(chain)
    for key, tolerance in TOLERANCE.items():
        assert found[key] == pytest.approx(true[key], abs=tolerance), key


@pytest.mark.parametrize("sweep", [Sweep(droop=0.15), Sweep(s_error=0.2), Sweep(droop=-0.1, size=0.95, shift=0.02)])
def test_linearity_size_and_centring_come_from_the_crosshatch_alone(sweep):
    chain = PLAIN.changed(sweep_h=sweep, sweep_v=sweep, noise_db=40.0)
    found, true = readings(grab(chain)), truth(chain)
    for key in ("linearity_h", "linearity_v"):
        assert found[key] == pytest.approx(true[key], abs=0.5)
    for key in ("width", "height", "centre_h", "centre_v"):
        if key in true:
            assert found[key] == pytest.approx(true[key], abs=0.2)


def warped(picture: np.ndarray) -> Frame:
    """A drawn chart in a frame whose raster it fills exactly, with a margin of blanking."""
    raster = STANDARD_525.raster(480, 720, 13.5)
    wide = 4 * round(raster.width_samples)
    luma = np.zeros((4 * 480, 4 * 720), dtype=np.float32)
    left = round(4 * (raster.left + 0.5))
    luma[:, left : left + wide] = cv2.resize(picture, (wide, 4 * 480), interpolation=cv2.INTER_AREA)
    return Frame(cv2.resize(luma, (720, 480), interpolation=cv2.INTER_AREA), STANDARD_525, 13.5)


def test_a_projective_trapezoid_of_opencv_is_read_back():
    # Reference library: OpenCV's getPerspectiveTransform and warpPerspective. The top is 4 % narrower.
    picture = render(STANDARD_525, 1440, 960)
    corners = np.array([[0, 0], [1440, 0], [1440, 960], [0, 960]], dtype=np.float32)
    narrow = corners + np.array([[28.8, 0], [-28.8, 0], [0, 0], [0, 0]], dtype=np.float32)
    bent = cv2.warpPerspective(picture, cv2.getPerspectiveTransform(corners, narrow), (1440, 960), flags=cv2.INTER_AREA)
    found = readings(warped(bent))
    assert found["trapezoid_h"] == pytest.approx(100 * (1440 - 1382.4) / ((1440 + 1382.4) / 2), abs=0.5)
    assert found["rotation"] == pytest.approx(0.0, abs=0.05)
    assert found["bow_h"] == pytest.approx(0.0, abs=0.5)


def test_a_polynomial_warp_of_scikit_image_is_read_back():
    # Reference library: skimage.transform.warp. The picture is turned by 1 degree about its middle and its
    # sides bulge by 2 %: the map takes frame points back to picture points.
    picture = render(STANDARD_525, 1440, 1080)
    turn = np.radians(1.0)

    def back(points: np.ndarray) -> np.ndarray:
        across, down = points[:, 0] - 720.0, points[:, 1] - 540.0
        across, down = (
            across * np.cos(turn) + down * np.sin(turn),
            down * np.cos(turn) - across * np.sin(turn),
        )
        bulge = 1.0 + 0.04 * (1.0 - (down / 540.0) ** 2)  # 2 % of the width at each side
        return np.stack([across / bulge + 720.0, down + 540.0], 1)

    bent = warp(picture, back, order=3, preserve_range=True).astype(np.float32)
    found = readings(warped(bent))
    assert found["rotation"] == pytest.approx(1.0, abs=0.05)
    assert found["bow_h"] == pytest.approx(2.0, abs=0.5)
    assert found["bow_v"] == pytest.approx(0.0, abs=0.5)
    assert found["skew"] == pytest.approx(0.0, abs=0.05)


def test_position_error_is_the_largest_distance_from_a_fitted_grid_of_scikit_image():
    # Reference library: skimage's PolynomialTransform of degree 1 is the same fit but for a free shear.
    frame = grab(PLAIN.changed(sweep_h=Sweep(droop=0.12)))
    located = locate(frame, chart_plan(frame.standard))
    reading = next(r for r in read_grid(frame, located).readings if r.key == "position_error")
    scale = np.array([4 / 3 / frame.raster.width_samples, 1 / frame.raster.height_lines])
    ideal = PolynomialTransform.from_estimate(
        located.crossings.xy * [4 / 3, 1], located.crossings.found * scale, order=1
    )
    apart = ideal(located.crossings.xy * [4 / 3, 1]) - located.crossings.found * scale
    assert reading.value == pytest.approx(100 * np.hypot(*apart.T).max(), abs=0.05)


def test_sigmas_match_the_scatter_over_grabs():
    chain = PLAIN.changed(noise_db=34.0, rotation=1.0)
    found: dict[str, list[tuple[float, float]]] = {}
    for seed in range(16):
        frame = grab(chain, seed=seed)
        for reading in read_grid(frame, locate(frame, chart_plan(frame.standard))).readings:
            found.setdefault(reading.key, []).append((reading.value, reading.sigma))
    for key, pairs in found.items():
        values, sigmas = np.array(pairs).T
        # Sixteen grabs tell a scatter to about 18 %: 2 x 1.35 at most.
        assert 1 / 2.7 < values.std(ddof=1) / sigmas.mean() < 2.7, key


def test_too_few_crossings_are_a_reason_and_no_reading():
    frame = grab(PLAIN)
    located = locate(frame, chart_plan(frame.standard))
    few = located.crossings
    cut = type(few)(few.index[:10], few.xy[:10], few.found[:10], few.sigma[:10])
    findings = read_grid(frame, type(located)(located.plan, located.warp, cut, located.edges, located.misfit))
    assert findings.readings == []
    assert "only 10 crossings" in findings.missing["rotation"]


def test_the_model_leaves_little_over_on_a_plain_chart():
    frame = grab(PLAIN)
    model = fit_geometry(locate(frame, chart_plan(frame.standard)).crossings, frame.raster)
    assert np.sqrt(np.mean(model.left_over**2)) < 0.03
