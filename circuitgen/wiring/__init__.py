"""The maximum-entropy law of wiring: fit, match, draw."""

from circuitgen.wiring.drawing import (
    PairEstimates,
    choose_sites,
    draw_synapse_counts,
    evaluate_pairs,
)
from circuitgen.wiring.fitting import fit_pathways
from circuitgen.wiring.intervals import clopper_pearson_interval, wilson_interval
from circuitgen.wiring.law import Moments, moments
from circuitgen.wiring.match import Match, match
from circuitgen.wiring.pathway_laws import PathwayLaws, RowFit

__all__ = [
    "Match",
    "Moments",
    "PairEstimates",
    "PathwayLaws",
    "RowFit",
    "choose_sites",
    "clopper_pearson_interval",
    "draw_synapse_counts",
    "evaluate_pairs",
    "fit_pathways",
    "match",
    "moments",
    "wilson_interval",
]
