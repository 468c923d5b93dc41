"""Bar edges of a ruler, and the curve through them."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import ndtr

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.layout import chart_plan
from patternscore.measure.ruler import read_bars
from patternscore.measure.rulerband import axis_of, straighten
from patternscore.measure.scanmap import fit_scan, linearity
from patternscore.measure.stepshape import StepShape
from patternscore.standard import STANDARD_525
from patternscore.warp import raster_warp

RASTER = STANDARD_525.raster(480, 720, 13.5)
TOP, RIGHT, BOTTOM, LEFT = chart_plan(STANDARD_525).rulers


def frame_of_bars(ruler, where, width: float, noise: float = 0.0) -> Frame:
    """Every line shows a ruler's bars with Gaussian edges at the samples ``where(boundaries)``."""
    places = where(np.asarray(ruler.boundaries))
    levels = np.concatenate([[0.0], np.where(ruler.bits, ruler.light, ruler.dark), [0.0]])
    line = np.diff(levels) @ ndtr((np.arange(720)[None, :] - places[:, None]) / width)
    grain = np.random.default_rng(0).normal(0.0, noise, (480, 720)) if noise else np.zeros((480, 720))
    return Frame((line + grain).astype(np.float32), STANDARD_525, 13.5)


def nominal(x: np.ndarray) -> np.ndarray:
    return RASTER.left + x * RASTER.width_samples


@pytest.mark.parametrize("width", [0.6, 1.0, 1.8, 2.2])
def test_bar_edges_are_found_to_a_fiftieth_of_a_sample_however_soft(width: float) -> None:
    bars = read_bars(straighten(frame_of_bars(TOP, nominal, width), raster_warp(RASTER), TOP))
    assert bars.good.all()
    assert np.abs(bars.place - nominal(bars.at)).max() < 0.02
    assert bars.shape.width == pytest.approx(width, rel=0.05)


def test_the_error_that_noise_causes_is_known() -> None:
    # Source: Cramer-Rao bound of an edge position, variance q^2 2 sqrt(pi) s / (M A^2) (derived, facts of the trade).
    width, noise = 1.5, 2.0
    bars = read_bars(straighten(frame_of_bars(TOP, nominal, width, noise), raster_warp(RASTER), TOP))
    lines = 2 * int(0.8 / 12 * 480 * 0.72 / 2) + 1
    bound = np.sqrt(noise**2 * 2 * np.sqrt(np.pi) * width / (lines * (TOP.light - TOP.dark) ** 2))
    error = np.std(bars.place - nominal(bars.at))
    assert 0.7 * bound < error < 1.6 * bound
    assert 0.6 < np.std(bars.noise) / error < 1.6


def test_a_scan_bent_by_a_cubic_gives_its_curve_back() -> None:
    def bent(x: np.ndarray) -> np.ndarray:
        return nominal(x + 0.02 * (x - 0.5) * (x - 1.0) * x)

    warp = raster_warp(RASTER)
    bars = [read_bars(straighten(frame_of_bars(ruler, bent, 1.0), warp, ruler)) for ruler in (TOP, BOTTOM)]
    scan = fit_scan(bars)
    x = np.linspace(0.0, 1.0, 33)
    assert np.abs(scan.time(x) - bent(x)).max() < 0.05
    speeds = 1.0 / np.diff(bent(np.linspace(0.0, 1.0, 17)))
    assert linearity(scan).value == pytest.approx(50 * np.ptp(speeds) / speeds.mean(), abs=0.1)


def test_bars_in_another_order_are_refused() -> None:
    backwards = frame_of_bars(TOP, nominal, 1.0).luma[:, ::-1]
    frame = Frame(np.ascontiguousarray(backwards), STANDARD_525, 13.5)
    with pytest.raises(Unreadable):
        read_bars(straighten(frame, raster_warp(RASTER), TOP))


def test_a_vertical_ruler_reads_as_a_horizontal_one_does() -> None:
    def down(y: np.ndarray) -> np.ndarray:
        return RASTER.top + y * RASTER.height_lines

    luma = np.zeros((480, 720), dtype=np.float32)
    places = down(np.asarray(LEFT.boundaries))
    levels = np.concatenate([[0.0], np.where(LEFT.bits, LEFT.light, LEFT.dark), [0.0]])
    luma[:] = (np.diff(levels) @ ndtr((np.arange(480)[None, :] - places[:, None]) / 0.6))[:, None]
    bars = read_bars(straighten(Frame(luma, STANDARD_525, 13.5), raster_warp(RASTER), LEFT))
    assert axis_of(LEFT) == "v"
    assert np.abs(bars.place - down(bars.at)).max() < 0.02
    assert abs(bars.lag) < 0.02


def test_a_step_of_a_known_spread_is_its_running_sum() -> None:
    spread = np.exp(-0.5 * (np.arange(-12, 13) / 1.5) ** 2)
    shape = StepShape.from_spread(spread)
    assert shape.width == pytest.approx(1.5, rel=0.01)
    assert np.allclose(shape.at(np.array([-20.0, 0.0, 20.0])), [0.0, 0.5, 1.0], atol=0.01)
