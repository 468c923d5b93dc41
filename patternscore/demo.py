"""Makes the demo frames: four runs of one trimmer each, with known truth.

The scenario is invented: the volunteers of a tidal-mill museum bring the two cameras of its old viewing
tower back to life. The east camera (525) lost its sharpness and its blacks, the west camera (625) folds at
the left edge and squeezes the right. Each run is what they grabbed while turning one trimmer.

``python -m patternscore.demo FOLDER`` writes them; the same library versions give the same bytes.
"""

from __future__ import annotations

import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np

from patternscore.chain import Chain, Sweep, grab, responses
from patternscore.frame import Frame
from patternscore.standard import STANDARD_525, STANDARD_625, code_from_ire

_PEAKING_OHM = 4700.0  # resistor of the peaking network
_EAST = Chain(
    standard=STANDARD_525,
    sweep_h=Sweep(size=0.985, droop=0.02),
    sweep_v=Sweep(s_error=0.03),
    rotation=0.3,
    spot_us=0.03,
    spot_lines=0.6,
    noise_db=44.0,
    jitter_ns=4.0,
)
_WEST = Chain(
    standard=STANDARD_625,
    sweep_v=Sweep(size=0.99),
    spot_us=0.035,
    spot_lines=0.6,
    response=(responses.second_order(4.4, 0.62),),
    trapezoid_h=0.6,
    noise_db=43.0,
    jitter_ns=5.0,
    hum_percent=0.4,
)


def peaking(picofarad: float) -> Chain:
    """East camera with its peaking capacitor at a value: a lead network against a roll-off at 1.7 MHz."""
    zero = 1e6 / (2.0 * np.pi * _PEAKING_OHM * picofarad)
    network = (responses.first_order(1.7), responses.lead(zero, 8.0), responses.second_order(5.2, 0.55))
    return _EAST.changed(response=network)


def black_level(turns: float) -> Chain:
    """East camera, its black level a number of turns from where it was found."""
    return peaking(18.0).changed(setup=4.0 * turns - 5.0, gain=0.97, black_clip=0.0)


def retrace(delay_us: float) -> Chain:
    """West camera with its line drive delayed: the later retrace ends, the longer the picture folds."""
    sweep = Sweep(droop=0.05, fold_start=max(delay_us - 1.0, 0.0), retrace=5.5, turn=0.25)
    return _WEST.changed(sweep_h=sweep)


def linearity(turns: float) -> Chain:
    """West camera, its linearity coil a number of turns from where it was found."""
    return _WEST.changed(sweep_h=Sweep(droop=0.14 - 0.04 * turns, s_error=0.02))


RUNS = {
    "peaking": [(f"{value}pF", peaking(value)) for value in (6, 9, 12, 15, 18, 21, 24, 27, 30)],
    "black": [(f"{value:+.1f}turns", black_level(value)) for value in (-0.5, 0.0, 0.5, 1.0, 1.5, 2.0)],
    "retrace": [(f"{value:.1f}us", retrace(value)) for value in (3.0, 2.5, 2.0, 1.5, 1.0)],
    "linearity": [(f"{value}turns", linearity(value)) for value in (0, 1, 2, 3, 4, 5)],
}


def demo_frames() -> Iterator[tuple[str, Frame]]:
    """All frames with their file names, such as ``peaking/05_peaking_18pF.png``."""
    for run_number, (run, steps) in enumerate(RUNS.items()):
        for number, (setting, chain) in enumerate(steps, start=1):
            yield f"{run}/{number:02d}_{run}_{setting}.png", grab(chain, seed=100 * run_number + number)


def write_demo(folder: Path | str) -> None:
    """Write the demo frames below a folder as 8-bit PNG."""
    from PIL import Image

    for name, frame in demo_frames():
        path = Path(folder) / name
        path.parent.mkdir(parents=True, exist_ok=True)
        codes = np.clip(np.rint(code_from_ire(frame.luma)), 0, 255).astype(np.uint8)
        Image.fromarray(codes).save(path, format="PNG", optimize=True)


if __name__ == "__main__":
    write_demo(sys.argv[1] if len(sys.argv) > 1 else "demo_frames")
