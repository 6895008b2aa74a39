"""Made-up circuits for audits, with the law that drew them known."""

from __future__ import annotations

import numpy as np

from circuitgen.audit import AuditCircuit
from circuitgen.audit.circuit import make_cells
from circuitgen.spec import Recording

NAMES = ("a", "b")


def circuit_of(matrix, types=None, place=None, synapses=None) -> AuditCircuit:
    """Return a circuit with the connections of a matrix (pre, post)."""
    matrix = np.asarray(matrix, bool).copy()
    np.fill_diagonal(matrix, False)
    n = matrix.shape[0]
    pre, post = np.nonzero(matrix)
    if place is None:
        place = np.full((n, 3), np.nan)
    types = np.zeros(n, int) if types is None else np.asarray(types)
    return AuditCircuit(
        NAMES,
        make_cells(types, place),
        pre.astype(np.int32),
        post.astype(np.int32),
        synapses,
        (0.0, 0.0),
        {"both": NAMES},
    )


def random_circuit(random, n: int, p: float) -> AuditCircuit:
    """Return a circuit of independent connections."""
    return circuit_of(random.random((n, n)) < p)


def row(number: int, k: int | None = None, n: int | None = None, **more) -> Recording:
    """Return a recording of a > a that was kept out of the fit."""
    counts = {} if n is None else {"tested_n": n, "connected_n": k}
    fields = {"pre_type": "a", "post_type": "a", "use": "audit", "row": number}
    return Recording.model_validate(fields | counts | more)
