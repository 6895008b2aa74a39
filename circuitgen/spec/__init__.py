"""The spec file: models, loading with line numbers, starter spec."""

from circuitgen.spec.document import Document, read_document
from circuitgen.spec.fields import FileName, LengthUm, Name, NotNegative, Positive
from circuitgen.spec.load import load_spec, parse_groups
from circuitgen.spec.models import (
    AppositionRules,
    CellType,
    ColumnSpec,
    Conduction,
    Layer,
    Spec,
)
from circuitgen.spec.recordings import COLUMNS as RECORDING_COLUMNS
from circuitgen.spec.recordings import Recording, read_recordings
from circuitgen.spec.starter import write_starter
from circuitgen.spec.validation import Part, RuleError, validate_document

__all__ = [
    "RECORDING_COLUMNS",
    "AppositionRules",
    "CellType",
    "ColumnSpec",
    "Conduction",
    "Document",
    "FileName",
    "Layer",
    "LengthUm",
    "Name",
    "NotNegative",
    "Part",
    "Positive",
    "Recording",
    "RuleError",
    "Spec",
    "load_spec",
    "parse_groups",
    "read_document",
    "read_recordings",
    "validate_document",
    "write_starter",
]
