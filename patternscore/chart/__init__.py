"""Draws the package's chart from its plan: as levels, as a picture file, or as a drawing for printing."""

from __future__ import annotations

from patternscore.chart.files import write_chart
from patternscore.chart.raster import render

__all__ = ["render", "write_chart"]
