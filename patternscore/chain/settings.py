"""All settings of the model chain."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any

from patternscore.chain.responses import Response, cascade, raised_cosine
from patternscore.chain.sweep import Sweep
from patternscore.errors import UsageError
from patternscore.standard import LUMA_CLOCK_MHZ, STANDARD_525, Levels, Standard

NOMINAL_SWEEP = Sweep()
GRABBER_FILTER = raised_cosine(5.5, 6.75)


@dataclass(frozen=True, slots=True)
class Chain:
    """Settings of an analogue chain and of the grabber at its end.

    The picture passes, in this order: spot, scan (sweeps, trapezoid, bow, skew, turn), gamma, gain, setup,
    blanking, electrical response, tilt, hum, clipping, the grabber's band limit, line jitter, sampling, noise,
    coding. Noise is white from sample to sample, so that its rms is what the frame shows.

    Attributes
    ----------
    sweep_h, sweep_v : Sweep
        Deflection along the line (us) and down the field (lines).
    rotation, skew : float
        Degrees, clockwise positive.
    trapezoid_h, trapezoid_v, bow_h, bow_v : float
        Percent, as on the card.
    spot_us, spot_lines : float
        Sigma of a Gaussian spot along the line (us at nominal speed) and across the lines. The spot has this
        size in the picture: where the beam scans faster, it lasts shorter.
    response : tuple of Response
        Electrical stages, each a callable of MHz.
    gamma, gain, setup : float
        Exponent; factor; pedestal in IRE under the picture (not under blanking).
    black_clip, white_clip : float or None
        Levels in IRE beyond which the signal is held.
    tilt_line, tilt_field : float
        Percent of 100 IRE over the width and the height.
    hum_percent, hum_hz, hum_phase : float
        Peak amplitude re 100 IRE; frequency (None: 60 Hz with 525, 50 Hz with 625); radians.
    noise_db : float or None
        100 IRE over the rms of white noise, per sample of the frame.
    jitter_ns, wander_ns, bounce_percent : float
        rms of independent shifts line by line, and of shift and gain grab by grab.
    field_offset_lines, field_level_offset : float
        How far down, and how many IRE up, the lines 1, 3, 5 ... lie against the others.
    band_limit : Response or None
        The grabber's filter.
    bits : int or None
        Depth of the code; None leaves levels uncoded.
    oversample : int
        Points of the analogue line per sample, 4 or more.
    """

    standard: Standard = STANDARD_525
    rows: int | None = None
    samples: int = 720
    sample_rate: float = LUMA_CLOCK_MHZ
    sweep_h: Sweep = NOMINAL_SWEEP
    sweep_v: Sweep = NOMINAL_SWEEP
    rotation: float = 0.0
    skew: float = 0.0
    trapezoid_h: float = 0.0
    trapezoid_v: float = 0.0
    bow_h: float = 0.0
    bow_v: float = 0.0
    spot_us: float = 0.0
    spot_lines: float = 0.4
    response: tuple[Response, ...] = ()
    gamma: float = 1.0
    gain: float = 1.0
    setup: float = 0.0
    black_clip: float | None = None
    white_clip: float | None = None
    tilt_line: float = 0.0
    tilt_field: float = 0.0
    hum_percent: float = 0.0
    hum_hz: float | None = None
    hum_phase: float = 0.7
    noise_db: float | None = None
    jitter_ns: float = 0.0
    wander_ns: float = 0.0
    bounce_percent: float = 0.0
    field_offset_lines: float = 0.0
    field_level_offset: float = 0.0
    band_limit: Response | None = GRABBER_FILTER
    bits: int | None = 8
    levels: Levels = "video"
    oversample: int = 8

    def __post_init__(self) -> None:
        object.__setattr__(self, "response", tuple(self.response))
        line = self.standard.line_us * self.sample_rate
        if not 2 <= self.samples <= line or self.lines < 2 or self.oversample < 4:
            raise UsageError(f"a line holds 2 to {int(line)} samples; rows must be 2 or more, oversample 4 or more")
        if min(self.gamma, self.gain) <= 0 or min(self.spot_us, self.spot_lines, self.jitter_ns, self.wander_ns) < 0:
            raise UsageError("gamma and gain must be above 0, spot, jitter and wander 0 or more")
        if max(abs(self.rotation), abs(self.skew)) > 10.0:
            raise UsageError("rotation and skew are limited to 10 degrees")
        if max(map(abs, (self.trapezoid_h, self.trapezoid_v, self.bow_h, self.bow_v))) > 5.0:
            raise UsageError("trapezoid and bow are limited to 5 %")

    @property
    def lines(self) -> int:
        """Lines of the frame."""
        return self.rows if self.rows is not None else self.standard.coded_lines

    def electrical(self) -> Response:
        """Response of the electrical stages alone."""
        return cascade(self.response)

    def changed(self, **changes: Any) -> Chain:
        """Return the same chain with other settings."""
        return replace(self, **changes)
