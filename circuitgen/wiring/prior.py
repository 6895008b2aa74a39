"""What pathways have in common before anything is recorded.

For the log odds eta and the exponent tau alike: an intercept, effects of excitatory
presynaptic and postsynaptic types, of both at once and of a shared layer, deviations by
presynaptic type, by postsynaptic type, and by pathway. All are Gaussian; the spreads of
the deviations have half-normal priors and are averaged over, not plugged in.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.stats import norm

KINDS = ("eta", "tau")
# Half-normal scales of the spreads by presynaptic type, postsynaptic type and pathway.
SPREAD_SCALES = np.array([0.7, 0.7, 1.0, 0.4, 0.4, 0.5])
# Means and standard deviations of intercept, excitatory pre, excitatory post, both, and
# same layer. Wide: connection at five appositions anywhere between rare and sure, one
# to all of the appositions used.
_EFFECT_MEANS = {
    "eta": np.array([-0.5, 0, 0, 0, 0.0]),
    "tau": np.array([-1, 0, 0, 0, 0.0]),
}
_EFFECT_SDS = {
    "eta": np.array([2.0, 1.0, 1.0, 1.0, 1.0]),
    "tau": np.array([1.5, 0.7, 0.7, 0.7, 0.7]),
}
# Bend of a pathway whose spread of synapses was recorded.
BEND_SD = 1.0


@dataclass(frozen=True)
class Design:
    """Every pathway's place in the model, presynaptic type by postsynaptic type.

    Attributes
    ----------
    types_n : int
    effects : float (pathways, 5)
        Values of the five common effects.
    """

    types_n: int
    effects: np.ndarray

    @property
    def pathways_n(self) -> int:
        """Number of ordered pairs of types."""
        return self.types_n**2


def make_design(is_excitatory, home_layer) -> Design:
    """Return the design for cell types given by sign and by the layer they live in."""
    excitatory = np.asarray(is_excitatory, float)
    home = np.asarray(home_layer)
    n = excitatory.size
    pre, post = (part.reshape(-1) for part in np.indices((n, n)))
    same = (home[pre] == home[post]).astype(float)
    columns = [np.ones(n * n), excitatory[pre], excitatory[post]]
    columns += [excitatory[pre] * excitatory[post], same]
    return Design(n, np.column_stack(columns))


def spreads_of(score: np.ndarray) -> np.ndarray:
    """Turn standard normal scores (..., 6) into spreads under their priors."""
    return SPREAD_SCALES * norm.isf(norm.sf(score) / 2.0)


@dataclass(frozen=True)
class Prior:
    """The Gaussian prior of one kind at given spreads: F F' + own^2 I about a mean."""

    mean: np.ndarray
    features: np.ndarray
    own: float

    def spread(self, pathways: np.ndarray, weights: np.ndarray) -> np.ndarray:
        """Return covariance(all, pathways) @ weights; each pathway stands once."""
        out = self.features @ (self.features[pathways].T @ weights)
        out[pathways] += self.own**2 * weights
        return out

    def draw(self, common: np.ndarray, own: np.ndarray) -> np.ndarray:
        """Turn standard normals (draws, features), (draws, pathways) into draws."""
        return self.mean + common @ self.features.T + self.own * own


def make_priors(design: Design, spreads: np.ndarray) -> tuple[Prior, Prior]:
    """Return the priors of eta and of tau at six spreads."""
    n = design.types_n
    pre, post = np.divmod(np.arange(n * n), n)
    out = []
    for kind, (by_pre, by_post, own) in zip(KINDS, spreads.reshape(2, 3), strict=True):
        features = np.zeros((n * n, 5 + 2 * n))
        features[:, :5] = design.effects * _EFFECT_SDS[kind]
        features[np.arange(n * n), 5 + pre] = by_pre
        features[np.arange(n * n), 5 + n + post] = by_post
        out.append(Prior(design.effects @ _EFFECT_MEANS[kind], features, float(own)))
    return out[0], out[1]
