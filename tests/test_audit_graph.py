"""Graph facts against networkx; a published network against its own probabilities."""

from __future__ import annotations

import networkx as nx
import numpy as np
import pytest
from builders_audit import circuit_of, row

from circuitgen.audit import AuditCircuit, audit, graph_facts
from circuitgen.audit.circuit import make_cells
from circuitgen.spec import Recording


def _graph(circuit):
    graph = nx.DiGraph()
    graph.add_nodes_from(range(circuit.cells.cells_n))
    graph.add_edges_from(zip(circuit.pre.tolist(), circuit.post.tolist(), strict=True))
    return graph


@pytest.mark.parametrize("n", [3, 12, 64, 65, 90])
@pytest.mark.parametrize("p", [0.0, 0.03, 0.25, 0.8, 1.0])
def test_facts_equal_networkx(n, p):
    random = np.random.default_rng(int(100 * p) + n)
    matrix = random.random((n, n)) < p
    matrix |= matrix.T & (random.random((n, n)) < 0.4)
    circuit = circuit_of(matrix, random.integers(0, 2, n))
    facts, graph = graph_facts(circuit), _graph(circuit)
    assert facts["triads"] == nx.triadic_census(graph)
    assert facts["density"] == pytest.approx(nx.density(graph))
    if graph.number_of_edges():
        assert facts["reciprocity"] == pytest.approx(nx.reciprocity(graph))
    types = circuit.cells.type_index
    for place, told in enumerate(facts["degrees"]):
        mine = np.flatnonzero(types == place)
        out = [graph.out_degree(int(cell)) for cell in mine]
        into = [graph.in_degree(int(cell)) for cell in mine]
        assert told["cells"] == mine.size
        if mine.size:
            assert told["out_degree_mean"] == pytest.approx(np.mean(out))
            assert told["in_degree_sd"] == pytest.approx(np.std(into))


# Potjans & Diesmann 2014 (Cereb Cortex 24:785), Tables: numbers of cells and connection
# probabilities of eight populations, target by row, source by column. Recalled from
# memory, not read; the sum of the cells, 77,169, is theirs.
POPULATIONS = ("23E", "23I", "4E", "4I", "5E", "5I", "6E", "6I")
CELLS = (20683, 5834, 21915, 5479, 4850, 1065, 14395, 2948)
PROBABILITY = np.array(
    [
        [0.1009, 0.1689, 0.0437, 0.0818, 0.0323, 0.0, 0.0076, 0.0],
        [0.1346, 0.1371, 0.0316, 0.0515, 0.0755, 0.0, 0.0042, 0.0],
        [0.0077, 0.0059, 0.0497, 0.135, 0.0067, 0.0003, 0.0453, 0.0],
        [0.0691, 0.0029, 0.0794, 0.1597, 0.0033, 0.0, 0.1057, 0.0],
        [0.1004, 0.0622, 0.0505, 0.0057, 0.0831, 0.3726, 0.0204, 0.0],
        [0.0548, 0.0269, 0.0257, 0.0022, 0.06, 0.3158, 0.0086, 0.0],
        [0.0156, 0.0066, 0.0211, 0.0166, 0.0572, 0.0197, 0.0396, 0.2252],
        [0.0364, 0.001, 0.0034, 0.0005, 0.0277, 0.008, 0.0658, 0.1443],
    ]
)


@pytest.fixture(scope="module")
def published():
    """A tenth of the cells, wired at random with the published probabilities."""
    assert sum(CELLS) == 77169
    random = np.random.default_rng(14)
    sizes = [round(n / 10) for n in CELLS]
    first = np.concatenate([[0], np.cumsum(sizes)])
    pre, post = [], []
    for target in range(8):
        for source in range(8):
            chance = PROBABILITY[target, source]
            hit = random.random((sizes[source], sizes[target])) < chance
            a, b = np.nonzero(hit)
            pre.append(a + first[source])
            post.append(b + first[target])
    pre, post = np.concatenate(pre), np.concatenate(post)
    others = pre != post
    pre, post = pre[others], post[others]
    order = np.lexsort((post, pre))
    types = np.repeat(np.arange(8), sizes)
    return AuditCircuit(
        POPULATIONS,
        make_cells(types, np.full((types.size, 3), np.nan)),
        pre[order].astype(np.int32),
        post[order].astype(np.int32),
        None,
        (0.0, 0.0),
        {},
    )


def _rows(n=4000):
    """Counts that are the published probabilities to rounding, of n tested pairs."""
    out = []
    for target in range(8):
        for source in range(8):
            k = round(n * PROBABILITY[target, source])
            out.append(
                Recording.model_construct(
                    row=len(out) + 1, pre_type=POPULATIONS[source],
                    post_type=POPULATIONS[target], tested_n=n, connected_n=k,
                    use="audit",
                )
            )  # fmt: skip
    return out


def test_a_network_passes_against_its_own_published_probabilities(published):
    assert published.cells.cells_n == pytest.approx(7717, abs=4)
    verdicts = {judged.verdict for judged in audit(published, _rows())}
    assert verdicts <= {"agrees", "cannot tell"}  # the pathways of probability 0


def test_two_rows_swapped_are_exactly_those_that_fail(published):
    rows = _rows()
    # 23E > 23E (0.1009) and 4I > 4I (0.1597).
    one, other = rows[0], rows[27]
    assert (one.connected_n, other.connected_n) == (404, 639)
    rows[0] = one.model_copy(update={"connected_n": other.connected_n})
    rows[27] = other.model_copy(update={"connected_n": one.connected_n})
    judged = audit(published, rows)
    failed = {j.row: j.verdict for j in judged if j.verdict.startswith("too")}
    assert failed == {1: "too low", 28: "too high"}


def test_a_pathway_of_doubled_probability_is_caught():
    random = np.random.default_rng(8)
    types = np.repeat([0, 1], 100)
    matrix = random.random((200, 200)) < 0.1
    matrix[:100, 100:] |= random.random((100, 100)) < 0.11
    circuit = circuit_of(matrix, types)
    rows = [
        row(1, 30, 300), row(2, 30, 300, post_type="b"), row(3, 30, 300, pre_type="b"),
        row(4, 30, 300, pre_type="b", post_type="b"),
    ]  # fmt: skip
    verdicts = [judged.verdict for judged in audit(circuit, rows)]
    assert verdicts == ["agrees", "too high", "agrees", "agrees"]
