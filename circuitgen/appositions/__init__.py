"""Every place where an axon comes close to another cell."""

from circuitgen.appositions.scene import (
    TARGET_BITS,
    TARGET_NAMES,
    Scene,
    make_scene,
    target_bits,
)
from circuitgen.appositions.search import (
    Appositions,
    TargetIndex,
    find_appositions,
    index_targets,
    reachable_cells,
)

__all__ = [
    "TARGET_BITS",
    "TARGET_NAMES",
    "Appositions",
    "Scene",
    "TargetIndex",
    "find_appositions",
    "index_targets",
    "make_scene",
    "reachable_cells",
    "target_bits",
]
