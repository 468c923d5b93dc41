"""What changes from frame to frame of one picture: level, and place along the line."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import Unreadable
from patternscore.frame import Frame
from patternscore.reading import Estimate

Array = npt.NDArray[Any]
_BLOCK = 8  # samples and lines
_FEWEST = 24  # flat blocks
_UNEVEN = 0.3  # IRE rms between the columns of a block beyond noise: no longer flat
_BLOCKS_OF_BAR = 4  # touching blocks that make a flashing bar
_BANDS = 16
_FURTHEST = 32  # samples that a frame may lie off the first
_SLACK = 1.0 / 16.0  # of the line at each end over which detail fades out


def bounce(frames: list[Frame]) -> Estimate:
    """Change of level from frame to frame (rms), where it is largest.

    Parameters
    ----------
    frames : list of Frame
        At least two, of one size.

    Returns
    -------
    Estimate
        % of 100 IRE.

    Raises
    ------
    Unreadable
        When the picture has hardly any flat area.

    Notes
    -----
    Flat blocks of 8 x 8 samples are followed. A change of the whole picture is taken as one of level and gain
    together, which the many blocks tell almost without noise, and is stated for black or white, whichever
    changes more. A bar that flashes stands out as touching blocks that change on their own.
    """
    level, flat = _blocks(frames)
    if np.count_nonzero(flat) < _FEWEST:
        raise Unreadable("the picture has too little flat area")
    seen = level[:, flat]
    mean = seen.mean(0)
    change = seen - mean
    design = np.stack([np.ones_like(mean), (mean - 50.0) / 50.0], 1)
    followed, common = _common_change(design, change)
    left = change - common
    count = len(frames) - 1
    noise = (1.4826 * float(np.median(np.abs(left)))) ** 2 * (len(frames) / count)
    whole = max((_at_level(design, followed, noise, end, count) for end in (mean.min(), mean.max())), key=_size)
    local = _flashing(level, flat, (left**2).sum(0) / count, noise, count)
    value, noise_part = max(whole, local, key=_size)
    return _rms(value, noise_part, count)


def _size(part: tuple[float, float]) -> float:
    return part[0] - part[1]


def _rms(scatter: float, noise: float, count: int) -> Estimate:
    """Root of a variance over count degrees of freedom, its noise part taken out."""
    value = float(np.sqrt(max(scatter - noise, 0.0)))
    spread = max(scatter, noise) * np.sqrt(2.0 / count)
    return Estimate(value, float(spread / (2.0 * max(value, np.sqrt(spread), 1e-9))))


def _blocks(frames: list[Frame]) -> tuple[Array, Array]:
    """Mean levels of the blocks of each frame (frames, down, along), and which blocks are flat."""
    import cv2

    rows, samples = (size // _BLOCK for size in frames[0].luma.shape)
    size = (samples, rows)
    cut = np.s_[: rows * _BLOCK, : samples * _BLOCK]
    level = np.stack([cv2.resize(frame.luma[cut], size, interpolation=cv2.INTER_AREA) for frame in frames])
    picture = np.asarray(np.mean([frame.luma[cut] for frame in frames], axis=0, dtype=np.float32))
    columns = picture.reshape(rows, _BLOCK, samples * _BLOCK).mean(1)  # what moves along the line shows in these
    uneven = columns.reshape(rows, samples, _BLOCK).std(2)
    flat = (uneven < np.hypot(2.0 * float(np.quantile(uneven, 0.2)), _UNEVEN)).astype(np.uint8)
    kernel = np.ones((1, 3), dtype=np.uint8)
    return level.astype(np.float64), cv2.erode(flat, kernel, borderValue=0).astype(bool)


def _common_change(design: Array, change: Array) -> tuple[Array, Array]:
    """Level and gain of each frame by robust least squares: (frames, 2), and the change they make."""
    keep = np.ones(len(design))
    solved: Array = np.zeros((len(change), 2))
    for _ in range(3):
        scaled = design * keep[:, None]
        solved = np.linalg.solve(scaled.T @ design + 1e-6 * np.eye(2), scaled.T @ change.T).T
        left = np.abs(change - solved @ design.T).max(0)
        keep = (left < 4.0 * float(np.median(left)) + 1e-3).astype(np.float64)
    return solved, solved @ design.T


def _at_level(design: Array, followed: Array, noise: float, level: float, count: int) -> tuple[float, float]:
    """Variance of the common change at a level, and the part of it that noise makes."""
    at = np.array([1.0, (level - 50.0) / 50.0])
    spread = float(at @ np.linalg.inv(design.T @ design + 1e-6 * np.eye(2)) @ at) * noise
    return float(((followed @ at) ** 2).sum() / count), spread


def _flashing(level: Array, flat: Array, scatter: Array, noise: float, count: int) -> tuple[float, float]:
    """Variance of level of touching blocks that change on their own; nothing where there are none."""
    import cv2
    from scipy.stats import chi2

    limit = noise * float(chi2.isf(1e-3 / flat.sum(), count)) / count
    restless = np.zeros(flat.shape, dtype=np.uint8)
    restless[flat] = scatter > max(limit, 1e-4)
    _, labels, sizes, _ = cv2.connectedComponentsWithStats(restless, connectivity=4)
    found = [(0.0, 0.0)]
    for label in np.nonzero(sizes[1:, cv2.CC_STAT_AREA] >= _BLOCKS_OF_BAR)[0] + 1:
        inside = labels == label
        own = np.var(level[:, inside], axis=0, ddof=1)
        together = level[:, inside][:, own >= 0.6 * np.quantile(own, 0.9)]  # without blocks that it half fills
        found.append((float(np.var(together.mean(1), ddof=1)), noise / together.shape[1]))
    return max(found, key=_size)


def wander(frames: list[Frame]) -> Estimate:
    """Spread (rms) of shift along the line between frames.

    Returns
    -------
    Estimate
        ns.

    Raises
    ------
    Unreadable
        When there is too little detail along the line.

    Notes
    -----
    The shift of each frame against the first is where their cross-correlation has its peak, found to a fraction
    of a sample by Newton's method on the cross spectrum. Its error is that of the mean of 16 bands of lines, from
    the scatter between them, so that noise and line jitter are both counted, and taken out.
    """
    crossed, turn = _cross_spectra(frames)
    shifts, errors = np.array([_peak(bands, turn) for bands in crossed]).T
    # The first frame's own error is in all shifts alike, so that half of each error counts.
    scatter = float(np.var(np.append(shifts, 0.0), ddof=1))
    found = _rms(scatter, float(np.mean(errors)) / 2.0, len(frames) - 1)
    scale = 1e3 / frames[0].sample_rate
    return Estimate(found.value * scale, found.sigma * scale)


def _cross_spectra(frames: list[Frame]) -> tuple[Array, Array]:
    """Cross spectra of the other frames with the first, band by band: (frames, bands, bins); rad per sample."""
    import scipy.fft

    samples = frames[0].samples
    length = scipy.fft.next_fast_len(samples, real=True)
    length += length % 2
    ramp = np.clip((np.arange(samples) + 0.5) / (_SLACK * samples), 0.0, 1.0)
    taper = (0.5 - 0.5 * np.cos(np.pi * np.minimum(ramp, ramp[::-1]))).astype(np.float32)
    first, *others = (scipy.fft.rfft(frame.luma * taper, length, axis=1) for frame in frames)
    starts = np.linspace(0, frames[0].rows, _BANDS, endpoint=False).astype(int)
    against = np.conj(first)
    crossed = np.stack([np.add.reduceat(other * against, starts, axis=0) for other in others])
    return crossed.astype(np.complex128), 2.0 * np.pi * np.arange(crossed.shape[2]) / length


def _peak(bands: Array, turn: Array) -> tuple[float, float]:
    """Shift in samples at the peak of the correlation, and the variance of its error."""
    import scipy.fft

    whole = bands.sum(0)
    rough = scipy.fft.irfft(whole * turn, 2 * (len(turn) - 1))
    near = np.arange(-_FURTHEST, _FURTHEST + 1)
    shift = float(near[rough[near].argmax()])
    pull, bend = np.zeros(len(bands)), 0.0
    for _ in range(12):
        moved = bands * np.exp(1j * turn * shift)
        pull = -(turn * moved.imag).sum(1)
        bend = float((turn**2 * moved.real).sum())
        if bend <= 1e-6 * float(np.abs(whole).sum()):
            raise Unreadable("the frames hold too little common detail along the line")
        step = float(np.clip(pull.sum() / bend, -0.5, 0.5))
        shift += step
        if abs(step) < 1e-5:
            break
    count = len(bands)
    return shift, float(((pull - pull.mean()) ** 2).sum()) / bend**2 * count / (count - 1.0)
