"""Picture in, frame out."""

from __future__ import annotations

from dataclasses import replace
from functools import lru_cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.chain.analogue import Spectra, line_spectra
from patternscore.chain.grabber import code, line_shifts, sample
from patternscore.chain.optics import Picture
from patternscore.chain.settings import Chain
from patternscore.frame import Frame


def grab(chain: Chain, picture: npt.NDArray[Any] | None = None, seed: int = 0) -> Frame:
    """Pass a picture through the chain and grab it.

    Parameters
    ----------
    chain : Chain
        Settings.
    picture : (h, w) array, optional
        Levels in IRE of exactly the active picture, any size, each pixel the mean over its area; the
        package's chart where left out. What the pixels' own size loses is made good, up to a third of their
        number in cycles over the width.
    seed : int
        Noise, jitter, wander and bounce follow from it; the same seed gives the same frame.

    Returns
    -------
    Frame
        Named "grab" with the sample clock and size of the chain.

    Raises
    ------
    UsageError
        If the picture is not a plane of finite levels.

    Notes
    -----
    What does not depend on the seed is kept for the last few chains, so that more grabs of one chain cost
    little.

    Examples
    --------
    What would a peaking network with its zero at 3 MHz do to a chain of 1.8 MHz?

    >>> from patternscore.chain import Chain, grab, responses, truth
    >>> soft = Chain(response=(responses.first_order(1.8),), noise_db=40.0)
    >>> peaked = soft.changed(response=(responses.first_order(1.8), responses.lead(3.0, 9.0)))
    >>> [round(truth(chain)["bandwidth_h"], 2) for chain in (soft, peaked)]
    [1.8, 2.78]
    >>> grab(peaked).luma.shape
    (480, 720)
    """
    random = np.random.default_rng(seed)
    shifts = line_shifts(chain, random)
    luma: npt.NDArray[Any] = sample(chain, _spectra(_steady(chain), Picture(picture, chain.standard)), shifts)
    if chain.bounce_percent:
        luma = luma * np.float32(1.0 + random.normal(0.0, chain.bounce_percent / 100.0))
    if chain.noise_db is not None:
        sigma = np.float32(100.0 * 10.0 ** (-chain.noise_db / 20.0))
        luma = luma + sigma * random.standard_normal(luma.shape, dtype=np.float32)
    return code(chain, luma)


def _steady(chain: Chain) -> Chain:
    """Chain without what changes from grab to grab or follows the sampler."""
    return replace(chain, noise_db=None, jitter_ns=0.0, wander_ns=0.0, bounce_percent=0.0, bits=None, levels="video")


@lru_cache(maxsize=6)
def _spectra(chain: Chain, picture: Picture) -> Spectra:
    return line_spectra(chain, picture)
