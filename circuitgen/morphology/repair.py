"""Types and radii that files leave open; `reconstruction` states the rules."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.findings import Findings
from circuitgen.morphology.samples import Samples
from circuitgen.morphology.trees import nearest_stop

LEAST_RADIUS_UM = 0.1
NEURITES = (Kind.AXON, Kind.BASAL, Kind.APICAL)
_GLIA = 7


def drop_glia(samples: Samples, findings: Findings) -> Samples:
    """Leave glia out; what grew from it becomes loose."""
    glia = samples.kind == _GLIA
    text = "{n} of glia left out; they contact nobody"
    findings.repair("glia", text, samples.line[glia])
    return samples.taken(np.flatnonzero(~glia)) if glia.any() else samples


def settle_kinds(samples: Samples, findings: Findings) -> Samples:
    """Give samples of unknown type the type of their nearest ancestor that has one."""
    kind = samples.kind
    known = np.isin(kind, [Kind.SOMA, *NEURITES])
    text = "{n} of unknown type take their nearest ancestor's, or basal dendrite; "
    text += "they make and take contacts as that type"
    findings.repair("type_inherited", text, samples.line[~known])
    source = kind[nearest_stop(samples.parent, known)]
    source = np.where(np.isin(source, NEURITES), source, Kind.BASAL)
    return replace(samples, kind=np.where(known, kind, source))


def mend_radii(samples: Samples, findings: Findings) -> Samples:
    """Give neurite samples of no radius that of the nearest sample along the neurite."""
    radius, parent = samples.radius_um.copy(), samples.parent
    neurite = samples.kind != Kind.SOMA
    bad = neurite & (radius <= 0)
    if not bad.any():
        return samples
    text = "radii of zero or less take their nearest ancestor's, else a descendant's, "
    text += f"else {LEAST_RADIUS_UM:g} um, in {{n}}; gaps there are nominal"
    findings.repair("radius_inherited", text, samples.line[bad])
    begins = (parent < 0) | ~neurite[parent] | ~neurite
    _inherit(radius, parent, begins)
    # What no ancestor could give comes up from below, and down again to side branches.
    for row in np.flatnonzero(~begins & (radius[parent] <= 0))[::-1].tolist():
        if radius[row] > 0 and radius[parent[row]] <= 0:
            radius[parent[row]] = radius[row]
    _inherit(radius, parent, begins)
    radius[neurite & (radius <= 0)] = LEAST_RADIUS_UM
    return replace(samples, radius_um=radius)


def _inherit(radius: np.ndarray, parent: np.ndarray, begins: np.ndarray) -> None:
    """Give samples without radius that of the nearest ancestor of the same neurite."""
    source = nearest_stop(parent, begins | (radius > 0))
    np.copyto(radius, radius[source], where=radius <= 0)


def note_doubles(samples: Samples, findings: Findings) -> None:
    """Say how many samples stand where their parent stands; they do no harm."""
    child = (samples.parent >= 0) & (samples.kind != Kind.SOMA) & ~samples.bridged
    same = (samples.position_um == samples.begin_um).all(axis=1)
    text = "{n} where the sample before it is, passed over; connectivity is the same"
    findings.repair("doubled", text, samples.line[child & same])
