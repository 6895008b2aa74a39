"""Does a circuit agree with recordings? The fair test, row by row."""

from circuitgen.audit.circuit import AuditCircuit, read_run
from circuitgen.audit.degrees import read_degrees
from circuitgen.audit.foreign import read_foreign, read_mapping
from circuitgen.audit.graph import graph_facts
from circuitgen.audit.judge import LEVEL, Judgement, audit, overall
from circuitgen.audit.slices import SliceView
from circuitgen.audit.triads import read_triads

__all__ = [
    "LEVEL",
    "AuditCircuit",
    "Judgement",
    "SliceView",
    "audit",
    "graph_facts",
    "overall",
    "read_degrees",
    "read_foreign",
    "read_mapping",
    "read_run",
    "read_triads",
]
