"""Reconstructions: SWC intake, repair, arbors as arrays, stand-in growth."""

from circuitgen.morphology.describe import read_description
from circuitgen.morphology.growth import grow, grow_files

__all__ = [
    "grow",
    "grow_files",
    "read_description",
]
