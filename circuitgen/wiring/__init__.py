"""The maximum-entropy law of wiring: fit, pool, draw."""

from circuitgen.wiring.drawing import (
    INTERVAL,
    LawTables,
    PairChances,
    choose_sites,
    draw_synapses,
    pair_chances,
    tabulate,
)
from circuitgen.wiring.fitting import RowFit, WiringFit, fit_pathways
from circuitgen.wiring.intervals import exact_interval, wilson_interval
from circuitgen.wiring.law import Law, Moments, moments
from circuitgen.wiring.laws import Laws, Shown, connection_table, show
from circuitgen.wiring.leave_out import LeftOut, leave_out
from circuitgen.wiring.match import Match, largest_probability, match
from circuitgen.wiring.pooling import DRAWS_N
from circuitgen.wiring.reciprocity import (
    Reciprocity,
    both_probability,
    fit_reciprocity,
)
from circuitgen.wiring.window import BoutonTotal, Window, entries_of

__all__ = [
    "DRAWS_N",
    "INTERVAL",
    "BoutonTotal",
    "Law",
    "LawTables",
    "Laws",
    "LeftOut",
    "Match",
    "Moments",
    "PairChances",
    "Reciprocity",
    "RowFit",
    "Shown",
    "Window",
    "WiringFit",
    "both_probability",
    "choose_sites",
    "connection_table",
    "draw_synapses",
    "entries_of",
    "exact_interval",
    "fit_pathways",
    "fit_reciprocity",
    "largest_probability",
    "leave_out",
    "match",
    "moments",
    "pair_chances",
    "show",
    "tabulate",
    "wilson_interval",
]
