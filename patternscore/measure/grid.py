"""Geometry from the crosshatch: what turn, skew, trapezoid and bow the picture has, and what is left.

Positions are put into units of the picture height on a 4:3 screen. A small polynomial model of each
coordinate is fitted to the crossings; every reading is read off the model at the picture's own edges.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.located import Crossings, Located
from patternscore.reading import Estimate, Findings
from patternscore.standard import ASPECT, Raster

Array = npt.NDArray[Any]
KEYS = (
    "position_error", "rotation", "skew", "trapezoid_h", "trapezoid_v", "bow_h", "bow_v", "aspect_error",
)  # fmt: skip
# Terms of the distortion, as exponents of the coordinate itself and of the other one: place, size, lean and
# bend of each line, a size that changes across (trapezoid) and bends (bow), and what a turn makes of a bow.
_TERMS = ((0, 0), (1, 0), (0, 1), (0, 2), (1, 1), (1, 2), (2, 1))
_SWEEP = (2, 3, 4, 5)  # powers of the frame coordinate that undo the sweep's own curve
_FEWEST = 24  # crossings


@dataclass(frozen=True, slots=True)
class GridTrace:
    """Crossings against the best-fitting ideal grid, frame coordinates, and the parts of their error.

    ``ideal`` and ``found`` are (n, 2); ``model`` takes the error apart into what a person can adjust
    (``model.parts()``) and what is left over.
    """

    index: Array
    ideal: Array
    found: Array
    model: Geometry


def read_grid(frame: Frame, located: Located) -> Findings:
    """Geometry group but for what the rulers tell.

    Returns
    -------
    Findings
        position_error (% of the picture height), rotation and skew (degrees), trapezoid, bow and
        aspect_error (%), and a GridTrace as trace "grid".
    """
    findings = Findings()
    try:
        crossings = _enough(located.crossings)
        model = fit_geometry(crossings, frame.raster)
        for key, unit, estimate in model.readings():
            findings.add(key, unit, estimate, "crosshatch")
        error, ideal = position_error(crossings, frame.raster, model.shared)
        findings.add("position_error", "% of PH", error, "crosshatch")
        findings.traces["grid"] = GridTrace(crossings.index, ideal, crossings.found, model)
    except Unreadable as why:
        findings.miss(why.reason, *KEYS)
    return findings


def _enough(crossings: Crossings | None) -> Crossings:
    if crossings is None:
        raise Unreadable("the pattern has no crosshatch")
    columns, rows = crossings.index.T
    if len(crossings.xy) < _FEWEST or len(set(columns)) < 5 or len(set(rows)) < 4:
        raise Unreadable(f"only {len(crossings.xy)} crossings of the crosshatch can be seen")
    return crossings


def _terms(own: Array, other: Array) -> Array:
    """Values of the distortion's terms, (n, terms), coordinates -1 to 1 over the picture."""
    return np.asarray(np.stack([own**a * other**b for a, b in _TERMS], axis=-1))


@cache
def _outline() -> Array:
    """Terms at 3 x 3 points (start, middle, end of each coordinate): [own, other, term]."""
    places = np.array([-1.0, 0.0, 1.0])
    own, other = np.meshgrid(places, places, indexing="ij")
    return _terms(own, other)


@dataclass(frozen=True, slots=True, eq=False)
class Axis:
    """Model of one coordinate: the sweep undone is a sum of distortion terms.

    X + sum a_k X^k = sum d_j term_j(x, y), X the frame coordinate, -1 to 1 over the nominal raster.

    Attributes
    ----------
    terms, sweep : arrays
        d_j and a_k.
    covariance : array
        Of both together.
    """

    terms: Array
    sweep: Array
    covariance: Array

    def place(self, own: Array, other: Array) -> tuple[Array, Array]:
        """Frame coordinates of picture points, and their gradients by all coefficients."""
        table = _terms(own, other)
        target = table @ self.terms
        seen = target.copy()
        for _ in range(5):
            seen = seen - (seen + self._bend(seen) - target) / self._rate(seen)
        powers = np.stack([seen**k for k in _SWEEP], -1)
        return seen, np.concatenate([table, -powers], -1) / self._rate(seen)[..., None]

    def _bend(self, seen: Array) -> Array:
        return np.asarray(np.stack([seen**k for k in _SWEEP], -1) @ self.sweep)

    def _rate(self, seen: Array) -> Array:
        slope: Array = 1.0 + np.stack([k * seen ** (k - 1) for k in _SWEEP], -1) @ self.sweep
        return np.asarray(np.clip(slope, 0.2, None))

    def share(self, weights: Array, across: float = 1.0 / 3.0) -> Estimate:
        """A combination of distortion terms over half the size of the picture.

        ``across`` is the square of the other coordinate at which the size counts: a third is its mean, 1 is
        at the corners.
        """
        half = float(self.terms[1] + self.terms[5] * across)
        inner = self.covariance[: len(_TERMS), : len(_TERMS)]
        sigma = float(np.sqrt(weights @ inner @ weights))
        return Estimate(float(weights @ self.terms) / half, sigma / abs(half))

    def spread(self, gradient: Array) -> float:
        """Standard deviation of a quantity with this gradient by all coefficients."""
        return float(np.sqrt(np.clip(gradient @ self.covariance @ gradient, 0.0, None)))


@dataclass(frozen=True, slots=True, eq=False)
class Geometry:
    """Models of x (0) and y (1).

    Attributes
    ----------
    left_over : (n, 2) array
        What they do not explain, samples and lines.
    shared : (float, float)
        Standard deviation of what all crossings of a row share along the line (jitter), and all of a column
        down the frame; samples and lines.
    """

    axes: tuple[Axis, Axis]
    left_over: Array
    shared: tuple[float, float]

    def trapezoid(self, axis: int) -> Estimate:
        """Size at the end less size at the start of the other coordinate, % of the mean."""
        wide = (_outline()[2] - _outline()[0]) / 2
        return _percent(self.axes[axis].share(wide[2] - wide[0]))

    def bow(self, axis: int) -> Estimate:
        """How far the middle of the outermost lines bulges outward past their ends, %, mean of the two."""
        wide = (_outline()[2] - _outline()[0]) / 2
        return _percent(self.axes[axis].share((wide[1] - (wide[0] + wide[2]) / 2) / 2))

    def lean(self, axis: int) -> Estimate:
        """Angle of the horizontals (axis 0) or verticals (axis 1) in degrees, clockwise positive."""
        other = 1 - axis
        # From corner to corner, where no bow bends the line.
        drop = (_outline()[::2, 2] - _outline()[::2, 0]).mean(0) / 2
        found = self.axes[other].share(drop, across=1.0)
        # Horizontals drop along x; verticals lean clockwise where their top lies to the right.
        tangent = found.value / ASPECT if axis == 0 else -found.value * ASPECT
        slope = (1 / ASPECT if axis == 0 else ASPECT) / (1 + tangent**2)
        return Estimate(float(np.degrees(np.arctan(tangent))), float(np.degrees(slope * found.sigma)))

    def size(self, axis: int) -> Estimate:
        """Size of the picture, % of the nominal raster."""
        ends, gradient = self._ends(axis)
        return Estimate(50.0 * (ends[1] - ends[0]), 50.0 * self.axes[axis].spread(gradient[1] - gradient[0]))

    def centre(self, axis: int) -> Estimate:
        """Middle of the picture against that of the nominal raster, % of its size."""
        ends, gradient = self._ends(axis)
        return Estimate(25.0 * (ends[0] + ends[1]), 25.0 * self.axes[axis].spread(gradient[0] + gradient[1]))

    def _ends(self, axis: int) -> tuple[Array, Array]:
        """Start and end of the picture, mean over its outline, and their gradients."""
        across = np.array([-1.0, 0.0, 1.0])
        own = np.array([-1.0, 1.0])
        seen, gradient = self.axes[axis].place(*np.meshgrid(own, across, indexing="ij"))
        return seen.mean(1), gradient.mean(1)

    def linearity(self, axis: int) -> Estimate:
        """Half the spread of the local scan speed over its mean, %, local being a 16th (12th) of the size."""
        bounds = np.linspace(-1.0, 1.0, 17 - 4 * axis)
        seen, gradient = self.axes[axis].place(bounds, np.zeros_like(bounds))
        speeds, steps = 1.0 / np.diff(seen), np.diff(gradient, axis=0)
        fast, slow, mean = int(speeds.argmax()), int(speeds.argmin()), float(speeds.mean())
        slope = (steps[slow] * speeds[slow] ** 2 - steps[fast] * speeds[fast] ** 2) / (2 * mean)
        spread = float(speeds[fast] - speeds[slow]) / (2 * mean)
        return Estimate(100.0 * spread, 100.0 * self.axes[axis].spread(slope))

    def aspect(self) -> Estimate:
        """Width over height against the nominal raster, less 1, %."""
        wide, tall = self.size(0), self.size(1)
        ratio = wide.value / tall.value
        sigma = ratio * float(np.hypot(wide.sigma / wide.value, tall.sigma / tall.value))
        return Estimate(100.0 * (ratio - 1.0), 100.0 * sigma)

    def readings(self) -> list[tuple[str, str, Estimate]]:
        """Key, unit and estimate of the readings that are the crosshatch's own."""
        turn, upright = self.lean(0), self.lean(1)
        skew = Estimate(upright.value - turn.value, float(np.hypot(upright.sigma, turn.sigma)))
        return [
            ("rotation", "degrees", turn),
            ("skew", "degrees", skew),
            ("trapezoid_h", "%", self.trapezoid(0)),
            ("trapezoid_v", "%", self.trapezoid(1)),
            ("bow_h", "%", self.bow(0)),
            ("bow_v", "%", self.bow(1)),
            ("aspect_error", "%", self.aspect()),
        ]

    def sweep_readings(self) -> list[tuple[str, str, Estimate]]:
        """What rulers tell better, where a pattern has them: size, centring, linearity."""
        found = []
        for axis, (letter, size) in enumerate((("h", "width"), ("v", "height"))):
            found += [
                (size, "%", self.size(axis)),
                (f"centre_{letter}", "%", self.centre(axis)),
                (f"linearity_{letter}", "%", self.linearity(axis)),
            ]
        return found

    def parts(self) -> dict[str, tuple[float, str]]:
        """All that a person can adjust, by name, with its unit."""
        both = (*self.sweep_readings(), *self.readings())
        return {key: (estimate.value, unit) for key, unit, estimate in both}


def _percent(ratio: Estimate) -> Estimate:
    return Estimate(100.0 * ratio.value, 100.0 * ratio.sigma)


def fit_geometry(crossings: Crossings, raster: Raster) -> Geometry:
    """Fit the model to crossings by weighted least squares.

    Parameters
    ----------
    crossings : Crossings
    raster : Raster
        Nominal raster, which scales the coordinates.
    """
    half = np.array([raster.width_samples, raster.height_lines]) / 2
    seen = (crossings.found - [raster.left, raster.top]) / half - 1.0
    u, v = (2.0 * crossings.xy - 1.0).T
    axes: list[Axis] = []
    left: list[Array] = []
    shared: list[float] = []
    for axis, (own, other) in enumerate(((u, v), (v, u))):
        here = seen[:, axis]
        design = np.concatenate([_terms(own, other), -np.stack([here**k for k in _SWEEP], 1)], 1)
        weights = half[axis] / np.maximum(crossings.sigma[:, axis], 1e-3)
        solved, *_ = np.linalg.lstsq(design * weights[:, None], here * weights, rcond=None)
        inverse = np.linalg.inv((design * weights[:, None] ** 2).T @ design)
        left.append((here - design @ solved) * half[axis])
        lines = crossings.index[:, 1 - axis]
        shared.append(_shared(left[-1], crossings.sigma[:, axis], lines))
        pull = inverse @ (design * weights[:, None] ** 2).T
        together = np.stack([pull[:, lines == line].sum(1) for line in np.unique(lines)], 1)
        covariance = inverse + (shared[-1] / half[axis]) ** 2 * (together @ together.T)
        axes.append(Axis(solved[: len(_TERMS)], solved[len(_TERMS) :], covariance))
    return Geometry((axes[0], axes[1]), np.stack(left, 1), (shared[0], shared[1]))


def _shared(left: Array, sigma: Array, lines: Array) -> float:
    """Standard deviation of what the crossings of one grid line share, beyond their own noise."""
    kinds = np.unique(lines)
    means = np.array([left[lines == kind].mean() for kind in kinds])
    own = np.array([(sigma[lines == kind] ** 2).mean() / np.count_nonzero(lines == kind) for kind in kinds])
    freedom = max(len(kinds) - 3, 1)  # the model takes place, lean and bend of the line means away
    return float(np.sqrt(max(float((means**2).sum()) / freedom - float(own.mean()), 0.0)))


def position_error(
    crossings: Crossings, raster: Raster, shared: tuple[float, float] = (0.0, 0.0)
) -> tuple[Estimate, Array]:
    """Largest distance of a crossing from the best-fitting ideal grid, shift, turn and both sizes free.

    Returns
    -------
    Estimate
        % of the picture height.
    (n, 2) float64
        The ideal grid in frame coordinates.
    """
    scale = np.array([raster.width_samples / ASPECT, raster.height_lines])
    seen = (crossings.found - [raster.left, raster.top]) / scale
    x, y = (crossings.xy - 0.5).T
    none, ones = np.zeros_like(x), np.ones_like(x)
    # Unknown: shift x, shift y, size x, size y, turn (small: it moves x by -y and y by x).
    design = np.concatenate(
        [
            np.stack([ones, none, x * ASPECT, none, -y], 1),
            np.stack([none, ones, none, y, x * ASPECT], 1),
        ]
    )
    solved, *_ = np.linalg.lstsq(design, np.concatenate([seen[:, 0], seen[:, 1]]), rcond=None)
    ideal = (design @ solved).reshape(2, -1).T
    distance = np.hypot(*(seen - ideal).T)
    worst = int(distance.argmax())
    # Only what lies along the error counts.
    along = (seen - ideal)[worst] / max(float(distance[worst]), 1e-9)
    sigma = float(np.hypot(*(along * np.hypot(crossings.sigma[worst], shared) / scale)))
    return Estimate(100.0 * float(distance[worst]), 100.0 * sigma), ideal * scale + [raster.left, raster.top]


def scan_from_grid(frame: Frame, located: Located) -> Findings:
    """Linearity, size and centring where a pattern has no rulers, from its crosshatch."""
    keys = ("linearity_h", "linearity_v", "width", "height", "centre_h", "centre_v")
    findings = Findings()
    try:
        model = fit_geometry(_enough(located.crossings), frame.raster)
    except Unreadable as why:
        findings.miss(why.reason, *keys)
        return findings
    for key, unit, estimate in model.sweep_readings():
        findings.add(key, unit, estimate, "crosshatch")
    return findings
