"""Every place where an axon comes close to another cell."""

from circuitgen.appositions.scene import TARGET_BITS, TARGET_NAMES, Scene, make_scene
from circuitgen.appositions.search import Appositions, find_appositions

__all__ = [
    "TARGET_BITS",
    "TARGET_NAMES",
    "Appositions",
    "Scene",
    "find_appositions",
    "make_scene",
]
