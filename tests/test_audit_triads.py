"""Counted triads: classes, the null at the circuit's distances, published counts."""

from __future__ import annotations

import networkx as nx
import numpy as np
import pytest
from builders_audit import circuit_of

from circuitgen.audit import audit, read_triads
from circuitgen.audit.graph import CLASSES
from circuitgen.audit.triads import TriadCount, class_shares, draw_triples, null_shares
from circuitgen.core.errors import InputError


def _spatial(random, n, lift):
    """Connections that fall off with distance, reciprocal ones `lift` times as often."""
    place = random.uniform(0, 150, (n, 3))
    away = np.linalg.norm(place[:, None] - place[None], axis=2)
    matrix = random.random((n, n)) < 0.35 * np.exp(-away / 60)
    matrix |= matrix.T & (random.random((n, n)) < lift)
    return circuit_of(matrix, place=place)


def test_shares_of_drawn_triples_are_those_of_the_census():
    """All cells in the window: 30,000 triples against networkx's count of all.

    Four binomial standard deviations for each of 16 classes, 1 in 1,000 in all.
    """
    circuit = _spatial(np.random.default_rng(2), 60, 0.3)
    triples = draw_triples(circuit, TriadCount(1, "", "a", np.inf, {}))
    assert len(triples) == 30_000
    assert (np.diff(np.sort(triples, axis=1), axis=1) > 0).all()
    graph = nx.DiGraph()
    graph.add_nodes_from(range(60))
    graph.add_edges_from(zip(circuit.pre.tolist(), circuit.post.tolist(), strict=True))
    census = np.array([nx.triadic_census(graph)[name] for name in CLASSES])
    p = census / census.sum()
    error = np.sqrt(p * (1 - p) * len(triples)) + 1
    assert (np.abs(class_shares(circuit, triples) - p * len(triples)) < 4 * error).all()


def test_triples_lie_within_the_window_of_each_other():
    circuit = _spatial(np.random.default_rng(2), 80, 0.0)
    triples = draw_triples(circuit, TriadCount(1, "", "a", 60.0, {}))
    place = circuit.cells.position_um[triples]
    for x, y in ((0, 1), (1, 2), (0, 2)):
        assert np.linalg.norm(place[:, x] - place[:, y], axis=1).max() <= 60.0
    assert len(triples) > 3000


def test_the_null_keeps_distances_and_nothing_else():
    """Without reciprocity the circuit is its own null; with it triads of mutual pairs
    are far more frequent than by distance alone."""
    plain = _spatial(np.random.default_rng(5), 200, 0.0)
    triples = draw_triples(plain, TriadCount(1, "", "a", 90.0, {}))
    null, found = null_shares(plain, triples), class_shares(plain, triples)
    assert null.sum() == pytest.approx(1.0)
    common = null > 0.005
    # Triples share cells and pairs: 12 % of a share, or some five times its error.
    assert found[common] / len(triples) == pytest.approx(null[common], rel=0.12)
    coupled = _spatial(np.random.default_rng(5), 200, 0.5)
    triples = draw_triples(coupled, TriadCount(1, "", "a", 90.0, {}))
    mutual = CLASSES.index("300")
    found = class_shares(coupled, triples)[mutual] / len(triples)
    assert found > 3 * null_shares(coupled, triples)[mutual]


def test_counts_from_the_circuit_agree_and_others_do_not():
    circuit = _spatial(np.random.default_rng(7), 120, 0.2)
    triples = draw_triples(circuit, TriadCount(9, "", "a", 90.0, {}))
    share = class_shares(circuit, triples) / len(triples)
    counts = {name: round(800 * s) for name, s in zip(CLASSES, share, strict=True)}
    own = TriadCount(1, "own", "a", 90.0, counts)
    judged = audit(circuit, [], None, [own])
    assert {j.verdict for j in judged} <= {"agrees", "cannot tell"}
    assert all("by distance alone" in j.note for j in judged)
    odd = dict(counts, **{"030C": counts["030C"] + 60, "012": counts["012"] - 60})
    judged = audit(circuit, [], None, [TriadCount(1, "odd", "a", 90.0, odd)])
    flagged = {j.measure: j.verdict for j in judged if j.verdict.startswith("too")}
    assert flagged["triads 030C"] == "too low"


def test_song_excess_of_reciprocal_pairs_shows_in_triads_of_two():
    """Song et al. 2005 (PLoS Biol 3:e68): 3312, 495 and 218 of 4025 pairs.

    Independent directions with their probability give 218 / 4 two-way pairs; a circuit
    of such pairs without the excess is found too low in mutual dyads' triads. The triads
    here are those that their dyads give by chance: their own triad counts are not used.
    """
    p, n = 931 / 8050, 240
    random = np.random.default_rng(1)
    plain = circuit_of(random.random((n, n)) < p)
    none, one, two = 3312 / 4025, 495 / 4025, 218 / 4025
    counts = {
        "003": round(1000 * none**3),
        "012": round(1000 * 3 * none**2 * one),
        "102": round(1000 * 3 * none**2 * two),
    }
    counts["021C"] = 1000 - sum(counts.values())
    judged = audit(plain, [], None, [TriadCount(1, "Song", "a", np.inf, counts)])
    verdicts = {j.measure: j.verdict for j in judged}
    assert verdicts["triads 102"] == "too low"


def test_files_of_counts_are_read_and_checked(tmp_path):
    path = tmp_path / "triads.csv"
    path.write_text(
        "source,types,distance_high_um,class,count\n"
        "x,a,100,003,900\nx,a,100,012,80\ny,b,,300,1\n"
    )
    first, second = read_triads(path, ("a", "b"))
    assert (first.counts, first.total) == ({"003": 900, "012": 80}, 980)
    assert (second.types, second.high_um) == ("b", np.inf)
    path.write_text("types,class,count\nA,021X,-3\n")
    with pytest.raises(InputError) as caught:
        read_triads(path, ("a", "b"))
    for words in ("types = 'A'", "class = '021X'", "count = '-3' must be"):
        assert words in str(caught.value)
    path.write_text("types,klass,count\n")
    with pytest.raises(InputError, match="class column is missing"):
        read_triads(path, ("a",))
