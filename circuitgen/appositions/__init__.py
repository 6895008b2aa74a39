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
from circuitgen.appositions.slices import (
    Placements,
    Slice,
    kept_sites,
    make_paths,
    pair_weight,
    place_slices,
)

__all__ = [
    "TARGET_BITS",
    "TARGET_NAMES",
    "Appositions",
    "Placements",
    "Scene",
    "Slice",
    "TargetIndex",
    "find_appositions",
    "index_targets",
    "kept_sites",
    "make_paths",
    "make_scene",
    "pair_weight",
    "place_slices",
    "reachable_cells",
    "target_bits",
]
