"""Run folders, the order of stages, resume; runs opened again."""

from circuitgen.run.build import Outcome, build
from circuitgen.run.circuit import soma_offsets
from circuitgen.run.pair_counter import PairCounter
from circuitgen.run.protocol import Protocol, protocol_of, slice_of
from circuitgen.run.recorded import read_recorded
from circuitgen.run.reopen import ReopenedCircuit, read_provenance
from circuitgen.run.windows import PairBlock, SliceLoss, Tally

__all__ = [
    "Outcome",
    "PairBlock",
    "PairCounter",
    "Protocol",
    "ReopenedCircuit",
    "SliceLoss",
    "Tally",
    "build",
    "protocol_of",
    "read_provenance",
    "read_recorded",
    "slice_of",
    "soma_offsets",
]
