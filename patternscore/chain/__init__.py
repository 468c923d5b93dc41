"""A model of an analogue chain: a picture in, a frame with known truth out."""

from __future__ import annotations

from patternscore.chain import responses
from patternscore.chain.render import grab
from patternscore.chain.settings import Chain
from patternscore.chain.sweep import Sweep
from patternscore.chain.truth import truth

__all__ = ["Chain", "Sweep", "grab", "responses", "truth"]
