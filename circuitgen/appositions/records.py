"""Arrays that travel together between the search and its kernels."""

from __future__ import annotations

from collections import namedtuple

# Capsules of all arbors, one after another. Arrays by segment: start, end (n, 3),
# radii (n,), index of the segment in its arbor. `first` (arbors + 1): where each
# arbor begins. Axons also come in groups of a few connected segments, which one capsule
# holds: group_bounds (groups + 1), its ends and radius.
Axons = namedtuple(
    "Axons",
    "first start end start_radius end_radius segment group_first group_bounds"
    " group_start group_end group_radius",
)
Targets = namedtuple("Targets", "first start end start_radius end_radius segment kind")
# Cells: arbor (n,), position (n, 3), turn (n, 2) = cosine and sine of the azimuth,
# mask (n,) = bits of the target kinds that the cell's axon may contact.
Placed = namedtuple("Placed", "arbor position turn mask")
# A box of voxels: corner `origin`, voxel sizes and counts along x, y, z, periods in x
# and y (0: open).
Grid = namedtuple("Grid", "origin size shape period")
# Targets of some cells, sorted by voxel; voxel v holds rows first[v] to first[v + 1].
# `shapes` (8, n) holds single-precision copies relative to the grid's origin: middle,
# half, half length, radius. `exact` (n, 8) holds the placed capsule in double precision:
# start, way to the end, radius at the start, its change to the end. `owner` is the cell
# in the list, `segment` the segment of its arbor. `reach`: the largest half length plus
# radius; `most`: more rows than one group of axon segments can be near to.
Layer = namedtuple("Layer", "grid first shapes exact owner segment kind reach most")
# Largest gap, least spacing, room for the errors of single precision, autapses allowed.
Rules = namedtuple("Rules", "max_gap min_spacing slack autapses")
# What the axons of a task came close to: presynaptic cell of the task, cell of the
# layer, row of the axon, segment of the target in its arbor, gap, and fractions along
# both segments.
Hits = namedtuple("Hits", "pre owner axon target gap axon_fraction target_fraction")
# Pairs with at least one site, and their sites one pair after another, closest first.
Sites = namedtuple("Sites", "axon target axon_fraction target_fraction gap")
Pairs = namedtuple("Pairs", "post pre count")

# Memory that one task uses again and again: segment (2, 3), a placed axon segment,
# origin of the shapes copied, middle and half (3,) of the segment, marks of one run of
# rows, rows found around a group of segments with a copy of their shapes, and positions
# in that list of those found around one segment.
Work = namedtuple("Work", "segment origin middle half near found shapes few")
