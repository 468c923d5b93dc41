"""What the numbers mean for the adjustment, in plain sentences, the most telling first."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

from patternscore.reading import Reading
from patternscore.standard import Standard

MOST = 6
Readings = Mapping[str, Reading]


@dataclass(frozen=True, slots=True)
class _Seen:
    """Readings, asked for so that only what was measured beyond noise speaks."""

    readings: Readings
    standard: Standard

    def value(self, key: str) -> float | None:
        reading = self.readings.get(key)
        return None if reading is None or reading.doubt else reading.value

    def over(self, key: str, limit: float) -> bool:
        """Whether a reading is above a limit by more than two sigma."""
        reading = self.readings.get(key)
        return reading is not None and not reading.doubt and reading.value - 2.0 * reading.sigma > limit

    def under(self, key: str, limit: float) -> bool:
        reading = self.readings.get(key)
        return reading is not None and not reading.doubt and reading.value + 2.0 * reading.sigma < limit

    def off(self, key: str, limit: float) -> bool:
        """Whether a reading is further than a limit from 0, either way."""
        return self.over(key, limit) or self.under(key, -limit)


def _fold(seen: _Seen) -> str | None:
    for side, unit in (("left", "us"), ("right", "us"), ("top", "lines"), ("bottom", "lines")):
        key = f"fold_{side}"
        if seen.over(key, 0.1 if unit == "us" else 0.5):
            value = seen.value(key)
            limit = seen.standard.blanking_us
            cure = (
                f"retrace must be over inside the {limit:.1f} us of line blanking"
                if unit == "us"
                else "field retrace must be over inside field blanking"
            )
            return f"The picture folds back over {value:.2f} {unit} at the {side}: {cure}; it starts or lasts too late."
    return None


def _peaking(seen: _Seen) -> str | None:
    overshoot, width = seen.value("overshoot"), seen.value("bandwidth_h")
    if overshoot is None:
        return None
    at = f" with the -3 dB point at {width:.1f} MHz" if width is not None else ""
    if seen.over("overshoot", 10.0):
        return f"Overshoot is {overshoot:.0f} %{at}: peaking is past its optimum."
    half = seen.value("mtf50_h")
    if seen.under("overshoot", 2.0) and half is not None and seen.under("mtf50_h", 0.7 * seen.standard.luma_mhz):
        return f"The response falls to half at {half:.2f} MHz with no overshoot: there is room for more peaking."
    return None


def _ringing(seen: _Seen) -> str | None:
    if _even(seen):  # a symmetrical band limit rings too, and is no resonance
        return None
    if seen.over("overshoot", 6.0) and (value := seen.value("ringing")) is not None:
        return f"Edges ring at {value:.1f} MHz: look for a resonance there, or an undamped peaking coil."
    return None


def _even(seen: _Seen) -> bool:
    """Whether edges overshoot alike before and after."""
    before, after = seen.value("preshoot"), seen.value("overshoot")
    if before is None or after is None or not seen.over("preshoot", 5.0) or not seen.over("overshoot", 5.0):
        return False
    return abs(before - after) < 0.25 * max(before, after)


def _preshoot(seen: _Seen) -> str | None:
    if not _even(seen):
        return None
    before, after = seen.value("preshoot"), seen.value("overshoot")
    return f"Edges overshoot alike before ({before:.0f} %) and after ({after:.0f} %): a filter or a sharpener."


def _black(seen: _Seen) -> str | None:
    if seen.over("black_crush", 2.0):
        value = seen.value("black_crush")
        return f"Steps below {value:.0f} IRE are one black: raise the black level, or clamp later."
    if seen.over("black_level", 10.0):
        return f"Black stands at {seen.value('black_level'):.1f} IRE: lower the black level (setup is at most 7.5)."
    return None


def _white(seen: _Seen) -> str | None:
    if seen.over("clipped_white", 0.5):
        return f"{seen.value('clipped_white'):.1f} % of the samples sit at the highest code: lower the gain."
    if seen.under("white_crush", 97.0):
        return f"Steps above {seen.value('white_crush'):.0f} IRE are one white: lower the gain."
    if seen.under("white_level", 90.0):
        return f"White reaches {seen.value('white_level'):.0f} IRE only: there is room for more gain."
    return None


def _gamma(seen: _Seen) -> str | None:
    if seen.over("gamma", 1.15) or seen.under("gamma", 0.87):
        value = seen.value("gamma")
        effect = "greys are darkened" if value is not None and value > 1 else "greys are lifted"
        return f"Gamma is {value:.2f}: {effect} between black and white."
    return None


def _speed(seen: _Seen) -> str | None:
    for side in ("left", "right", "top", "bottom"):
        if seen.over(f"crush_{side}", 10.0):
            value = seen.value(f"crush_{side}")
            return f"The outermost part at the {side} is squeezed by {value:.0f} %: adjust linearity, or amplitude."
    for letter, scan in (("h", "line"), ("v", "field")):
        if seen.over(f"linearity_{letter}", 3.0):
            value = seen.value(f"linearity_{letter}")
            return f"{scan.capitalize()} scan speed varies by +-{value:.1f} %: adjust {scan} linearity."
    return None


def _size(seen: _Seen) -> str | None:
    for key, axis in (("width", "wide"), ("height", "high")):
        if seen.over(key, 103.0) or seen.under(key, 97.0):
            value = seen.value(key)
            word = "too large" if value is not None and value > 100 else "too small"
            return f"The picture is {word}: {value:.1f} % {axis}."
    for key, way in (("centre_h", "sideways"), ("centre_v", "up or down")):
        if seen.off(key, 2.0):
            return f"The picture stands {seen.value(key):+.1f} % off centre: shift it {way}."
    return None


def _turn(seen: _Seen) -> str | None:
    if seen.off("rotation", 0.5):
        value = seen.value("rotation")
        back = "anticlockwise" if value is not None and value > 0 else "clockwise"
        return f"The picture is turned by {value:+.2f} degrees: turn the yoke or the card {back}."
    for key, what in (("trapezoid_h", "width"), ("trapezoid_v", "height")):
        if seen.off(key, 1.5):
            return f"The picture is a trapezoid: its {what} changes by {seen.value(key):+.1f} % across."
    return None


def _corners(seen: _Seen) -> str | None:
    if seen.over("corner_loss", 15.0):
        return f"The corners resolve {seen.value('corner_loss'):.0f} % less than the centre: check focus."
    return None


def _noise(seen: _Seen) -> str | None:
    if seen.under("noise", 36.0):
        value = seen.value("noise")
        return f"Noise is {value:.0f} dB below white: average several grabs (--together) for finer changes."
    return None


def _timing(seen: _Seen) -> str | None:
    if seen.over("jitter", 15.0):
        return f"Lines jitter by {seen.value('jitter'):.0f} ns rms: check sync separation and the time base."
    if seen.over("hum", 1.0):
        return f"Bars of {seen.value('hum'):.1f} % at mains rate: look for hum on a supply or an earth loop."
    if seen.over("bounce", 1.0):
        return f"Levels bounce by {seen.value('bounce'):.1f} % from frame to frame."
    return None


_RULES: tuple[Callable[[_Seen], str | None], ...] = (
    _fold, _peaking, _black, _white, _ringing, _preshoot, _speed, _size, _turn, _gamma, _timing, _corners, _noise,
)  # fmt: skip


def remarks_on(readings: Readings, standard: Standard, most: int = MOST) -> tuple[str, ...]:
    """Sentences on what was measured, at most ``most``; nothing is said of what was not."""
    seen = _Seen(readings, standard)
    said = [sentence for rule in _RULES if (sentence := rule(seen)) is not None]
    return tuple(said[:most])
