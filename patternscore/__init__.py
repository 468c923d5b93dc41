"""Scores grabbed frames of a test pattern: resolution, fold-back, geometry, levels and stability."""

import lazy_loader

__getattr__, __dir__, __all__ = lazy_loader.attach(
    __name__,
    submod_attrs={
        "card": ["Card"],
        "chain": ["Chain", "Sweep", "grab"],
        "chart": ["render", "write_chart"],
        "compare": ["score_files"],
        "errors": ["PatternscoreError", "UnscorableFrame", "UsageError"],
        "frame": ["Frame", "average"],
        "layout": ["chart_plan"],
        "limits": ["read_limits"],
        "load": ["load_frame", "load_frames"],
        "reading": ["Reading"],
        "score": ["score", "score_frame", "score_together"],
    },
)
