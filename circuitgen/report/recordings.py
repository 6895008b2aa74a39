"""Does the circuit meet the recordings: one verdict a row, and the words for it."""

from __future__ import annotations

from scipy.stats import binomtest

SIGNIFICANCE = 0.05
VERDICTS = ("agrees", "too high", "too low", "cannot tell")


def verdict(connected_n: int | None, tested_n: int | None, p: float | None) -> str:
    """Judge the circuit's connection probability by the counts of a recording.

    Two-sided binomial test of `connected_n` of `tested_n` at the probability `p` of
    the drawn circuit under the same protocol.

    Returns
    -------
    str
        ``agrees``; ``too high`` or ``too low`` (the circuit, at the 5 % level);
        ``cannot tell`` without counts, or when no outcome of so few pairs could
        speak against the circuit.
    """
    if not tested_n or connected_n is None or p is None:
        return "cannot tell"
    if binomtest(connected_n, tested_n, p).pvalue < SIGNIFICANCE:
        return "too high" if p > connected_n / tested_n else "too low"
    extremes = (binomtest(k, tested_n, p).pvalue for k in (0, tested_n))
    return "agrees" if min(extremes) < SIGNIFICANCE else "cannot tell"


def judged(rows: list[dict]) -> list[dict]:
    """Return the rows of fit.csv, each with its verdict."""
    return [
        row
        | {"verdict": verdict(row["connected_n"], row["tested_n"], row["p_realised"])}
        for row in rows
    ]


def troubles(rows: list[dict]) -> list[str]:
    """Say in plain words which recordings the circuit cannot or does not meet."""
    out = []
    for row in rows:
        name = f"Recording {row['row']}, {row['pre_type']} → {row['post_type']}"
        if not row["feasible"]:
            out.append(f"{name}: cannot be met. {row['note']}".strip())
        elif row["verdict"] in ("too high", "too low"):
            out.append(
                f"{name}: the circuit's probability {row['p_realised']:.3g} is"
                f" {row['verdict']} for {row['connected_n']} connected of"
                f" {row['tested_n']} tested pairs."
            )
    return out
