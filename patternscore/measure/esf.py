"""Readings from a fitted edge: transfer function and edge spread, each with its sigma."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.measure.response import Response
from patternscore.measure.stepbasis import BINS, edge_of, step_basis
from patternscore.reading import Estimate

Array = npt.NDArray[np.float64]
BORNE_OUT = 0.35  # part of a frequency within which extrema bear out a pole pair
SEEN = 3.0  # sigmas over which something counts as there


@dataclass(frozen=True, slots=True, eq=False)
class TransferCurve:
    """Modulus of a transfer function.

    Attributes
    ----------
    frequency : (n,) float64
        MHz along the line, cycles per line across.
    gain, sigma : (n,) float64
        Modulus, 1 at zero frequency, and its standard deviation.
    slopes : (p, n) float64
        Slopes of the modulus in the fit's parameters, whose covariance is ``covariance`` (p, p).
    """

    frequency: Array
    gain: Array
    sigma: Array
    slopes: Array
    covariance: Array

    def falls_to(self, level: float, highest: float) -> Estimate:
        """Lowest frequency at which the modulus is down to a level.

        Raises
        ------
        Unreadable
            If that lies above ``highest`` or in the noise.
        """
        below = np.flatnonzero(self.gain < level)
        if not len(below) or self.frequency[below[0]] > highest:
            raise Unreadable("the response is still higher at the end of what the samples show")
        k = int(below[0])
        drop = self.gain[k - 1] - self.gain[k]
        part = (self.gain[k - 1] - level) / drop
        step = self.frequency[k] - self.frequency[k - 1]
        # Noise may flatten the curve between two points: then the slope over a few more is the truer one.
        low, high = max(k - 3, 0), min(k + 2, len(self.gain) - 1)
        wide = (self.gain[low] - self.gain[high]) / (self.frequency[high] - self.frequency[low])
        sigma = self._sigma_at(k, part) / max(float(wide), float(drop / step), 1e-6)
        return Estimate(float(self.frequency[k - 1] + part * step), sigma)

    def decibels(self, frequency: float) -> Estimate:
        """Response in dB at a frequency.

        Raises
        ------
        Unreadable
            If it is lost in the noise.
        """
        k = int(np.searchsorted(self.frequency, frequency))
        part = (frequency - self.frequency[k - 1]) / (self.frequency[k] - self.frequency[k - 1])
        gain = (1 - part) * self.gain[k - 1] + part * self.gain[k]
        sigma = self._sigma_at(k, part)
        if gain < SEEN * sigma or gain < 1e-4:
            raise Unreadable("the response there is lost in the noise")
        return Estimate(20.0 * np.log10(gain), 20.0 / np.log(10.0) * sigma / gain)

    def _sigma_at(self, k: int, part: float) -> float:
        slope = (1 - part) * self.slopes[:, k - 1] + part * self.slopes[:, k]
        return float(np.sqrt(max(float(slope @ self.covariance @ slope), 0.0)))

    def flatness(self, low: float, high: float) -> Estimate:
        """Largest departure from 0 dB between two frequencies, dB.

        Raises
        ------
        Unreadable
            If the response is lost in the noise somewhere between them.
        """
        inside = np.flatnonzero((self.frequency > low) & (self.frequency < high))
        if np.any(self.gain[inside] < SEEN * self.sigma[inside]):
            raise Unreadable("the response is lost in the noise before the end of the luma band")
        level = 20.0 * np.log10(np.maximum(self.gain[inside], 1e-6))
        worst = self.frequency[inside[int(np.argmax(np.abs(level)))]]
        found = [self.decibels(at) for at in (low, float(worst), high)]
        largest = max(found, key=lambda estimate: abs(estimate.value))
        return Estimate(abs(largest.value), largest.sigma)


def transfer_curve(response: Response, sample_rate: float, known: Array | None = None) -> TransferCurve:
    """Modulus of a fitted response.

    Parameters
    ----------
    sample_rate : float
        MHz; 1 across the lines.
    known : (n,) array, optional
        A modulus that is in the response but not meant, to be taken out.
    """
    gain = np.abs(response.gain)
    slopes = (np.conj(response.gain) * response.slopes).real / np.maximum(gain, 1e-9)
    if known is not None:
        gain, slopes = gain / known, slopes / known
    covariance = response.covariance * max(response.chi2, 1.0)
    sigma = np.sqrt(np.maximum(((covariance @ slopes) * slopes).sum(axis=0), 0.0))
    return TransferCurve(response.nu * sample_rate, gain, sigma, slopes, covariance)


@dataclass(frozen=True, slots=True, eq=False)
class EdgeSpread:
    """Response to a step.

    Attributes
    ----------
    times : (n,) float64
        us, in scanning order.
    levels : (n,) float64
        Fraction of the step, 0 before and 1 after.
    rows : slice
        Where these times lie in the basis.
    slopes : (p, m) complex128
        Slopes of the transfer function in the fit's parameters, of covariance ``covariance``.
    """

    times: Array
    levels: Array
    rows: slice
    slopes: npt.NDArray[np.complex128]
    covariance: Array

    def _slopes(self, bins: list[int]) -> Array:
        """Slopes of the levels at some bins in the parameters: (bins, p)."""
        matrix = step_basis().matrix[[self.rows.start + k for k in bins]]
        packed = np.hstack([self.slopes.real, self.slopes.imag])
        return np.asarray(matrix @ packed.T.astype(np.float32), dtype=np.float64)

    def _sigma(self, direction: Array) -> float:
        return float(np.sqrt(max(float(direction @ self.covariance @ direction), 0.0)))

    def _step_us(self) -> float:
        return float(self.times[1] - self.times[0])

    def middle(self) -> int:
        """Bin at which the level first passes one half."""
        return int(np.argmax(self.levels >= 0.5))

    def rise_time(self, low: float = 0.1, high: float = 0.9) -> Estimate:
        """Time the edge takes between two fractions of its step, ns.

        Raises
        ------
        Unreadable
            If the edge does not reach both within the window.

        Notes
        -----
        For a first-order system of corner f the result is ln(9) / (2 pi f).
        """
        middle = self.middle()
        under = np.flatnonzero(self.levels[:middle] <= low)
        over = np.flatnonzero(self.levels[middle:] >= high)
        if not len(under) or not len(over):
            raise Unreadable("the edge does not settle within what is clear beside it")
        start, end = int(under[-1]), middle + int(over[0]) - 1
        first, first_rate = self._passes(start, low)
        last, last_rate = self._passes(end, high)
        slopes = self._slopes([start, end])
        sigma = self._sigma(slopes[0] / first_rate - slopes[1] / last_rate)
        return Estimate(1e3 * (last - first), 1e3 * sigma)

    def _passes(self, k: int, level: float) -> tuple[float, float]:
        """Time in us at which the level passes, after bin k, and the rate there (per us): a cubic through four bins."""
        y = self.levels[k - 1 : k + 3]
        c2 = (y[0] - 2.0 * y[1] + y[2]) / 2.0
        c3 = (y[3] - 3.0 * y[2] + 3.0 * y[1] - y[0]) / 6.0
        c1 = (y[2] - y[0]) / 2.0 - c3
        part = (level - y[1]) / (y[2] - y[1])
        for _ in range(4):
            rate = c1 + part * (2.0 * c2 + 3.0 * c3 * part)
            part -= (y[1] + part * (c1 + part * (c2 + c3 * part)) - level) / rate
        return float(self.times[k] + part * self._step_us()), float(rate) / self._step_us()

    def overshoot(self) -> Estimate:
        """How far the level passes beyond the step after the edge, percent of the step."""
        middle = self.middle()
        return self._beyond(middle + int(np.argmax(self.levels[middle:])), 1.0)

    def preshoot(self) -> Estimate:
        """How far the level passes below the start before the edge, percent of the step."""
        return self._beyond(int(np.argmin(self.levels[: self.middle() + 1])), -1.0)

    def _beyond(self, k: int, sense: float) -> Estimate:
        k = min(max(k, 1), len(self.levels) - 2)
        before, at, after = self.levels[k - 1 : k + 2]
        bend = before - 2 * at + after
        peak = at - (after - before) ** 2 / (8 * bend) if sense * bend < -1e-9 else at
        beyond = sense * (peak - (1.0 if sense > 0 else 0.0))
        return Estimate(100.0 * max(float(beyond), 0.0), 100.0 * self._sigma(self._slopes([k])[0]))

    def ringing(self, poles: Estimate | None = None) -> Estimate:
        """Frequency in MHz of the damped oscillation after the edge.

        Parameters
        ----------
        poles : Estimate, optional
            Frequency of the pole pair of the fitted family, MHz. It is taken where the extrema bear it out, for
            these are also moved by what else is in the response, such as a sharp band limit.

        Raises
        ------
        Unreadable
            If nothing swings back after the overshoot, or no further than noise explains.

        Notes
        -----
        Extrema of a damped oscillation lie half a period apart.
        """
        turns = self._turns()
        seen = []
        for k in turns[:4]:
            swing = abs(self.levels[k] - 1.0)
            if swing < max(SEEN * self._sigma(self._slopes([k])[0]), 0.004):
                break
            seen.append(self._turn(k))
        if len(seen) < 2:
            raise Unreadable("the edge settles without a swing back that noise does not explain")
        last = len(seen) - 1
        span = seen[last][0] - seen[0][0]
        sigma = float(np.hypot(seen[0][1], seen[last][1]))
        found = Estimate(last / (2.0 * span), last / (2.0 * span) * sigma / span)
        if poles is not None and abs(found.value / poles.value - 1.0) < BORNE_OUT:
            return poles
        return found

    def _turns(self) -> list[int]:
        """Extrema after the edge, the overshoot first, alternately above and below the step."""
        start = self.middle()
        rate = np.diff(self.levels[start:])
        turns = start + 1 + np.flatnonzero(rate[:-1] * rate[1:] < 0)
        if not len(turns):
            return []
        found, sense = [], 1.0
        for k in turns:
            if sense * (self.levels[k] - 1.0) > 0:
                found.append(int(k))
                sense = -sense
        return found

    def _turn(self, k: int) -> tuple[float, float]:
        """Time of an extremum and its sigma, us."""
        before, at, after = self.levels[k - 1 : k + 2]
        bend = before - 2 * at + after
        slopes = self._slopes([k - 1, k + 1])
        sigma = self._sigma((slopes[1] - slopes[0]) / 2) / max(abs(float(bend)), 1e-9)
        step = self._step_us()
        return float(self.times[k] + step * (before - after) / (2 * bend)), sigma * step


def edge_spread(
    response: Response, left: int, right: int, sample_rate: float, known: Array | None = None
) -> EdgeSpread:
    """Edge spread of a fitted response.

    Parameters
    ----------
    left, right : int
        Whole samples before and after the edge.
    known : (n,) array, optional
        A modulus that is in the response but not meant, to be taken out.
    """
    gain, slopes = response.gain, response.slopes
    if known is not None:
        gain, slopes = gain / known, slopes / known
    origin = step_basis().origin
    rows = slice(origin - left * BINS, origin + right * BINS + 1)
    reach = max(left, right)
    levels = edge_of(gain, reach)[(reach - left) * BINS : (reach + right) * BINS + 1] + 0.5
    covariance = response.covariance * max(response.chi2, 1.0)
    return EdgeSpread(step_basis().times[rows] / sample_rate, levels, rows, slopes, covariance)
