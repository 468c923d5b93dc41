"""Time that the resolution group takes."""

from __future__ import annotations

from patternscore.chain import Chain, grab, responses
from patternscore.layout import chart_plan
from patternscore.located import Located, RasterEdges
from patternscore.measure.edge import read_edges
from patternscore.warp import raster_warp


def test_resolution_group_takes_its_share_of_the_card(benchmark):
    # 13 ms of the 33 ms of a card are its share; what it takes is recorded, not asserted.
    frame = grab(Chain(response=(responses.second_order(3.0, 0.4),), spot_lines=0.6, noise_db=40.0))
    located = Located(
        chart_plan(frame.standard), raster_warp(frame.raster), None, RasterEdges(None, None, None, None), 0.0
    )
    findings = benchmark.pedantic(read_edges, (frame, located), rounds=20, warmup_rounds=2)
    assert len(findings.readings) > 15
