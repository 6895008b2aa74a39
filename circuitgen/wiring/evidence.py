"""What was recorded, as the likelihood sees it: targets, sample sizes, slopes."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.sparse import csr_array
from scipy.special import xlog1py, xlogy

from circuitgen.wiring.observation import Entries, observe

# A number without a sample size is to be met exactly: it weighs as a very large one.
EXACT_N = 10_000_000
_LEAST_P = 1e-12
_LEAST_SD = 1e-3


@dataclass(frozen=True)
class Reading:
    """The evidence at one place: what is missing to it, slopes, noise, likelihood.

    Attributes
    ----------
    missing : float (observations,)
        Recorded minus predicted.
    slope : sparse (observations, 3 x units)
        Of the predictions in eta, tau and t2 of the units.
    noise : float (observations,)
        Variance of each observation about its prediction.
    log_likelihood : float
    """

    missing: np.ndarray
    slope: csr_array
    noise: np.ndarray
    log_likelihood: float


@dataclass(frozen=True)
class Target:
    """Normal targets (observations,) and their variances."""

    value: np.ndarray
    noise: np.ndarray


@dataclass(frozen=True)
class Evidence:
    """Recorded numbers over pooled pairs; the rows of each kind index `entries.row`.

    Attributes
    ----------
    pathways : int (units,)
        Codes of the pathways that any row pools, increasing.
    bent : bool (units,)
        Pathways whose spread of synapses was recorded: their t2 is free.
    middle : float (units,)
        Number of synapses about which a spread bends the law.
    counted, connected, tested : (rows with counts,)
        Row, connected and tested pairs; not whole where a probability stands for them.
    mean_row, mean, mean_error : (rows with synapses,)
        Row, mean number of synapses of connections, its standard error.
    sd_row, sd, sd_n : (rows with a spread,)
    total_row, total, total_error : (presynaptic types with a bouton density,)
        Row whose weights add up to synapses per length of axon; its log and error.
    """

    entries: Entries
    pathways: np.ndarray
    bent: np.ndarray
    middle: np.ndarray
    counted: np.ndarray
    connected: np.ndarray
    tested: np.ndarray
    mean_row: np.ndarray
    mean: np.ndarray
    mean_error: np.ndarray
    sd_row: np.ndarray
    sd: np.ndarray
    sd_n: np.ndarray
    total_row: np.ndarray
    total: np.ndarray
    total_error: np.ndarray

    @property
    def size(self) -> int:
        """Number of observations."""
        return self.rows.size

    @cached_property
    def rows(self) -> np.ndarray:
        """Row of every observation: counts, means, spreads, totals."""
        return np.concatenate([self.counted, self.mean_row, self.sd_row, self.total_row])

    @cached_property
    def _parts(self) -> list[slice]:
        """Where counts, means, spreads and totals lie among the observations."""
        sizes = [
            part.size
            for part in (self.counted, self.mean_row, self.sd_row, self.total_row)
        ]
        edges = np.cumsum([0, *sizes])
        return [slice(a, b) for a, b in zip(edges[:-1], edges[1:], strict=True)]

    @cached_property
    def _pattern(self):
        """Sparse pattern of the slopes: pairs, observations, and the CSR arrays."""
        rows = np.arange(self.entries.rows_n + 1)
        first = np.searchsorted(self.entries.pair_row, rows)
        count = np.diff(first)[self.rows]
        begin = np.concatenate([[0], np.cumsum(count)])
        pair = np.arange(begin[-1]) + np.repeat(first[self.rows] - begin[:-1], count)
        observation = np.repeat(np.arange(self.size), count)
        unit = self.entries.pair_unit[pair]
        columns = unit[:, None] + np.arange(3) * self.pathways.size
        return pair, observation, columns.reshape(-1), 3 * begin

    def _predict(self, place: np.ndarray):
        """Return predictions, counts as p, and slopes (pattern, 3)."""
        seen = observe(self.entries, *np.split(place, 3), self.middle)
        pair, observation, _, _ = self._pattern
        p = np.maximum(seen.p[self.rows], 1e-300)
        first, second = seen.first[self.rows], seen.second[self.rows]
        mean, square = first / p, second / p
        sd = np.sqrt(np.maximum(square - mean**2, _LEAST_SD**2))
        log_first = np.log(np.maximum(first, 1e-300))
        value = seen.p[self.rows].copy()
        slope = seen.p_slope[pair]
        counts, means, spreads, totals = self._parts
        value[counts] = np.clip(value[counts], _LEAST_P, 1 - _LEAST_P)
        value[means], value[spreads] = mean[means], sd[spreads]
        value[totals] = log_first[totals]
        kind = np.searchsorted([p.stop for p in self._parts[:3]], observation, "right")
        some = np.flatnonzero(kind)
        if some.size:
            # Given connection, everything is a quotient by p or a log.
            at, o, k = pair[some], observation[some], kind[some][:, None]
            by_p, of_mean = 1.0 / p[o, None], mean[o, None]
            first_slope = seen.first_slope[at]
            mean_slope = (first_slope - of_mean * slope[some]) * by_p
            square_slope = seen.second_slope[at] - square[o, None] * slope[some]
            sd_slope = square_slope * by_p - 2 * of_mean * mean_slope
            sd_slope /= 2 * sd[o, None]
            total_slope = first_slope / np.maximum(first[o, None], 1e-300)
            slope[some] = np.choose(k - 1, [mean_slope, sd_slope, total_slope])
        return value, slope

    def _sparse(self, slope: np.ndarray) -> csr_array:
        _, _, columns, begin = self._pattern
        shape = (self.size, 3 * self.pathways.size)
        return csr_array((slope.reshape(-1), columns, begin), shape=shape)

    @cached_property
    def _recorded(self) -> np.ndarray:
        shares = self.connected / self.tested
        return np.concatenate([shares, self.mean, self.sd, self.total])

    @cached_property
    def _fixed_noise(self) -> np.ndarray:
        """Variances of all observations but the counts."""
        sd_error = np.maximum(self.sd, _LEAST_SD) ** 2
        sd_error = sd_error / (2.0 * np.maximum(self.sd_n - 1, 1))
        return np.concatenate([self.mean_error**2, sd_error, self.total_error**2])

    def read(self, place: np.ndarray) -> Reading:
        """Compare the recorded numbers with the laws at a place (3 x units,)."""
        value, slope = self._predict(place)
        p, k, n = value[self._parts[0]], self.connected, self.tested
        noise = np.concatenate([p * (1 - p) / n, self._fixed_noise])
        missing = self._recorded - value
        others = slice(p.size, None)
        log_likelihood = float((xlogy(k, p) + xlog1py(n - k, -p)).sum())
        log_likelihood -= 0.5 * float((missing[others] ** 2 / noise[others]).sum())
        return Reading(missing, self._sparse(slope), noise, log_likelihood)

    def in_log_odds(self, reading: Reading, place: np.ndarray) -> Target:
        """Return the evidence as normal targets, counts by their log odds.

        The log odds of what is seen are far closer to normal than shares are, and no
        target in them is out of reach of every probability.
        """
        value, _, scale = self.predicted(place)
        return Target(value + reading.missing * scale, reading.noise * scale**2)

    def predicted(self, place: np.ndarray):
        """Return predictions, their slopes, and the scale; counts by log odds."""
        value, slope = self._predict(place)
        counts, scale = self._parts[0], np.ones(self.size)
        p = value[counts]
        scale[counts] = 1.0 / (p * (1.0 - p))
        value[counts] = np.log(p) - np.log1p(-p)
        return value, self._sparse(slope * scale[self._pattern[1], None]), scale
