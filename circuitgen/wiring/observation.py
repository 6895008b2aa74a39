"""What recordings would show under given laws, with slopes: rows of pooled pairs.

A row pools pairs by pathway, by `a` appositions and by how many of them the protocol
loses (arbors cut at the faces of a slice). With Z(a) = 1 + exp(t0 + S_a), a pair is seen
connected with probability 1 - Z(lost) / Z(a); without a cut that is the law itself. Of
s synapses a hypergeometric number is seen, since every subset of sites is as likely.

Laws are given by eta = t0 + S_5, the log odds of connection at five appositions, by
tau = t1 + 2 t2 m and by t2, m being a fixed number of synapses: t0, t1 and t2 are too
strongly correlated to be pooled or searched over.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from circuitgen.wiring.observation_kernels import fill_sums, observe_entries

REFERENCE_APPOSITIONS = 5


def ways_and_moments(a, t1, t2) -> tuple[np.ndarray, np.ndarray]:
    """Return S_a and E[s], E[s^2], E[s^3], E[s^4] of a connected pair, row by row.

    Parameters
    ----------
    a : int (n,)
        Appositions; for 0 the first is -inf and the moments are 0.
    t1, t2 : float (n,)
        Exponents.

    Returns
    -------
    ways : float (n,)
    raw : float (4, n)
    """
    a = np.ascontiguousarray(a, np.int64)
    out = np.zeros((a.size, 5))
    fill_sums(a, np.ascontiguousarray(t1, float), np.ascontiguousarray(t2, float), out)
    return out[:, 0], out[:, 1:].T


@dataclass(frozen=True)
class Entries:
    """Pooled pairs of all rows, one entry for each (row, pathway, a, lost).

    `unit` numbers the pathways that any row pools, from 0; `weight` is the entry's share
    of its row's pairs, pairs without apposition left out (they are never connected).
    `pair` numbers the combinations of row and unit in order, of which `pair_row` and
    `pair_unit` tell what they are.
    """

    row: np.ndarray
    unit: np.ndarray
    a: np.ndarray
    lost: np.ndarray
    weight: np.ndarray
    pair: np.ndarray
    pair_row: np.ndarray
    pair_unit: np.ndarray
    rows_n: int
    units_n: int


def make_entries(row, unit, a, lost, weight, rows_n: int, units_n: int) -> Entries:
    """Return entries with their combinations of row and unit numbered."""
    code, pair = np.unique(row * max(units_n, 1) + unit, return_inverse=True)
    pair_row, pair_unit = np.divmod(code, max(units_n, 1))
    return Entries(
        row, unit, a, lost, weight, pair, pair_row, pair_unit, rows_n, units_n
    )


@dataclass(frozen=True)
class Seen:
    """What rows show, (rows,) each, with slopes in eta, tau and t2, (pairs, 3) each.

    `first` and `second` are E[s] and E[s^2] of the synapses seen, unconnected included.
    """

    p: np.ndarray
    first: np.ndarray
    second: np.ndarray
    p_slope: np.ndarray
    first_slope: np.ndarray
    second_slope: np.ndarray


def observe(entries: Entries, eta, tau, t2, middle) -> Seen:
    """Return what every row shows under the laws of the units.

    Parameters
    ----------
    entries : Entries
    eta, tau, t2, middle : float (units,)
        The laws; `middle` is the number of synapses m in tau = t1 + 2 t2 m.
    """
    t1 = tau - 2.0 * t2 * middle
    reference = np.zeros((eta.size, 5))
    fill_sums(np.full(eta.size, REFERENCE_APPOSITIONS), t1, t2, reference)
    shown = np.zeros((3, entries.rows_n))
    slopes = np.zeros((3, entries.pair_row.size, 3))
    observe_entries(
        entries.row, entries.unit, entries.pair, entries.a, entries.lost, entries.weight,
        eta, t1, t2, middle, reference, shown, slopes,
    )  # fmt: skip
    return Seen(*shown, *slopes)
