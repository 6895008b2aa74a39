"""Known bouton densities against the axon that the circuit holds."""

from __future__ import annotations

import numpy as np

from circuitgen.morphology.arbor import Kind
from circuitgen.run.circuit import Circuit
from circuitgen.run.places import in_circuit_frame
from circuitgen.wiring import BoutonTotal


def axon_inside_um(circuit: Circuit, cell_type: int) -> float:
    """Return the length of axon of a type's cells inside the volume.

    A segment counts with its middle; segments are no longer than the least spacing of
    appositions. With periodic edges nothing is outside.
    """
    cells, volume = circuit.cells, circuit.placement.volume
    total = 0.0
    for cell in np.flatnonzero(cells.type_index == cell_type):
        arbor = circuit.arbors[cells.arbor_index[cell]]
        axon = np.flatnonzero(arbor.kind == Kind.AXON)
        length = arbor.length_um[axon]
        middle = (arbor.start_um[axon] + arbor.end_um[axon]) / 2
        ids = np.full(axon.size, cell)
        points = in_circuit_frame(circuit, ids, middle)
        inside = np.ones(axon.size, bool)
        if circuit.wrap_um[0] > 0:
            inside = (points[:, 2] >= 0) & (points[:, 2] <= volume.thickness_um)
        else:
            inside = volume.contains(points)
        total += float(length[inside].sum())
    return total


def bouton_totals(circuit: Circuit, everything) -> list[BoutonTotal]:
    """Return the bouton densities of the spec with the pairs that they sum over.

    `everything` holds the histograms of all pairs by pathway.
    """
    totals = []
    for place, cell_type in enumerate(circuit.spec.cell_types):
        known = cell_type.bouton_density_per_um
        if known is None:
            continue
        axon_um = axon_inside_um(circuit, place)
        if axon_um > 0.0:
            mine = {p: h for p, h in everything.items() if p[0] == place}
            totals.append(BoutonTotal(place, known.mean, known.sd, axon_um, mine))
    return totals
