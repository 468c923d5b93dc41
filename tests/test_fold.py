"""Fold-back: found and measured where there is one, and never where there is none."""

from __future__ import annotations

import numpy as np
import pytest
from scan_by_hand import read, sigmas, values

from patternscore.chain import Chain, grab, responses
from patternscore.chain.sweep import Sweep
from patternscore.standard import STANDARD_525, STANDARD_625

SIDES = ("fold_left", "fold_right", "fold_top", "fold_bottom")
PLAIN = Chain(oversample=4, spot_us=0.03, spot_lines=0.5, noise_db=40.0)


@pytest.mark.parametrize("ratio", [3.0, 5.0, 8.0])
@pytest.mark.parametrize("length", [0.5, 1.1, 1.8, 2.5])
def test_a_fold_at_either_side_is_read_within_a_seventh_of_a_microsecond(length: float, ratio: float) -> None:
    sweep = Sweep(fold_start=length, fold_end=3.0 - length, retrace=ratio, size=0.99, shift=0.004)
    found = values(read(grab(PLAIN.changed(sweep_h=sweep), seed=int(10 * length))))
    assert found["fold_left"] == pytest.approx(length, abs=0.15)
    assert found["fold_right"] == pytest.approx(3.0 - length, abs=0.15)


@pytest.mark.parametrize(
    "changes",
    [
        {"response": (responses.gaussian(1.3),)},
        {"response": (responses.second_order(3.0, 0.4),)},
        {"noise_db": 30.0},
        {"rotation": 2.0, "sweep_v": Sweep(size=0.95)},
        {"gamma": 1.6, "setup": 6.0, "black_clip": 8.0},
        {"standard": STANDARD_625, "spot_us": 0.06},
    ],
    ids=["soft", "ringing", "noisy", "turned", "levels", "625 lines, wide spot"],
)
def test_a_fold_is_read_through_other_faults(changes: dict[str, object]) -> None:
    chain = PLAIN.changed(sweep_h=Sweep(fold_start=1.4, retrace=4.5, turn=0.3), **changes)
    found = values(read(grab(chain, seed=3)))
    assert found["fold_left"] == pytest.approx(1.4, abs=0.15)
    assert found["fold_right"] <= 0.1


@pytest.mark.parametrize(
    "changes",
    [
        {},
        {"sweep_h": Sweep(shift=0.08), "sweep_v": Sweep(shift=0.05)},
        {"sweep_h": Sweep(shift=-0.08)},
        {"sweep_h": Sweep(s_error=-0.3), "sweep_v": Sweep(s_error=-0.25)},
        {"sweep_h": Sweep(s_error=0.3), "sweep_v": Sweep(s_error=0.3)},
        {"sweep_h": Sweep(droop=0.3), "sweep_v": Sweep(droop=0.3)},
        {"response": (responses.first_order(1.0),)},
        {"response": (responses.gaussian(1.0),)},
        {"noise_db": 30.0},
        {"response": (responses.second_order(3.0, 0.25),)},
        {"sweep_h": Sweep(size=1.04), "sweep_v": Sweep(size=1.04)},
        {"rotation": 3.0, "sweep_h": Sweep(size=0.92), "sweep_v": Sweep(size=0.92)},
        {"bow_h": 3.0, "bow_v": -2.0, "trapezoid_h": 4.0, "sweep_h": Sweep(size=0.95), "sweep_v": Sweep(size=0.95)},
        {"gain": 1.3, "gamma": 2.0, "setup": 7.5, "black_clip": 9.0, "white_clip": 95.0},
        {"field_offset_lines": 0.6, "field_level_offset": 4.0},
        {"jitter_ns": 40.0, "hum_percent": 6.0, "tilt_line": 12.0, "tilt_field": -12.0},
        {"spot_us": 0.0, "spot_lines": 0.0, "noise_db": None},
        {"samples": 704, "sweep_h": Sweep(size=1.01)},
    ],
    ids=lambda changes: " ".join(changes) or "clean",
)
def test_what_is_no_fold_is_never_called_one(changes: dict[str, object]) -> None:
    findings = read(grab(PLAIN.changed(**changes), seed=5))
    found = values(findings)
    for side in SIDES:
        assert found.get(side, 0.0) <= 0.1, side
        assert side in found or side in findings.missing
    assert "fold_left" in found
    assert "fold_right" in found


def test_a_fold_of_the_field_scan_is_read_in_lines() -> None:
    chain = PLAIN.changed(sweep_v=Sweep(fold_start=11.0, retrace=4.0, turn=1.5))
    found = values(read(grab(chain, seed=2)))
    assert found["fold_top"] == pytest.approx(11.0, abs=1.0)
    assert found["fold_bottom"] == 0.0


@pytest.mark.parametrize("retrace_us", [11.8, 12.6, 13.4])
def test_a_retrace_that_outlasts_line_blanking_shows_by_what_it_outlasts_it(retrace_us: float) -> None:
    # Source: the retrace must end inside line blanking, 10.9 us in 525 (SMPTE ST 170M; derived in common practice).
    over = retrace_us - STANDARD_525.blanking_us
    ratio = STANDARD_525.active_us / retrace_us
    chain = PLAIN.changed(sweep_h=Sweep(fold_start=over, retrace=ratio))
    assert values(read(grab(chain, seed=8)))["fold_left"] == pytest.approx(over, abs=0.15)


def test_the_sigma_of_a_fold_matches_its_scatter() -> None:
    chain = PLAIN.changed(sweep_h=Sweep(fold_start=1.7, retrace=4.0), noise_db=34.0)
    found = [read(grab(chain, seed=seed)) for seed in range(12)]
    scatter = np.std([values(one)["fold_left"] for one in found], ddof=1)
    stated = np.median([sigmas(one)["fold_left"] for one in found])
    assert stated < 0.15
    assert 0.4 < stated / scatter < 2.5
