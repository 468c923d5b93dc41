"""Linearity, crush, size, centring and blanking from the rulers."""

from __future__ import annotations

import numpy as np
import pytest
from scan_by_hand import read, scan_by_hand, sigmas, values

from patternscore.chain import Chain, grab, responses, truth
from patternscore.chain.sweep import Sweep
from patternscore.frame import Frame
from patternscore.layout import chart_plan
from patternscore.located import Located, RasterEdges
from patternscore.measure.scan import read_scan
from patternscore.standard import STANDARD_525, STANDARD_625, Standard
from patternscore.warp import raster_warp

CLEAN = Chain(oversample=4, spot_us=0.03, spot_lines=0.5, noise_db=42.0)


@pytest.mark.parametrize("standard", [STANDARD_525, STANDARD_625], ids=["525", "625"])
def test_an_ideal_scan_reads_as_ideal(standard: Standard) -> None:
    found = values(read(scan_by_hand(lambda t: t / standard.active_us, standard)))
    for key in ("linearity_h", "linearity_v", "crush_left", "crush_right", "crush_top", "crush_bottom"):
        assert abs(found[key]) < 0.3, key
    assert found["width"] == pytest.approx(100.0, abs=0.05)
    assert found["height"] == pytest.approx(100.0, abs=0.05)
    assert found["centre_h"] == pytest.approx(0.0, abs=0.05)


@pytest.mark.parametrize(
    ("standard", "lines_us", "blanking_us"),
    [(STANDARD_525, 63.556, 10.9), (STANDARD_625, 64.0, 12.05)],
)
def test_blanking_seen_and_picture_make_up_the_samples_of_a_line(
    standard: Standard, lines_us: float, blanking_us: float
) -> None:
    # Sources: line period and blanking, SMPTE ST 170M and ITU-R BT.470; 720 samples at 13.5 MHz, ITU-R BT.601.
    found = values(read(scan_by_hand(lambda t: t / standard.active_us, standard)))
    active = found["width"] / 100.0 * (lines_us - blanking_us)
    assert found["blank_left"] + active + found["blank_right"] == pytest.approx(720 / 13.5, abs=0.06)


@pytest.mark.parametrize("decay", [0.1, 0.25, 0.4])
def test_the_sweep_of_a_yoke_on_a_fixed_voltage_reads_as_its_time_constant_says(decay: float) -> None:
    # Source: i(t) = V/R (1 - exp(-t R/L)), speed at the end over speed at the start exp(-T R/L) (circuit textbooks).
    active = STANDARD_525.active_us

    def time(x: np.ndarray) -> np.ndarray:
        return -np.log1p(-x * -np.expm1(-decay)) / decay

    speeds = 1.0 / np.diff(time(np.linspace(0.0, 1.0, 17)))
    frame = scan_by_hand(lambda t: np.expm1(-decay * t / active) / np.expm1(-decay))
    findings = read(frame)
    found = values(findings)
    assert found["linearity_h"] == pytest.approx(50.0 * np.ptp(speeds) / speeds.mean(), abs=0.3)
    ends, middle = np.diff(time(np.array([0.0, 0.05, 0.95, 1.0])))[[0, 2]], np.diff(time(np.array([0.25, 0.75])))[0]
    crush = 100.0 * (1.0 - 0.1 * middle / ends)
    assert found["crush_left"] == pytest.approx(crush[0], abs=0.5)
    assert found["crush_right"] == pytest.approx(crush[1], abs=0.5)
    # Local speed at the very ends, read off the fitted curve.
    scan = findings.traces["scan_h"].map
    edges = scan.time(np.array([0.0, 0.01, 0.99, 1.0]))
    ratio = (edges[1] - edges[0]) / (edges[3] - edges[2])
    assert ratio == pytest.approx(np.exp(-decay * 0.99), rel=0.02)


@pytest.mark.parametrize(
    "changes",
    [
        {"sweep_h": Sweep(s_error=0.15), "sweep_v": Sweep(droop=0.15)},
        {"sweep_h": Sweep(droop=0.2), "sweep_v": Sweep(s_error=-0.15), "response": (responses.first_order(1.5),)},
        {"sweep_h": Sweep(droop=0.15), "response": (responses.second_order(3.0, 0.35),)},
        {"sweep_h": Sweep(s_error=-0.1), "sweep_v": Sweep(droop=0.1), "noise_db": 32.0},
        {"sweep_v": Sweep(droop=0.1), "field_offset_lines": 0.5, "field_level_offset": 3.0},
        {"sweep_h": Sweep(droop=0.15), "gamma": 1.8, "white_clip": 70.0},
        {"sweep_h": Sweep(droop=0.1, size=0.95), "sweep_v": Sweep(size=0.95), "rotation": 1.5},
        {"sweep_h": Sweep(s_error=0.2), "jitter_ns": 40.0, "hum_percent": 5.0, "tilt_line": 10.0},
    ],
    ids=["bent", "soft", "ringing", "noisy", "fields", "clipped", "turned", "jitter"],
)
def test_linearity_is_read_within_half_a_point(changes: dict[str, object]) -> None:
    chain = CLEAN.changed(**changes)
    found, known = values(read(grab(chain, seed=4))), truth(chain)
    assert found["linearity_h"] == pytest.approx(known["linearity_h"], abs=0.5)
    assert found["linearity_v"] == pytest.approx(known["linearity_v"], abs=0.5)


def test_size_and_centring_are_told_against_the_nominal_raster() -> None:
    chain = CLEAN.changed(sweep_h=Sweep(size=0.94, shift=0.02), sweep_v=Sweep(size=0.96, shift=-0.01))
    found, known = values(read(grab(chain))), truth(chain)
    for key in ("width", "height", "centre_h", "centre_v"):
        assert found[key] == pytest.approx(known[key], abs=0.1), key


def test_what_lies_outside_the_frame_is_missing_and_says_so() -> None:
    findings = read(grab(CLEAN.changed(sweep_h=Sweep(size=1.035, shift=0.004))))
    for key in ("crush_left", "crush_right", "linearity_h"):
        assert "outside the frame" in findings.missing[key]
    assert values(findings)["width"] == pytest.approx(103.5, abs=0.2)
    assert "crush_top" in values(findings)


def test_sigmas_match_the_scatter_over_grabs() -> None:
    chain = CLEAN.changed(noise_db=34.0, jitter_ns=20.0, sweep_h=Sweep(droop=0.08), sweep_v=Sweep(droop=0.08))
    found = [read(grab(chain, seed=seed)) for seed in range(24)]
    for key in ("linearity_h", "linearity_v", "crush_left", "crush_bottom", "width", "height", "centre_h", "centre_v"):
        scatter = np.std([values(one)[key] for one in found], ddof=1)
        stated = np.median([sigmas(one)[key] for one in found])
        assert 0.5 < stated / scatter < 2.0, key


def test_a_frame_without_rulers_gets_no_numbers() -> None:
    raster = STANDARD_525.raster(480, 720, 13.5)
    snow = np.random.default_rng(1).normal(40.0, 20.0, (480, 720)).astype(np.float32)
    for luma in (np.full((480, 720), 50.0, dtype=np.float32), snow):
        frame = Frame(luma, STANDARD_525, 13.5)
        located = Located(chart_plan(STANDARD_525), raster_warp(raster), None, RasterEdges(None, None, None, None), 0.3)
        findings = read_scan(frame, located)
        assert {reading.key for reading in findings.readings} <= {"blank_left", "blank_right"}
        assert all(findings.missing.values())
        assert {"fold_left", "linearity_h", "crush_bottom", "height"} <= findings.missing.keys()
