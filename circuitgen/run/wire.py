"""From candidate sites and laws to pairs, connections and synapses, block by block."""

from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv
import pyarrow.parquet as pq

from circuitgen.appositions import Appositions
from circuitgen.core.files import whole_file
from circuitgen.core.progress import Progress
from circuitgen.core.run_tables import EDGES, EDGES_TEXT, PAIRS, SYNAPSES
from circuitgen.core.tables import names_column
from circuitgen.run.circuit import Circuit, soma_offsets
from circuitgen.run.dyads import Dyads
from circuitgen.run.places import in_circuit_frame, places_on_cable, target_codes
from circuitgen.run.protocol import Protocol
from circuitgen.run.sites import SiteStore
from circuitgen.run.windows import PairBlock, SliceLoss, gather_sites
from circuitgen.wiring import (
    LawTables,
    PairChances,
    Reciprocity,
    choose_sites,
    draw_synapses,
    pair_chances,
)


@dataclass(frozen=True)
class Realised:
    """What the drawn circuit shows under a protocol, summed over touching pairs.

    `connected` pairs, their `synapses`, and the sum of the squares of these; in a
    slice what is seen there, by the pairs' chances to be patched.
    """

    connected: float
    synapses: float
    squares: float


@dataclass(frozen=True)
class Wiring:
    """What every block needs to be wired.

    `dyads` are the pairs that `reciprocity` couples.
    """

    circuit: Circuit
    tables: LawTables
    reciprocity: Reciprocity
    dyads: Dyads
    protocols: Sequence[Protocol]
    loss: SliceLoss
    folder: Path
    work: Path

    def part(self, table: str, block: int) -> Path:
        """Return a part file of a table that is a folder of parts."""
        return self.folder / f"{table}.parquet" / f"part-{block:05d}.parquet"

    def edges_part(self, block: int) -> Path:
        """Return the block's share of the edges, joined at the end."""
        return self.work / f"edges-{block:05d}.parquet"

    def tally_part(self, block: int) -> Path:
        """Return the block's counts of what was realised; written last."""
        return self.work / f"realised-{block:05d}.npy"


def _synapse_rows(wiring: Wiring, sites: Appositions, synapses: np.ndarray):
    """Return pair index and site index of every synapse of a block."""
    connected = np.flatnonzero(synapses)
    count = sites.count[connected]
    chosen = choose_sites(
        wiring.circuit.spec.seed,
        sites.pre[connected],
        sites.post[connected],
        count,
        synapses[connected],
    )
    pair = np.repeat(connected, count)
    inside = np.arange(pair.size) - np.repeat(np.cumsum(count) - count, count)
    site = np.repeat(sites.first[connected], count) + inside
    return pair[chosen], site[chosen]


def _synapse_columns(wiring: Wiring, sites: Appositions, pair, site):
    circuit = wiring.circuit
    pre, post = sites.pre[pair], sites.post[pair]
    axon = places_on_cable(
        circuit, pre, sites.pre_segment[site], sites.pre_fraction[site].astype(float)
    )
    target = places_on_cable(
        circuit, post, sites.post_segment[site], sites.post_fraction[site].astype(float)
    )
    x, y, z = in_circuit_frame(circuit, post, target.local_um).T
    conduction = circuit.spec.conduction
    delay = axon.path_um / conduction.axon_um_per_ms + conduction.synaptic_delay_ms
    return {
        "pre_cell_id": pre,
        "post_cell_id": post,
        "pre_segment": axon.number,
        "pre_fraction": axon.fraction.astype(np.float32),
        "post_segment": target.number,
        "post_fraction": target.fraction.astype(np.float32),
        "target": names_column(*target_codes(target.bit)),
        "x_um": x.astype(np.float32),
        "y_um": y.astype(np.float32),
        "z_um": z.astype(np.float32),
        "gap_um": sites.gap_um[site],
        "axon_path_um": axon.path_um.astype(np.float32),
        "dendrite_path_um": target.path_um.astype(np.float32),
        "delay_ms": delay.astype(np.float32),
    }


def _pair_columns(sites: Appositions, chances: PairChances, offsets):
    return {
        "pre_cell_id": sites.pre,
        "post_cell_id": sites.post,
        "appositions_n": sites.count,
        "soma_distance_um": np.linalg.norm(offsets, axis=1).astype(np.float32),
        "p_connect": chances.probability.astype(np.float32),
        "p_connect_low": chances.low.astype(np.float32),
        "p_connect_high": chances.high.astype(np.float32),
        "synapses_expected": chances.expected.astype(np.float32),
    }


def _edge_columns(pairs, synapses, pair, delay_ms):
    connected = np.flatnonzero(synapses)
    total = np.bincount(pair, weights=delay_ms, minlength=synapses.size)[connected]
    columns = {
        name: pairs[name][connected]
        for name in ("pre_cell_id", "post_cell_id", "appositions_n", "p_connect")
    }
    columns["synapses_n"] = synapses[connected]
    columns["delay_ms"] = (total / synapses[connected]).astype(np.float32)
    return columns


def _realised(wiring: Wiring, sites: Appositions, synapses, site) -> np.ndarray:
    """Return connected pairs, synapses and their squares by protocol, (n, 3)."""
    connected = np.flatnonzero(synapses)
    drawn = Appositions(
        pre=sites.pre[connected],
        post=sites.post[connected],
        first=np.concatenate([[0], np.cumsum(synapses[connected], dtype=np.int64)]),
        pre_segment=sites.pre_segment[site],
        post_segment=sites.post_segment[site],
        pre_fraction=sites.pre_fraction[site],
        post_fraction=sites.post_fraction[site],
        gap_um=sites.gap_um[site],
    )
    block = PairBlock(wiring.circuit, drawn.pre, drawn.post, drawn.count)
    out = np.zeros((len(wiring.protocols), 3))
    for row, protocol in enumerate(wiring.protocols):
        rows = block.selected(protocol)
        if protocol.cut is None:
            n, weight = block.appositions[rows].astype(float), 1.0
        else:
            first, chosen = gather_sites(drawn, block.order[rows])
            n, weight = wiring.loss.placed(
                protocol,
                block.pre[rows],
                block.post[rows],
                block.offsets[rows],
                first,
                chosen,
            )
        out[row] = (
            ((n > 0) * weight).sum(),
            (n * weight).sum(),
            (n.astype(float) ** 2 * weight).sum(),
        )
    return out


def wire_block(wiring: Wiring, block: int, sites: Appositions) -> None:
    """Draw one block and write its parts; the tally, written last, marks it done."""
    circuit = wiring.circuit
    pathway = circuit.pathway(sites.pre, sites.post)
    offsets = soma_offsets(circuit, sites.pre, sites.post)
    keyed = (circuit.spec.seed, sites.pre, sites.post, sites.count, pathway)
    chances = pair_chances(
        *keyed, wiring.tables, wiring.reciprocity, wiring.dyads.appositions
    )
    synapses = draw_synapses(*keyed, wiring.tables, chances.chance)
    pairs = _pair_columns(sites, chances, offsets)
    PAIRS.write_parquet(wiring.part("pairs", block), pairs)
    pair, site = _synapse_rows(wiring, sites, synapses)
    columns = _synapse_columns(wiring, sites, pair, site)
    SYNAPSES.write_parquet(wiring.part("synapses", block), columns)
    edges = _edge_columns(pairs, synapses, pair, columns["delay_ms"])
    EDGES.write_parquet(wiring.edges_part(block), edges)
    tally = _realised(wiring, sites, synapses, site)
    with whole_file(wiring.tally_part(block)) as partial, partial.open("wb") as out:
        np.save(out, tally)


def wire_all(wiring: Wiring, store: SiteStore, threads: int) -> list[Realised]:
    """Wire every block that an earlier try has not finished; sum what was realised."""
    total = np.zeros((len(wiring.protocols), 3))

    def work(block: int) -> int:
        done = wiring.tally_part(block).exists()
        if not done:
            wire_block(wiring, block, store.load(block))
        return block

    cells_n = wiring.circuit.cells.cells_n
    with Progress("drawing synapses", cells_n) as progress:
        pool = ThreadPoolExecutor(threads)
        try:
            for block in pool.map(work, range(len(store.bounds))):
                low, high = store.bounds[block]
                total += np.load(wiring.tally_part(block))
                progress.advance(high - low)
        finally:
            pool.shutdown(cancel_futures=True)
    return [Realised(*row) for row in total.tolist()]


def join_edges(wiring: Wiring, blocks_n: int) -> int:
    """Join the edges of all blocks to one Parquet and one CSV file; return how many."""
    types = wiring.circuit.cells.type_index
    names = pa.array(wiring.circuit.spec.type_names)
    rows = 0
    parquet = wiring.folder / "edges.parquet"
    text = wiring.folder / "edges.csv"
    plain = pa.schema(
        [
            pa.field(f.name, pa.string() if pa.types.is_dictionary(f.type) else f.type)
            for f in EDGES_TEXT.schema
        ]
    )
    with (
        whole_file(parquet) as partial,
        whole_file(text) as partial_text,
        pq.ParquetWriter(partial, EDGES.schema, compression="zstd") as out,
        pa_csv.CSVWriter(partial_text, plain) as out_text,
    ):
        for block in range(blocks_n):
            table = pq.read_table(wiring.edges_part(block))
            out.write_table(table)
            rows += table.num_rows
            for side in ("pre", "post"):
                cells = table[f"{side}_cell_id"].to_numpy()
                table = table.append_column(f"{side}_type", names.take(types[cells]))
            out_text.write_table(table.cast(plain))
    return rows
