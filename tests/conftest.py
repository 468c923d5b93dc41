"""Frames that several tests share: grabbed once in a session, and read-only."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from patternscore.chain import Chain, grab
from patternscore.frame import Frame


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
