"""Transfer functions of analogue stages: callables from MHz to complex gain, 1 at zero frequency.

Each is a frozen dataclass, so that a chain that holds them can be compared, hashed and cached. Phase follows
exp(+j 2 pi f t); times are in us.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import UsageError

Spectrum = npt.NDArray[Any]
Response = Callable[[Spectrum], Spectrum]


@dataclass(frozen=True, slots=True)
class first_order:
    """Low-pass of one real pole at a corner in MHz: 1 / (1 + j f / mhz)."""

    mhz: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Complex gain at frequencies f, MHz."""
        return np.asarray(1.0 / (1.0 + 1j * f / self.mhz))


@dataclass(frozen=True, slots=True)
class lead:
    """Lead network: a zero and, higher, a pole, MHz; gain 1 at low frequency."""

    zero_mhz: float
    pole_mhz: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Complex gain at frequencies f, MHz."""
        return np.asarray((1.0 + 1j * f / self.zero_mhz) / (1.0 + 1j * f / self.pole_mhz))


@dataclass(frozen=True, slots=True)
class second_order:
    """Low-pass of a complex pole pair: natural frequency in MHz and damping ratio."""

    mhz: float
    damping: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Complex gain at frequencies f, MHz."""
        ratio = f / self.mhz
        return np.asarray(1.0 / (1.0 - ratio**2 + 2j * self.damping * ratio))

    @property
    def damped_mhz(self) -> float:
        """Frequency of the oscillation after a step, for a damping below 1."""
        return self.mhz * math.sqrt(1.0 - self.damping**2)


@dataclass(frozen=True, slots=True)
class gaussian:
    """Gaussian spot or filter whose gain is one half at a frequency in MHz."""

    mhz_at_half: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Gain at frequencies f, MHz."""
        return np.asarray(np.exp2(-((f / self.mhz_at_half) ** 2)) + 0j)


@dataclass(frozen=True, slots=True)
class gaussian_spot:
    """Gaussian of a sigma in us: exp(-2 (pi f sigma)^2)."""

    sigma_us: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Gain at frequencies f, MHz."""
        return np.asarray(np.exp(-2.0 * (np.pi * f * self.sigma_us) ** 2) + 0j)

    def falls_to(self, level: float) -> float:
        """Frequency in MHz at which the gain falls to a level below 1."""
        return math.sqrt(-math.log(level) / 2.0) / (math.pi * self.sigma_us)


@dataclass(frozen=True, slots=True)
class aperture:
    """Even aperture of a width in us: sin(pi f w) / (pi f w)."""

    us: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Gain at frequencies f, MHz."""
        return np.asarray(np.sinc(f * self.us) + 0j)


@dataclass(frozen=True, slots=True)
class brick_wall:
    """Perfect band limit at a frequency in MHz, no phase shift."""

    mhz: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Gain at frequencies f, MHz."""
        return np.asarray((np.abs(f) <= self.mhz) + 0j)


@dataclass(frozen=True, slots=True)
class raised_cosine:
    """Band limit that falls from 1 at ``start_mhz`` to 0 at ``end_mhz`` as a half cosine, no phase shift."""

    start_mhz: float
    end_mhz: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Gain at frequencies f, MHz."""
        slope = (np.abs(f) - self.start_mhz) / (self.end_mhz - self.start_mhz)
        return np.asarray(0.5 + 0.5 * np.cos(np.pi * np.clip(slope, 0.0, 1.0)) + 0j)


@dataclass(frozen=True, slots=True)
class delay:
    """Pure delay in us."""

    us: float

    def __call__(self, f: Spectrum) -> Spectrum:
        """Complex gain at frequencies f, MHz."""
        return np.asarray(np.exp(-2j * np.pi * f * self.us))


@dataclass(frozen=True, slots=True)
class zpk:
    """Zeros, poles and gain in rad/us, as scipy.signal gives them for analogue filters.

    The gain ``k`` is left out of account, for every stage has gain 1 at zero frequency; zeros and poles may
    be any sequence of numbers other than 0.
    """

    zeros: Sequence[complex]
    poles: Sequence[complex]
    k: float = 1.0

    def __post_init__(self) -> None:
        for name in ("zeros", "poles"):
            roots = tuple(complex(root) for root in getattr(self, name))
            if 0 in roots:
                raise UsageError(f"a stage cannot have {name} at 0: it must pass zero frequency; leave them out")
            object.__setattr__(self, name, roots)

    def __call__(self, f: Spectrum) -> Spectrum:
        """Complex gain at frequencies f, MHz."""
        s = 2j * np.pi * np.asarray(f)
        gain = np.ones_like(s)
        for zero in self.zeros:
            gain = gain * (1.0 - s / zero)
        for pole in self.poles:
            gain = gain / (1.0 - s / pole)
        return gain


@dataclass(frozen=True, slots=True)
class cascade:
    """Stages in a row."""

    stages: tuple[Response, ...]

    def __call__(self, f: Spectrum) -> Spectrum:
        """Complex gain at frequencies f, MHz."""
        gain = np.ones(np.shape(f), dtype=np.complex128)
        for stage in self.stages:
            gain = gain * stage(f)
        return gain


def pole_pairs(stages: tuple[Response, ...]) -> list[second_order]:
    """Complex pole pairs of the stages that are made of poles."""
    pairs = []
    for stage in stages:
        if isinstance(stage, cascade):
            pairs += pole_pairs(stage.stages)
        elif isinstance(stage, second_order) and stage.damping < 1.0:
            pairs.append(stage)
        elif isinstance(stage, zpk):
            above = [pole for pole in stage.poles if pole.imag > 1e-9 * abs(pole)]
            pairs += [second_order(abs(pole) / (2 * math.pi), -pole.real / abs(pole)) for pole in above]
    return pairs
