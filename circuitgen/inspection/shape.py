"""Shape: directions and spread of cable along the file's axes, and how it bends.

Each number is compared with what 49 synthetic stand-ins and five real neurons (fly,
electron microscopy; the examples of a public library) show. Where a threshold is drawn
from them, the most extreme healthy value stands beside it.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.morphology.arbor import Arbor, Kind

_ALONG_COSINE = 0.6
_LEAST_BENDS = 50


@dataclass(frozen=True)
class Shape:
    """Shape along the file's x, y and z.

    Attributes
    ----------
    spread_um : float64 (3,)
        Root mean square distance of cable from its centre.
    thinnest : float
        Smallest over largest principal spread: 0 for a drawing in one plane.
    direction : float64 (3,)
        Root mean square of the cable's unit direction, weighted by length.
    bend : float64 (3,)
        Size of bends, relative: below 1 along an axis that is shortened.
    apical_up : float64 (3,)
        Unit vector from the soma to the middle of the apical cable; 0 without any.
    apical_away_um : float
        How far that middle is from the soma.
    """

    spread_um: np.ndarray
    thinnest: float
    direction: np.ndarray
    bend: np.ndarray
    apical_up: np.ndarray
    apical_away_um: float


def shape_of(arbor: Arbor) -> Shape | None:
    """Describe the neurites of an arbor; None without any cable."""
    neurite = arbor.kind != Kind.SOMA
    length = arbor.length_um[neurite]
    if not length.sum() > 0:
        return None
    span = (arbor.end_um - arbor.start_um)[neurite]
    middle = (arbor.end_um + arbor.start_um)[neurite] / 2
    away = middle - np.average(middle, axis=0, weights=length)
    spread = np.einsum("i,ij,ik->jk", length, away, away)
    spread += np.einsum("i,ij,ik->jk", length, span, span) / 12
    spread /= length.sum()
    principal = np.sqrt(np.maximum(np.linalg.eigvalsh(spread), 0.0))
    unit = span / np.where(length > 0, length, 1.0)[:, None]
    up, up_um = _apical(arbor)
    return Shape(
        spread_um=np.sqrt(np.diag(spread)),
        thinnest=float(principal[0] / principal[-1]),
        direction=np.sqrt(np.average(unit**2, axis=0, weights=length)),
        bend=_bends(arbor),
        apical_up=up,
        apical_away_um=up_um,
    )


def _apical(arbor: Arbor) -> tuple[np.ndarray, float]:
    apical = arbor.kind == Kind.APICAL
    length = arbor.length_um[apical]
    if not length.sum() > 0:
        return np.zeros(3), 0.0
    middle = (arbor.end_um + arbor.start_um)[apical] / 2
    middle = np.average(middle, axis=0, weights=length)
    away = float(np.linalg.norm(middle))
    return middle / (away or 1.0), away


def _bends(arbor: Arbor) -> np.ndarray:
    """Size of bends along three axes, of geometric mean 1.

    A branch that runs along x bends toward y as much as toward z, whatever the shape
    of the arbor, unless an axis is shortened. So branches along each axis give one
    ratio, and three ratios give the sizes by least squares. Ones where too few bend.
    """
    span, length = arbor.end_um - arbor.start_um, arbor.length_um
    children = np.bincount(arbor.parent[arbor.parent >= 0], minlength=length.size)
    row = np.flatnonzero((arbor.parent >= 0) & (arbor.kind != Kind.SOMA) & (length > 0))
    before = arbor.parent[row]
    goes_on = (children[before] == 1) & (length[before] > 0)
    goes_on &= arbor.kind[before] != Kind.SOMA
    row, before = row[goes_on], before[goes_on]
    one = span[before] / length[before, None]
    two = span[row] / length[row, None]
    course = one + two
    course /= np.maximum(np.linalg.norm(course, axis=1), 1e-9)[:, None]
    ratios, pairs = [], ((1, 2), (0, 2), (0, 1))
    for axis, (first, second) in enumerate(pairs):
        along = np.abs(course[:, axis]) > _ALONG_COSINE
        size = np.sqrt(((two - one)[along] ** 2).sum(axis=0))
        if along.sum() < _LEAST_BENDS or min(size[first], size[second]) <= 0:
            return np.ones(3)
        ratios.append(np.log(size[first] / size[second]))
    solve = np.linalg.pinv([[0, 1, -1], [1, 0, -1], [1, -1, 0]])
    return np.exp(solve @ np.array(ratios))
