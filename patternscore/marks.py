"""Finds the quadrant marks of a plan in a frame: the first, coarse pose, from nothing.

A mark is a saddle of the smoothed picture, with the sign of the mixed second derivative telling its hand.
Marks are assigned to saddles by trying affine poses through triples of them and counting what else fits.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from itertools import combinations
from typing import Any

import numpy as np
import numpy.typing as npt

from patternscore.errors import UnscorableFrame
from patternscore.plan import Mark, Plan
from patternscore.standard import Raster
from patternscore.warp import Warp, fit_warp

Array = npt.NDArray[Any]
_MOST_SADDLES = 64  # of each hand
_REACH = 0.2  # how far from its nominal place a mark is looked for, fractions of the picture
_FEWEST = 6  # marks that make a pose
_BATCH = 8  # triples tried at a time
_MOST_TRIPLES = 56  # with a third of the marks lost, a quarter of them are still whole


@dataclass(frozen=True, slots=True)
class Saddles:
    """Saddle points of a frame: (n, 2) frame coordinates, and the hand (+1, -1) of each."""

    points: Array
    hands: Array


def find_saddles(luma: Array, radius: float) -> Saddles:
    """Saddle points whose size suits marks of a radius.

    Parameters
    ----------
    luma : (rows, samples) float32, IRE
    radius : float
        Radius of a mark, lines.
    """
    import cv2

    rows, samples = luma.shape
    less = max(int(radius / 4.0), 1)  # a mark of four samples' radius is large enough to find
    wide, tall = samples // less, rows // less
    small = cv2.resize(luma[: tall * less, : wide * less], (wide, tall), interpolation=cv2.INTER_AREA)
    smooth = cv2.GaussianBlur(small, (0, 0), 0.44 * radius / less)
    mixed = cv2.Sobel(smooth, cv2.CV_32F, 1, 1, ksize=3)
    bend_x = cv2.Sobel(smooth, cv2.CV_32F, 2, 0, ksize=3)
    bend_y = cv2.Sobel(smooth, cv2.CV_32F, 0, 2, ksize=3)
    # A quadrant mark bends only along its diagonals; ridges, corners and blobs bend along x or y too.
    strength = np.abs(mixed) - 0.25 * np.abs(bend_x + bend_y) - 0.15 * np.abs(bend_x - bend_y)
    size = 2 * max(int(0.6 * radius / less), 2) + 1
    peak = (strength >= cv2.dilate(strength, np.ones((size, size), np.uint8))) & (strength > 0)
    y, x = np.nonzero(peak)
    hands = np.where(mixed[y, x] > 0, 1, -1)
    keep = np.concatenate([_strongest(strength[y, x], hands == hand) for hand in (1, -1)])
    x, y, hands = x[keep], y[keep], hands[keep]
    inside = (x > 0) & (y > 0) & (x < strength.shape[1] - 1) & (y < strength.shape[0] - 1)
    x, y, hands = x[inside], y[inside], hands[inside]
    dx = _vertex(strength[y, x - 1], strength[y, x], strength[y, x + 1])
    dy = _vertex(strength[y - 1, x], strength[y, x], strength[y + 1, x])
    middle = (less - 1) / 2
    return Saddles(np.stack([less * (x + dx) + middle, less * (y + dy) + middle], 1), hands)


def _strongest(strength: Array, which: Array) -> Array:
    index = np.nonzero(which)[0]
    order = index[np.argsort(-strength[index], kind="stable")][:_MOST_SADDLES]
    return np.asarray(order[strength[order] > 0.15 * strength.max(initial=0.0)])


def _vertex(before: Array, at: Array, after: Array) -> Array:
    """Offset of the top of the parabola through three points."""
    bend = before - 2 * at + after
    return np.asarray(np.where(bend < 0, 0.5 * (before - after) / np.where(bend < 0, bend, -1.0), 0.0))


def pose_from_marks(luma: Array, plan: Plan, raster: Raster) -> Warp:
    """Warp of the second degree through the marks found (affine when few are).

    Raises
    ------
    UnscorableFrame
        When no pose explains enough of the marks.
    """
    saddles = find_saddles(luma, plan.marks[0].radius * raster.height_lines)
    places = np.array([(mark.x, mark.y) for mark in plan.marks])
    scale = np.array([raster.width_samples, raster.height_lines])
    seen = (saddles.points - [raster.left, raster.top]) / scale
    found = _assign(places, plan.marks, seen, saddles.hands)
    if found is None:
        raise UnscorableFrame("the pattern of the plan is not there")
    marks, points = found
    degree = 2 if len(marks) >= 9 else 1
    return fit_warp(places[marks], saddles.points[points], degree)


def _assign(places: Array, marks: tuple[Mark, ...], seen: Array, hands: Array) -> tuple[Array, Array] | None:
    """Index pairs (mark, saddle) of the best pose, or None."""
    mark_hands = np.array([mark.hand for mark in marks])
    allowed = (mark_hands[:, None] == hands[None, :]) & (np.abs(seen[None] - places[:, None]) < _REACH).all(2)
    best: tuple[float, Array, Array] | None = None
    triples = _triples(tuple(map(tuple, places)))
    for start in range(0, len(triples), _BATCH):
        for triple in triples[start : start + _BATCH]:
            for affine in _poses(places, triple, seen, allowed):
                trial = _grow(affine, places, seen, allowed)
                if trial is not None and (best is None or trial[0] > best[0]):
                    best = trial
            if best is not None and best[0] > len(places) - 1.5:
                return best[1], best[2]
        if best is not None and best[0] >= len(places) - 3:
            break
    if best is None or len(best[1]) < _FEWEST:
        return None
    return best[1], best[2]


@cache
def _triples(places: tuple[tuple[float, float], ...]) -> tuple[tuple[int, int, int], ...]:
    """Triples of marks that span a good part of the picture, in a mixed but fixed order."""
    points = np.array(places)
    found = []
    for i, j, k in combinations(range(len(points)), 3):
        (ax, ay), (bx, by) = points[j] - points[i], points[k] - points[i]
        if abs(ax * by - ay * bx) > 0.1:
            found.append((i, j, k))
    order = np.random.default_rng(0).permutation(len(found))
    return tuple(found[index] for index in order[:_MOST_TRIPLES])


def _poses(places: Array, triple: tuple[int, int, int], seen: Array, allowed: Array) -> Array:
    """Plausible affine poses through a triple: the few that explain most, (k, 3, 2)."""
    options = [np.nonzero(allowed[mark])[0] for mark in triple]
    if any(len(option) == 0 for option in options):
        return np.empty((0, 3, 2))
    i, j, k = (part.ravel() for part in np.meshgrid(*options, indexing="ij"))
    corners = np.concatenate([places[list(triple)], np.ones((3, 1))], 1)
    poses = np.linalg.inv(corners) @ np.stack([seen[i], seen[j], seen[k]], 1)
    size_x, size_y = poses[:, 0, 0], poses[:, 1, 1]
    fits = (np.abs(size_x - 1) < 0.24) & (np.abs(size_y - 1) < 0.24) & (np.abs(size_x - size_y) < 0.25)
    fits &= (np.abs(poses[:, 0, 1]) < 0.12) & (np.abs(poses[:, 1, 0]) < 0.12)
    poses = poses[fits]
    if len(poses) == 0:
        return np.empty((0, 3, 2))
    predicted = np.concatenate([places, np.ones((len(places), 1))], 1) @ poses
    distance = np.abs(predicted[:, :, None] - seen[None, None]).max(3)
    distance[:, ~allowed] = 1.0
    nearest = distance.min(2)
    count = np.sum(nearest < 0.025, 1) - nearest.mean(1)
    return np.asarray(poses[np.argsort(-count)[:2]])


def _grow(affine: Array, places: Array, seen: Array, allowed: Array) -> tuple[float, Array, Array] | None:
    """Take in marks that fit, bend the pose to them, and score it: marks explained less their misfit."""
    predicted = places @ affine[:2] + affine[2]
    marks = points = np.empty(0, dtype=int)
    for reach in (0.03, 0.02, 0.012, 0.012):
        distance = np.hypot(*(predicted[:, None] - seen[None]).transpose(2, 0, 1))
        distance[~allowed] = 1.0
        points = distance.argmin(1)
        marks = np.nonzero(distance[np.arange(len(places)), points] < reach)[0]
        if len(marks) < 4:
            return None
        points = points[marks]
        warp = fit_warp(places[marks], seen[points], 2 if len(marks) >= 9 else 1)
        predicted = warp.to_frame(places)
    misfit = float(np.hypot(*(predicted[marks] - seen[points]).T).mean())
    return len(marks) - 100.0 * misfit, marks, points
