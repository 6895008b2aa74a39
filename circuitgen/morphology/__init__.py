"""Reconstructions: SWC intake, repair, arbors as arrays, stand-in growth."""

from circuitgen.morphology.arbor import Arbor, Kind
from circuitgen.morphology.build import build_arbor
from circuitgen.morphology.describe import read_description
from circuitgen.morphology.findings import Finding
from circuitgen.morphology.growth import grow, grow_files
from circuitgen.morphology.reconstruction import Reconstruction, read_reconstruction
from circuitgen.morphology.swc import write_swc

__all__ = [
    "Arbor",
    "Finding",
    "Kind",
    "Reconstruction",
    "build_arbor",
    "grow",
    "grow_files",
    "read_description",
    "read_reconstruction",
    "write_swc",
]
