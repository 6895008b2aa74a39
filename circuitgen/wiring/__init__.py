"""The maximum-entropy law of wiring: fit, match, draw."""

from circuitgen.wiring.drawing import LawTables, choose_sites, draw_synapses, tabulate
from circuitgen.wiring.fitting import RowFit, Window, WiringFit, fit_pathways
from circuitgen.wiring.intervals import exact_interval, wilson_interval
from circuitgen.wiring.law import Law, Moments, moments
from circuitgen.wiring.match import Match, largest_probability, match

__all__ = [
    "Law",
    "LawTables",
    "Match",
    "Moments",
    "RowFit",
    "Window",
    "WiringFit",
    "choose_sites",
    "draw_synapses",
    "exact_interval",
    "fit_pathways",
    "largest_probability",
    "match",
    "moments",
    "tabulate",
    "wilson_interval",
]
