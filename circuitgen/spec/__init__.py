"""The spec file: models, loading with line numbers, starter spec."""

from circuitgen.spec.document import RuleError, read_document, validate_document
from circuitgen.spec.load import load_spec
from circuitgen.spec.models import Name, Part, PlacedCellType, Positive, Spec
from circuitgen.spec.recordings import COLUMNS as RECORDING_COLUMNS
from circuitgen.spec.recordings import Recording
from circuitgen.spec.starter import write_starter

__all__ = [
    "RECORDING_COLUMNS",
    "Name",
    "Part",
    "PlacedCellType",
    "Positive",
    "Recording",
    "RuleError",
    "Spec",
    "load_spec",
    "read_document",
    "validate_document",
    "write_starter",
]
