"""Straight pieces between the corners of courses, and how they are cut."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.morphology.capsules import feet
from circuitgen.morphology.courses import Courses
from circuitgen.morphology.simplify import corners

_TINY = 1e-9


@dataclass(frozen=True)
class Chords:
    """n straight pieces, section after section.

    Attributes
    ----------
    start, end : int64 (n,)
        Points of the course at the two ends.
    length_um : float64 (n,)
        Length; 0 for a soma of one point only.
    base_um : float64 (n,)
        Length of all chords of the same section before.
    """

    start: np.ndarray
    end: np.ndarray
    length_um: np.ndarray
    base_um: np.ndarray


@dataclass(frozen=True)
class Parts:
    """m parts of chords: which chord, and where on it, from 0 to 1, each lies."""

    chord: np.ndarray
    begin: np.ndarray
    end: np.ndarray


def chords_of(c: Courses, single: np.ndarray) -> Chords:
    """Straighten courses; `single` points become chords of no length."""
    kept = np.flatnonzero(corners(c.point_um, c.radius_um, c.first))
    inner = c.section[kept[1:]] == c.section[kept[:-1]]
    start = np.concatenate([kept[:-1][inner], single])
    end = np.concatenate([kept[1:][inner], single])
    order = np.argsort(start, kind="stable")
    start, end = start[order], end[order]
    length = np.linalg.norm(c.point_um[end] - c.point_um[start], axis=1)
    return Chords(start, end, length, _within_section(length, c.section[start]))


def _within_section(length: np.ndarray, section: np.ndarray) -> np.ndarray:
    """Sum of the lengths before each chord in its own section."""
    begin = np.flatnonzero(np.diff(section, prepend=-1))
    before = np.cumsum(length) - length
    which = np.searchsorted(begin, np.arange(length.size), side="right") - 1
    return before - before[begin][which] if length.size else before


def stand_um(c: Courses, chords: Chords) -> np.ndarray:
    """Where points stand along the chords of their section, from its first point.

    Every point stands where it is nearest, but never before the point before it.
    """
    stand = np.zeros(len(c.point_um))
    if not chords.start.size:
        return stand
    here = np.arange(stand.size)
    which = np.searchsorted(chords.start, here, side="right") - 1
    which = np.maximum(which, 0)
    on = (here >= chords.start[which]) & (here <= chords.end[which])
    here, which = here[on], which[on]
    start, end = chords.start[which], chords.end[which]
    part = feet(c.point_um[here], c.point_um[start], c.point_um[end])
    part[here == end] = 1.0
    part[here == start] = 0.0
    furthest = np.maximum.accumulate(part + 2.0 * which) - 2.0 * which
    part = np.where(furthest > part + 1e-10, np.minimum(furthest, 1.0), part)
    stand[here] = chords.base_um[which] + part * chords.length_um[which]
    return stand


def cut(chords: Chords, path_um, stop_um, spacing_um: float) -> Parts:
    """Cut chords into equal parts no longer than a spacing.

    Parameters
    ----------
    chords : Chords
        n of them.
    path_um : float (n, 2)
        Path length from the soma at both ends.
    stop_um : float (n,)
        Path length at which the chord is cut in any case; negative for nowhere.
    spacing_um : float
        The longest part.
    """
    low, high = path_um.T
    crossed = (stop_um - low > _TINY) & (high - stop_um > _TINY)
    chord = np.repeat(np.arange(low.size), 1 + crossed)
    second = np.append(False, chord[1:] == chord[:-1])[: chord.size]
    at = (stop_um - low) / np.where(high > low, high - low, 1.0)
    begin = np.where(second, at[chord], 0.0)
    end = np.where(crossed[chord] & ~second, at[chord], 1.0)
    length = (end - begin) * chords.length_um[chord]
    parts = np.maximum(np.ceil(length / spacing_um - _TINY), 1).astype(np.int64)
    which = np.repeat(np.arange(parts.size), parts)
    rank = np.arange(which.size) - (np.cumsum(parts) - parts)[which]
    begin, end, parts = begin[which], end[which], parts[which]
    step = (end - begin) / parts
    last = np.where(rank + 1 == parts, end, begin + (rank + 1) * step)
    return Parts(chord[which], begin + rank * step, last)
