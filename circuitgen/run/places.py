"""Where synapses are: in space, along the cable, and in the SWC files."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from circuitgen.appositions import TARGET_BITS, TARGET_NAMES, target_bits
from circuitgen.run.circuit import Circuit


@dataclass(frozen=True)
class Places:
    """Places on the cable of n cells: SWC number and fraction, path, target bit.

    `local_um` (n, 3) is the point on the centre line in the arbor's own frame.
    """

    number: np.ndarray
    fraction: np.ndarray
    path_um: np.ndarray
    bit: np.ndarray
    local_um: np.ndarray


def _by_arbor(arbor_index: np.ndarray) -> Iterator[tuple[int, np.ndarray]]:
    """Yield each arbor with the rows that belong to it."""
    if not arbor_index.size:
        return
    order = np.argsort(arbor_index, kind="stable")
    arbors, begin = np.unique(arbor_index[order], return_index=True)
    for arbor, rows in zip(arbors, np.split(order, begin[1:]), strict=True):
        yield int(arbor), rows


def places_on_cable(circuit: Circuit, cells, segment, fraction) -> Places:
    """Look up places given as cell, segment of its arbor, and fraction along it."""
    n = len(cells)
    number, bit = np.zeros(n, np.int64), np.zeros(n, np.uint8)
    in_file, path, local = np.zeros(n), np.zeros(n), np.zeros((n, 3))
    for index, rows in _by_arbor(circuit.cells.arbor_index[cells]):
        arbor, own, along = circuit.arbors[index], segment[rows], fraction[rows]
        number[rows], in_file[rows] = arbor.place_in_file(own, along)
        begin, end = arbor.path_um[own], arbor.path_end_um[own]
        path[rows] = begin + along * (end - begin)
        bit[rows] = target_bits(arbor)[own]
        start = arbor.start_um[own]
        local[rows] = start + along[:, None] * (arbor.end_um[own] - start)
    return Places(number, in_file, path, bit, local)


def in_circuit_frame(circuit: Circuit, cells, local_um) -> np.ndarray:
    """Turn points of the arbors' frames into the circuit's, shape (n, 3)."""
    angle = np.deg2rad(circuit.cells.azimuth_deg[cells])
    cosine, sine = np.cos(angle), np.sin(angle)
    x, y, z = local_um.T
    turned = np.column_stack([cosine * x - sine * y, sine * x + cosine * y, z])
    return turned + circuit.cells.position_um[cells]


def target_codes(bit: np.ndarray) -> tuple[np.ndarray, list[str]]:
    """Return codes into the list of target names, and that list."""
    names = list(TARGET_BITS)
    code_of_bit = np.zeros(max(TARGET_NAMES) + 1, np.int32)
    for code, name in enumerate(names):
        code_of_bit[TARGET_BITS[name]] = code
    return code_of_bit[bit], names
