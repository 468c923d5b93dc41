"""Edges through the whole chain against scipy.signal, and against the chain's own truth by brute force."""

import math

import numpy as np
import pytest
from scipy import signal

from patternscore.chain import Chain, Sweep, grab, responses, truth

FEW_ROWS = Chain(rows=8, bits=None, band_limit=None, spot_lines=0.0)


def slanted(height, width, lean, upright=True):
    """Step from 20 to 80 IRE across a line through the middle, exact area coverage of each pixel.

    ``lean`` is the shift of the edge along the line over the whole height (down the field over the whole
    width), fractions of the picture.
    """
    across, along = (width, height) if upright else (height, width)
    place = (np.arange(across) + 0.5)[None, :] / across
    edge = 0.5 + lean * ((np.arange(along) + 0.5)[:, None] / along - 0.5)
    covered = np.clip((place - edge) * across + 0.5, 0.0, 1.0)
    picture = (20.0 + 60.0 * covered).astype(np.float32)
    return picture if upright else np.ascontiguousarray(picture.T)


EDGE = slanted(8, 5760, 0.0)
SLANTED = slanted(960, 5760, 0.08)
LYING = slanted(1920, 1440, 0.1, upright=False)


def spread(frame, lean, upright=True, size=1.0):
    """Edge spread of a slanted edge: distances (us or lines) and levels 0 to 1, all samples near the middle.

    ``size`` is that of the picture in the direction that the edge is scanned in.
    """
    raster = frame.raster
    x = (np.arange(frame.samples)[None, :] - raster.left) / raster.width_samples
    y = (np.arange(frame.rows)[:, None] - raster.top) / raster.height_lines
    if upright:
        away = (x - 0.5 - size * lean * (y - 0.5)) * frame.standard.active_us
    else:
        away = (y - 0.5 - size * lean * (x - 0.5)) * raster.height_lines
    near = (x > 0.2) & (x < 0.8) & (y > 0.05) & (y < 0.95)
    away, levels = away[near], (frame.luma[near] - 20.0) / 60.0
    order = np.argsort(away)
    return away[order], levels[order]


def binned(away, levels, step, reach):
    """Mean levels in even bins of the distance."""
    count = round(2 * reach / step)
    bins = np.floor((away + reach) / step).astype(int)
    inside = (bins >= 0) & (bins < count)
    total = np.bincount(bins[inside], levels[inside], count)
    return (np.arange(count) + 0.5) * step - reach, total / np.bincount(bins[inside], minlength=count)


def transfer(places, levels, frequency):
    """Magnitude of the transform of the slope of an edge spread, made good for bins and differences."""
    step = places[1] - places[0]
    slope, middles = np.diff(levels), (places[1:] + places[:-1]) / 2
    waves = np.exp(-2j * np.pi * np.outer(frequency, middles))
    return np.abs(waves @ slope) / np.sinc(frequency * step) ** 2


@pytest.mark.parametrize(
    "stage",
    [
        signal.butter(2, 2 * np.pi * 2.5, analog=True, output="zpk"),
        signal.bessel(4, 2 * np.pi * 2.0, analog=True, output="zpk"),
        signal.ZerosPolesGain([-8.0], [-30.0, -6.0, -25.0], 1.0),
    ],
)
def test_a_sampled_edge_is_the_step_response_of_the_reference_library(stage):
    # Source: scipy.signal.step.
    system = stage if isinstance(stage, signal.ZerosPolesGain) else signal.ZerosPolesGain(*stage)
    chain = FEW_ROWS.changed(response=(responses.zpk(system.zeros, system.poles),))
    frame = grab(chain, EDGE)
    times = (np.arange(720) - 359.5) / 13.5  # the edge lies in the middle of the active line
    after = (times > 0) & (times < 5)
    fine = np.linspace(0.0, 5.0, 10_001)
    _, expected = signal.step(system, T=fine)
    expected = expected / abs(system.to_tf().num[-1] / system.to_tf().den[-1])
    seen = (frame.luma[3] - 20.0) / 60.0
    np.testing.assert_allclose(seen[after], np.interp(times[after], fine, expected), atol=2e-3)
    assert abs(seen[(times < -0.1) & (times > -5)]).max() < 1e-3


@pytest.mark.parametrize("sigma_us", [0.04, 0.12])
def test_a_spot_gives_the_error_function(sigma_us):
    # Source: the integral of a Gaussian.
    frame = grab(FEW_ROWS.changed(spot_us=sigma_us), EDGE)
    times = (np.arange(720) - 359.5) / 13.5
    near = abs(times) < 2
    expected = [0.5 + 0.5 * math.erf(time / sigma_us / math.sqrt(2)) for time in times[near]]
    np.testing.assert_allclose((frame.luma[3, near] - 20.0) / 60.0, expected, atol=2e-3)


CHAINS = {
    "grabber alone": Chain(),
    "spot": Chain(spot_us=0.06),
    "ringing": Chain(response=(responses.second_order(2.5, 0.35),), spot_us=0.03),
    "peaked": Chain(response=(responses.first_order(1.8), responses.lead(2.2, 7.0), responses.second_order(5, 0.5))),
    # A line that repeats holds only harmonics of the line frequency; the limit lies midway between two.
    "brick wall": Chain(response=(responses.brick_wall(190.5 * 4.5 / 286),)),
    "smaller": Chain(sweep_h=Sweep(size=0.9), spot_us=0.08, response=(responses.first_order(3.0),)),
    "with 4 points a sample": Chain(oversample=4, response=(responses.second_order(3.5, 0.5),)),
}


@pytest.mark.parametrize("name", CHAINS)
def test_truth_along_the_line_is_what_a_noise_free_edge_shows(name):
    # Without a spot across the lines, which would blur the slanted edge along the line too (by 0.05 dB at 5 MHz).
    chain = CHAINS[name].changed(bits=None, spot_lines=0.0)
    known = truth(chain)
    places, seen = binned(*spread(grab(chain, SLANTED), 0.08, size=chain.sweep_h.size), 0.005, 13.0)
    frequency = np.linspace(0.05, 6.7, 1331)
    gain = transfer(places, seen, frequency)
    for key, level in (("mtf50_h", 0.5), ("bandwidth_h", 10 ** (-3 / 20))):
        assert frequency[np.argmax(gain < level)] == pytest.approx(known[key], rel=0.004)
    for mhz in range(1, 6):
        if known[f"response_{mhz}mhz"] > -26:
            found = 20 * np.log10(np.interp(mhz, frequency, gain))
            assert found == pytest.approx(known[f"response_{mhz}mhz"], abs=0.05)
    middle = np.argmax(seen > 0.5)
    assert 100 * (seen.max() - 1) == pytest.approx(known["overshoot"], abs=0.15)
    assert -100 * seen[:middle].min() == pytest.approx(known["preshoot"], abs=0.15)
    start = np.interp(0.1, *_rising(seen, places, middle, 0.1))
    end = np.interp(0.9, *_rising(seen, places, middle, 0.9))
    assert 1e3 * (end - start) == pytest.approx(known["rise_time"], rel=0.01)


def _rising(levels, places, middle, level):
    """Levels and places about the passage of a level that is nearest to the middle."""
    after = middle + np.argmax(levels[middle:] >= level)
    if level < 0.5:
        after = middle - np.argmax(levels[middle::-1] <= level) + 1
    return levels[after - 1 : after + 1], places[after - 1 : after + 1]


@pytest.mark.parametrize(
    "chain",
    [
        Chain(spot_lines=0.4),
        Chain(spot_lines=0.8),
        Chain(spot_lines=0.7, sweep_v=Sweep(size=0.9)),
        Chain(spot_lines=0.7, sweep_v=Sweep(size=1.05)),
    ],
)
def test_truth_across_the_lines_is_what_an_edge_shows(chain):
    # The spot's edge spread is an error function; its slope has the variance of the spot.
    frame = grab(chain.changed(bits=None), LYING)
    away, levels = spread(frame, 0.1, upright=False, size=chain.sweep_v.size)
    slope = np.diff(levels)
    middle = (away[1:] + away[:-1]) / 2
    close = abs(middle) < 6 * chain.spot_lines
    lines = math.sqrt(np.sum(slope[close] * middle[close] ** 2) / np.sum(slope[close]))
    assert truth(chain)["mtf50_v"] == pytest.approx(2 * 480 * 0.18739 / lines, rel=0.005)


def test_clipping_follows_the_response():
    frame = grab(FEW_ROWS.changed(response=(responses.second_order(2.5, 0.3),), white_clip=90.0, bits=8), EDGE)
    free = grab(FEW_ROWS.changed(response=(responses.second_order(2.5, 0.3),)), EDGE)
    assert free.luma.max() > 100.0
    assert frame.luma.max() == pytest.approx(90.0, abs=0.25)  # half a code
