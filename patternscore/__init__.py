"""Scores grabbed frames of a test pattern: resolution, fold-back, geometry, levels and stability."""

import lazy_loader

__getattr__, __dir__, __all__ = lazy_loader.attach(
    __name__,
    submod_attrs={
        "averaging": ["average"],
        "card": ["Card"],
        "chain": ["Chain", "Sweep", "grab"],
        "chart": ["render", "write_chart"],
        "compare": ["score_files"],
        "errors": ["PatternscoreError", "UnscorableFrame", "UsageError"],
        "frame": ["Frame"],
        "layout": ["chart_plan"],
        "limits": ["read_limits"],
        "load": ["list_frames", "load_frame", "load_frames"],
        "planfile": ["read_plan", "write_plan"],
        "reading": ["Reading"],
        "score": ["score", "score_frame", "score_together"],
    },
)
