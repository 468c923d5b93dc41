"""What several tests share: frames grabbed once in a session, a run of them as files, and the command line."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import NamedTuple

import cv2
import numpy as np
import pytest

from patternscore import cli
from patternscore.chain import Chain, grab, responses
from patternscore.frame import Frame
from patternscore.standard import code_from_ire


@pytest.fixture(scope="session")
def grabbed() -> Callable[..., Frame]:
    """Frame of the package's chart through a chain: ``grabbed(chain, seed=0)``."""
    frames: dict[tuple[Chain, int], Frame] = {}

    def frame_of(chain: Chain, seed: int = 0) -> Frame:
        if (chain, seed) not in frames:
            frame = grab(chain, seed=seed)
            frame.luma.flags.writeable = False
            frames[chain, seed] = frame
        return frames[chain, seed]

    return frame_of


@pytest.fixture(scope="session")
def write_frame() -> Callable[[Path, Frame], Path]:
    """Write a frame as an 8-bit file of video range, as a grabber does: ``write_frame(path, frame)``."""

    def write(path: Path, frame: Frame) -> Path:
        codes = np.clip(np.rint(code_from_ire(frame.luma)), 0, 255).astype(np.uint8)
        path.write_bytes(cv2.imencode(path.suffix, codes)[1].tobytes())
        return path

    return write


@pytest.fixture(scope="session")
def run_folder(tmp_path_factory, grabbed, write_frame) -> Path:
    """A run of three peaking settings; the third rings. Not to be written to."""
    folder = tmp_path_factory.mktemp("run")
    for number, (setting, damping) in enumerate((("9pF", 0.9), ("12pF", 0.6), ("100pF", 0.3)), start=1):
        chain = Chain(oversample=4, noise_db=44.0, response=(responses.second_order(3.0, damping),))
        write_frame(folder / f"{number:02d}_peaking_{setting}.png", grabbed(chain, number))
    return folder


@pytest.fixture(scope="session")
def good(run_folder) -> Path:
    """A file that holds a good frame."""
    return run_folder / "02_peaking_12pF.png"


class Done(NamedTuple):
    """What a command did: exit status, stdout, and the lines of stderr."""

    status: int
    out: str
    err: list[str]


@pytest.fixture
def command(monkeypatch, capfd) -> Callable[..., Done]:
    """Run the command line in this process; stderr is caught below Python, where C libraries write."""
    monkeypatch.delenv("COLUMNS", raising=False)

    def run(*words: object) -> Done:
        monkeypatch.setattr("sys.argv", ["patternscore", *map(str, words)])
        with pytest.raises(SystemExit) as left:
            cli.main()
        out, err = capfd.readouterr()
        assert isinstance(left.value.code, int)
        return Done(left.value.code, out, err.splitlines())

    return run
