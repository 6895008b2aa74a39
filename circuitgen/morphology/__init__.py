"""Reconstructions: SWC intake, repair, arbors as arrays, stand-in growth."""

from circuitgen.morphology.arbor import Arbor, Kind
from circuitgen.morphology.build import build_arbor
from circuitgen.morphology.growth import grow_files
from circuitgen.morphology.reconstruction import (
    Finding,
    Reconstruction,
    read_reconstruction,
)
from circuitgen.morphology.swc import write_swc

__all__ = [
    "Arbor",
    "Finding",
    "Kind",
    "Reconstruction",
    "build_arbor",
    "grow_files",
    "read_reconstruction",
    "write_swc",
]
