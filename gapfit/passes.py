"""Cutting one record into monotone passes: turning points, plateaus of a slow quantity, gaps."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

__all__ = ["digit", "gap_segments", "merged", "passes", "plateau_edges", "turning_points"]

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

LEAST_TURN = 0.03
"""A reversal counts once the abscissa has come back by this share of its range."""

LEAST_GAP = 6.0
"""A step counts as a gap beyond this multiple of the usual step."""


def turning_points(abscissa: FloatArray, threshold: float) -> list[int]:
    """Indices where a swept quantity reverses by more than a threshold, the two ends included.

    Parameters
    ----------
    abscissa : ndarray[n_point]
        In the order of the record; small jitter is ignored.
    threshold : float
        Least distance to come back.

    Returns
    -------
    list of int
    """
    change = np.sign(np.diff(abscissa))
    moving = np.flatnonzero(change)
    if moving.size == 0:
        return [0, len(abscissa) - 1]
    corners = moving[np.flatnonzero(np.diff(change[moving])) + 1]
    turns, best, heading = [0], 0, 0
    for index in (*corners.tolist(), len(abscissa) - 1):
        step = abscissa[index] - abscissa[best]
        if heading == 0 and abs(step) >= threshold:
            heading, best = int(np.sign(step)), index
        elif heading and step * heading >= 0:
            best = index
        elif heading and -step * heading >= threshold:
            turns.append(best)
            heading, best = -heading, index
    return [*turns, len(abscissa) - 1]


def plateau_edges(level: FloatArray, relative: float, reach: int = 5) -> list[int]:
    """Indices at which a slowly varying quantity begins a new plateau.

    Parameters
    ----------
    level : ndarray[n_point]
        Temperature, fixed field or current along the record.
    relative : float
        Least change of the running median, relative to the level.
    reach : int
        Points on either side that are compared.

    Returns
    -------
    list of int
        Without the first point.
    """
    if level.size < 2 * reach:
        return []
    windows = np.median(np.lib.stride_tricks.sliding_window_view(level, reach), axis=1)
    before, after = windows[:-reach], windows[reach:]
    size = min(before.size, after.size)
    before, after = before[:size], after[:size]
    jump = np.abs(after - before) / np.maximum(np.maximum(np.abs(after), np.abs(before)), 1e-300)
    steep = np.abs(np.diff(level)) / np.maximum(np.abs(level[1:]), 1e-300)
    edges: list[int] = []
    for start, stop in _runs(jump > relative):
        edge = start + reach - 1 + int(np.argmax(steep[start + reach - 1 : stop + reach])) + 1
        if steep[edge - 1] > 0.5 * relative:
            edges.append(edge)
    return edges


def _runs(mask: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """First and last index of each stretch of True."""
    padded = np.concatenate(([False], mask, [False])).astype(np.int8)
    change = np.diff(padded)
    starts, stops = np.flatnonzero(change == 1), np.flatnonzero(change == -1) - 1
    return list(zip(starts.tolist(), stops.tolist(), strict=True))


def passes(abscissa: FloatArray, cuts: list[int]) -> list[tuple[int, int]]:
    """Ranges [start, stop) of monotone passes of a record.

    Parameters
    ----------
    abscissa : ndarray[n_point]
        The swept quantity, in the order of the record.
    cuts : list of int
        Indices that must begin a new pass: blocks, plateaus of other quantities.

    Returns
    -------
    list of (int, int)
        A jump back to the start makes a pass of two rows, for the caller to drop.
    """
    threshold = LEAST_TURN * float(np.ptp(abscissa))
    bounds = sorted({0, len(abscissa), *cuts})
    found: list[tuple[int, int]] = []
    for start, stop in pairwise(bounds):
        piece = abscissa[start:stop]
        if np.ptp(piece) <= threshold or threshold == 0:
            found.append((start, stop))
            continue
        turns = turning_points(piece, threshold)
        ends = [*(start + turn for turn in turns[1:-1]), stop - 1]
        begin = start
        for end in ends:
            if end >= begin:
                found.append((begin, end + 1))
                begin = end + 1
    return found


def merged(abscissa: FloatArray, columns: FloatArray) -> tuple[FloatArray, FloatArray, IntArray]:
    """Points in rising order, those at one abscissa averaged.

    Parameters
    ----------
    abscissa : ndarray[n_point]
        The swept quantity.
    columns : ndarray[n_column, n_point]
        Readings.

    Returns
    -------
    abscissa : ndarray[n_different]
    columns : ndarray[n_column, n_different]
    first : ndarray[n_different] of int
        Index of the first point at each abscissa.
    """
    different, first, inverse, count = np.unique(
        abscissa, return_index=True, return_inverse=True, return_counts=True
    )
    if different.size == abscissa.size:
        return different, columns[:, first], first
    sums = np.stack([np.bincount(inverse, weights=column, minlength=different.size) for column in columns])
    return different, sums / count, first


def gap_segments(abscissa: FloatArray) -> IntArray:
    """Number of the piece between gaps that each point belongs to.

    Parameters
    ----------
    abscissa : ndarray[n_point]
        Rising.

    Returns
    -------
    ndarray[n_point] of int
        From 0. A step beyond six times the usual one of its surroundings is a gap (own choice).
    """
    step = np.diff(abscissa)
    if step.size < 3:
        return np.zeros(abscissa.size, dtype=np.int64)
    reach = min(25, step.size)
    running = np.median(np.lib.stride_tricks.sliding_window_view(step, reach), axis=1)
    usual = np.pad(running, (reach // 2, step.size - running.size - reach // 2), mode="edge")
    return np.concatenate(([0], np.cumsum(step > LEAST_GAP * usual))).astype(np.int64)


def digit(values: FloatArray) -> float:
    """Smallest difference between different readings: the digit of a quantised record.

    Returns
    -------
    float
        In the unit of the values; zero where all are equal.
    """
    different = np.unique(values)
    if different.size < 2:
        return 0.0
    steps = np.diff(different)
    scale = float(np.abs(different).max())
    steps = steps[steps > 1e-12 * scale]
    return float(steps.min()) if steps.size else 0.0
