"""Line jitter, read from the verticals of the crosshatch."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest
from levels_by_hand import coded, laid, readings

from patternscore.chain import Chain, Sweep, grab, responses
from patternscore.errors import Unreadable
from patternscore.layout import chart_plan
from patternscore.locate import locate
from patternscore.measure.jitter import line_shifts, read_jitter
from patternscore.measure.stability import read_stability
from patternscore.plan import Plan
from patternscore.standard import STANDARD_625


def _jitter(chain, seed=1):
    frame = grab(chain, seed=seed)
    return read_jitter(frame, locate(frame, chart_plan(chain.standard)))


@pytest.mark.parametrize("noise_db", [40.0, 34.0])
@pytest.mark.parametrize("jitter", [5.0, 20.0, 60.0])
def test_jitter_is_read_apart_from_noise(jitter, noise_db):
    values = [_jitter(Chain(jitter_ns=jitter, noise_db=noise_db), seed).value for seed in range(4)]
    assert float(np.mean(values)) == pytest.approx(jitter, rel=0.1)
    assert values == pytest.approx([jitter] * 4, rel=0.2)


@pytest.mark.parametrize(
    "changes",
    [
        {"response": (responses.second_order(2.5, 0.3),)},
        {"rotation": 3.0},
        {"sweep_h": Sweep(size=0.95, droop=0.12), "hum_percent": 2.0},
        {"field_offset_lines": 0.5, "skew": 1.0},
        {"standard": STANDARD_625},
    ],
    ids=lambda changes: " ".join(changes),
)
def test_jitter_is_read_in_distorted_pictures(changes):
    assert _jitter(Chain(jitter_ns=10.0, noise_db=37.0, **changes)).value == pytest.approx(10.0, rel=0.2)


@pytest.mark.parametrize("changes", [{}, {"rotation": 2.0}, {"hum_percent": 3.0}, {"field_offset_lines": 0.5}])
def test_a_steady_picture_has_no_jitter(changes):
    assert _jitter(Chain(noise_db=40.0, **changes)).value < 1.0


def test_the_shifts_of_lines_are_those_made_by_hand():
    shifts = np.random.default_rng(5).normal(0.0, 0.2, 480)  # samples
    still = grab(Chain(bits=None))
    turn = np.exp(-2j * np.pi * np.fft.rfftfreq(720)[None, :] * shifts[:, None])
    frame = coded(np.fft.irfft(np.fft.rfft(still.luma.astype(np.float64), axis=1) * turn, 720, axis=1))
    located = locate(frame, chart_plan(frame.standard))
    found = line_shifts(frame, located)
    usable = np.isfinite(found.shift)
    seen, made = found.shift[usable], shifts[found.lines[usable]]
    assert np.corrcoef(seen, made)[0, 1] > 0.9
    at = np.unique(found.lines[usable])
    assert read_jitter(frame, located).value == pytest.approx(shifts[at].std() * 1e3 / 13.5, rel=0.06)


def test_sigma_of_jitter_is_its_scatter():
    trials = [_jitter(Chain(jitter_ns=8.0, noise_db=34.0), seed) for seed in range(24)]
    values = np.array([trial.value for trial in trials])
    assert 0.5 < float(np.mean([trial.sigma for trial in trials])) / values.std(ddof=1) < 2.0


def test_a_pattern_without_crosshatch_says_so():
    frame = grab(Chain())
    with pytest.raises(Unreadable, match="no crosshatch"):
        read_jitter(frame, laid(frame, Plan("bare", "525")))


def test_jitter_stands_with_stability_only_where_no_edge_tells_it():
    frame = grab(Chain(jitter_ns=10.0, noise_db=40.0))
    plan = chart_plan(frame.standard)
    located = locate(frame, plan)
    without = dataclasses.replace(located, plan=dataclasses.replace(plan, edges=()))
    assert "jitter" not in readings(read_stability(frame, located))
    assert readings(read_stability(frame, without))["jitter"].value == pytest.approx(10.0, rel=0.2)
