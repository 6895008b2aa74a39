"""The tables of a run folder, declared."""

from __future__ import annotations

from circuitgen.core.tables import Column, Table

_PRE = Column("pre_cell_id", "int32", "presynaptic cell")
_POST = Column("post_cell_id", "int32", "postsynaptic cell")
_PRE_TYPE = Column("pre_type", "name", "presynaptic cell type")
_POST_TYPE = Column("post_type", "name", "postsynaptic cell type")
_WINDOW_COLUMNS = (
    Column("distance_low_um", "float64", "window of the probabilities", True),
    Column("distance_high_um", "float64", "window of the probabilities", True),
)

CELLS = Table(
    "cells",
    "cell",
    (
        Column("cell_id", "int32", "number of the cell, from 0"),
        Column("cell_type", "name", "cell type of the spec"),
        Column("layer", "name", "layer that holds the soma"),
        Column("sign", "name", "excitatory or inhibitory"),
        Column("morphology", "name", "reconstruction, file name without ending"),
        Column("x_um", "float64", "soma centre, tangential"),
        Column("y_um", "float64", "soma centre, tangential"),
        Column("z_um", "float64", "soma centre, height above the white matter"),
        Column("depth_um", "float64", "depth of the soma centre below the pia"),
        Column("azimuth_deg", "float64", "turn about z, counter-clockwise from the pia"),
    ),
    ("cell_id",),
)

PAIRS = Table(
    "pairs",
    "ordered pair of cells with at least one apposition",
    (
        _PRE,
        _POST,
        Column("appositions_n", "int32", "appositions of the pair"),
        Column("soma_distance_um", "float32", "distance of the soma centres in space"),
        Column("p_connect", "float32", "probability of at least one synapse, as drawn"),
        Column("p_connect_low", "float32", "posterior 5 % point"),
        Column("p_connect_high", "float32", "posterior 95 % point"),
        Column(
            "synapses_expected", "float32", "expected synapses, unconnected included"
        ),
    ),
    ("pre_cell_id", "post_cell_id"),
)

_EDGE_COLUMNS = (
    _PRE,
    _POST,
    Column("synapses_n", "int32", "synapses of the connection"),
    Column("appositions_n", "int32", "appositions of the pair"),
    Column("p_connect", "float32", "probability that the pair had to connect"),
    Column("delay_ms", "float32", "mean delay of the synapses"),
)

EDGES = Table(
    "edges",
    "connection of the drawn circuit",
    _EDGE_COLUMNS,
    ("pre_cell_id", "post_cell_id"),
)

EDGES_TEXT = Table(
    "edges (CSV)",
    "connection of the drawn circuit",
    (*_EDGE_COLUMNS, _PRE_TYPE, _POST_TYPE),
    ("pre_cell_id", "post_cell_id"),
)

SYNAPSES = Table(
    "synapses",
    "synapse, those of a pair from the smallest gap upward",
    (
        _PRE,
        _POST,
        Column("pre_segment", "int32", "SWC sample that ends the axon's piece"),
        Column("pre_fraction", "float32", "0 at that sample's parent, 1 at the sample"),
        Column("post_segment", "int32", "SWC sample that ends the target's piece"),
        Column("post_fraction", "float32", "0 at that sample's parent, 1 at the sample"),
        Column("target", "name", "soma, axon_initial_segment, basal or apical"),
        Column("x_um", "float32", "place on the target's centre line"),
        Column("y_um", "float32", "place on the target's centre line"),
        Column("z_um", "float32", "place on the target's centre line"),
        Column("gap_um", "float32", "distance between the surfaces, 0 where they meet"),
        Column("axon_path_um", "float32", "along the axon from the soma"),
        Column("dendrite_path_um", "float32", "along the target from the soma"),
        Column("delay_ms", "float32", "axon path / conduction speed + synaptic delay"),
    ),
    ("pre_cell_id", "post_cell_id", "gap_um"),
)

PATHWAYS = Table(
    "pathways",
    "pathway: ordered pair of cell types",
    (
        _PRE_TYPE,
        _POST_TYPE,
        Column("pairs_n", "int64", "ordered pairs of cells"),
        Column("touching_pairs_n", "int64", "of them with an apposition"),
        Column("appositions_mean", "float64", "appositions per touching pair", True),
        Column("recorded", "bool", "a recording with use: fit covers the pathway"),
        *_WINDOW_COLUMNS,
        Column("p_connect", "float64", "posterior median in the window", True),
        Column("p_connect_low", "float64", "5 % point: 90 % interval", True),
        Column("p_connect_high", "float64", "95 % point: 90 % interval", True),
        Column("p_connect_low_50", "float64", "25 % point: 50 % interval", True),
        Column("p_connect_high_50", "float64", "75 % point: 50 % interval", True),
        Column("p_drawn", "float64", "of the law that the circuit is drawn with", True),
        Column("p_ceiling", "float64", "share of pairs that touch in the window", True),
        Column("synapses_mean", "float64", "synapses per connection, median", True),
        Column("synapses_mean_low", "float64", "5 % point of the mean", True),
        Column("synapses_mean_high", "float64", "95 % point of the mean", True),
        Column("synapses_mean_low_50", "float64", "25 % point of the mean", True),
        Column("synapses_mean_high_50", "float64", "75 % point of the mean", True),
    ),
    ("pre_type", "post_type"),
)

CURVES = Table(
    "curves",
    "pathway and bin of the distance between somata in space",
    (
        _PRE_TYPE,
        _POST_TYPE,
        Column("distance_low_um", "float64", "bin"),
        Column("distance_high_um", "float64", "bin"),
        Column("pairs_n", "int64", "ordered pairs of the circuit in the bin"),
        Column("p_ceiling", "float64", "share of pairs that touch", True),
        Column("p_connect_low", "float64", "posterior 5 % point", True),
        Column("p_connect", "float64", "posterior median", True),
        Column("p_connect_high", "float64", "posterior 95 % point", True),
    ),
    ("pre_type", "post_type", "distance_low_um"),
)

LAWS = Table(
    "laws",
    "posterior draw and pathway",
    (
        Column(
            "draw", "int32", "0: the law that the circuit is drawn with; draws from 1"
        ),
        _PRE_TYPE,
        _POST_TYPE,
        Column("t0", "float64", "exponent of connection; -inf: pairs never connect"),
        Column("t1", "float64", "exponent of a synapse"),
        Column("t2", "float64", "exponent of squared synapses"),
    ),
    ("draw", "pre_type", "post_type"),
)

WINDOWS = Table(
    "windows",
    "window, pathway and kind of pair",
    (
        Column("recording_row", "int32", "row of the recording; 0: all pairs"),
        _PRE_TYPE,
        _POST_TYPE,
        Column("appositions_n", "int32", "appositions of the pair"),
        Column("lost_n", "int32", "of them lost to the protocol: cut off in a slice"),
        Column("pairs", "float64", "pairs; in a slice by their chance to be patched"),
    ),
    ("recording_row", "pre_type", "post_type", "appositions_n", "lost_n"),
)

FIT = Table(
    "fit",
    "recording",
    (
        Column("row", "int32", "data row of the recordings, from 1"),
        Column("source", "text", "as given"),
        _PRE_TYPE,
        _POST_TYPE,
        Column("use", "name", "fit or audit"),
        Column("distance_kind", "name", "soma or lateral"),
        Column("distance_low_um", "float64", "window", True),
        Column("distance_high_um", "float64", "window", True),
        Column("slice_thickness_um", "float64", "slice; null where none", True),
        Column("soma_depth_low_um", "float64", "somata below the face", True),
        Column("soma_depth_high_um", "float64", "somata below the face", True),
        Column("tested_n", "int64", "pairs tested", True),
        Column("connected_n", "int64", "of them connected", True),
        Column("p_measured", "float64", "measured probability", True),
        Column("p_measured_low", "float64", "Wilson's 95 % interval", True),
        Column("p_measured_high", "float64", "Wilson's 95 % interval", True),
        Column("p_fitted", "float64", "of the laws under the row's protocol", True),
        Column("p_fitted_low", "float64", "posterior 5 % point", True),
        Column("p_fitted_high", "float64", "posterior 95 % point", True),
        Column("p_realised", "float64", "of the drawn circuit under the protocol", True),
        Column("pairs_in_window", "float64", "pairs; in a slice by their chance"),
        Column("z", "float64", "(measured - fitted) / sampling error of n pairs", True),
        Column("synapses_mean_measured", "float64", "per connection", True),
        Column("synapses_mean_fitted", "float64", "of the laws", True),
        Column("synapses_mean_realised", "float64", "of the drawn circuit", True),
        Column("synapses_sd_measured", "float64", "their spread", True),
        Column("synapses_sd_fitted", "float64", "of the laws", True),
        Column("synapses_sd_realised", "float64", "of the drawn circuit", True),
        Column("synapses_pairs_n", "int64", "connections measured", True),
        Column("reciprocal_tested_n", "int64", "unordered pairs tested both ways", True),
        Column("reciprocal_connected_n", "int64", "of them connected both ways", True),
        Column("cluster_size", "int32", "cells recorded together", True),
        Column("reciprocal_fitted", "float64", "share of the laws", True),
        Column("reciprocal_realised", "float64", "share of the drawn circuit", True),
        Column("feasible", "bool", "false: no law meets the row; see the note"),
        Column("note", "text", "in plain words"),
    ),
    ("row",),
)

ALL_TABLES = (
    CELLS,
    PAIRS,
    EDGES,
    EDGES_TEXT,
    SYNAPSES,
    PATHWAYS,
    CURVES,
    FIT,
    LAWS,
    WINDOWS,
)


def dictionary_markdown() -> str:
    """Return the data dictionary as Markdown, one section per table."""
    parts = []
    for table in ALL_TABLES:
        parts.append(f"### {table.name}\n\nOne row per {table.row}; sorted by")
        parts[-1] += f" {', '.join(table.sort_key)}.\n"
        lines = ["| column | type | null | meaning |", "|---|---|---|---|"]
        for column in table.columns:
            null = "yes" if column.nullable else ""
            lines.append(
                f"| `{column.name}` | {column.dtype} | {null} | {column.meaning} |"
            )
        parts.append("\n".join(lines) + "\n")
    return "\n".join(parts)
