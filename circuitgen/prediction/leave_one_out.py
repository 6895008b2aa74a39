"""Can the intervals be trusted on somebody's own data? Each pathway from the others."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
from scipy.stats import binom, false_discovery_control

from circuitgen.prediction.plain_rules import RULES, PlainRule
from circuitgen.prediction.quantiles import POINTS
from circuitgen.prediction.tables import RunTables
from circuitgen.run import read_recorded
from circuitgen.wiring import BoutonTotal, LeftOut, Window, leave_out

# Share of false alarms among the recordings that are said to disagree.
FALSE_SHARE = 0.10
# Coverage this unlikely under honest intervals is called too low.
_LEVEL = 0.05


def _dense(frame: pd.DataFrame) -> np.ndarray:
    """Return stored rows of one pathway as a histogram."""
    shape = (frame.appositions_n.max() + 1, frame.lost_n.max() + 1)
    out = np.zeros(shape)
    out[frame.appositions_n, frame.lost_n] = frame.pairs
    return out[:, 0] if shape[1] == 1 else out


def _windows(tables: RunTables) -> tuple[list[Window], dict]:
    """Return every recording with its pairs, and the histograms of all pairs."""
    stored = pq.read_table(tables.folder / "windows.parquet").to_pandas()
    index = {name: place for place, name in enumerate(tables.type_names)}
    by_row: dict[int, dict] = {}
    keys = ["recording_row", "pre_type", "post_type"]
    for (number, pre, post), rows in stored.groupby(keys, observed=True):
        by_row.setdefault(number, {})[index[pre], index[post]] = _dense(rows)
    windows = [
        Window(recording, by_row.get(recording.row, {}))
        for recording in read_recorded(tables.folder)
    ]
    return windows, by_row.get(0, {})


def _types(tables: RunTables) -> tuple[list[bool], list[int]]:
    """Return the sign and the layer of every type, from the table of cells."""
    frame = tables.cell_table
    layers = sorted(frame.layer.astype(str).unique())
    signs, homes = [], []
    for name in tables.type_names:
        own = frame[frame.cell_type == name]
        signs.append(bool((own.sign == "excitatory").any()))
        homes.append(layers.index(own.layer.astype(str).mode()[0]) if len(own) else -1)
    return signs, homes


def _bouton_totals(tables: RunTables, everything) -> list[BoutonTotal]:
    index = {name: place for place, name in enumerate(tables.type_names)}
    return [
        BoutonTotal(
            index[known["type"]],
            known["mean_per_um"],
            known["sd_per_um"],
            known["axon_um"],
            {p: h for p, h in everything.items() if p[0] == index[known["type"]]},
        )
        for known in tables.provenance["summary"]["bouton_totals"]
    ]


def score(distribution: np.ndarray, k: int) -> dict[str, float]:
    """Return log score, place and two-sided surprise of k in P(0), P(1), ...

    The place is P(K < k) + P(K = k) / 2, between 0 and 1.
    """
    below, here = float(distribution[:k].sum()), float(distribution[k])
    above = max(1.0 - below - here, 0.0)
    return {
        "log_score": float(np.log(max(here, 1e-300))),
        "place": below + here / 2,
        "surprise_p": min(1.0, 2.0 * min(below + here, above + here)),
    }


def _quantile(values: np.ndarray, weights: np.ndarray, points) -> np.ndarray:
    order = np.argsort(values)
    return np.interp(points, np.cumsum(weights[order]), values[order])


def _score_rows(left: LeftOut) -> list[dict]:
    rows = []
    for window, shown in zip(left.windows, left.shown, strict=True):
        recording, n = window.recording, window.recording.tested_n
        counts = np.arange(n + 1)
        chance = np.clip(shown.probability, 0.0, 1.0)
        distribution = binom.pmf(counts[:, None], n, chance) @ left.weight
        found = _quantile(chance, left.weight, list(POINTS.values()))
        rows.append(
            {
                "row": recording.row,
                "source": recording.source,
                "pre_type": recording.pre_type,
                "post_type": recording.post_type,
                "tested_n": n,
                "connected_n": recording.connected_n,
                "p_measured": recording.connected_n / n,
                "p_predicted": dict(zip(POINTS, map(float, found), strict=True)),
                **score(distribution, recording.connected_n),
            }
        )
    return rows


def check_intervals(
    is_excitatory: Sequence[bool], home_layer, windows, totals=(), *, seed: int = 0
) -> dict:
    """Predict each recorded pathway from the others and score the predictions.

    Returns
    -------
    dict
        ``rows``: each recording with its prediction and surprise; ``coverage_90``,
        ``coverage_50``, ``log_score`` and that of three plain rules, ``gain`` over the
        best of them, ``disagree``: rows whose surprise stands out among all, and
        ``sentence``: what follows from it.
    """
    sets = leave_out(is_excitatory, home_layer, windows, totals, seed=seed)
    flat = [window for left in sets for window in left.windows]
    rows = [row for left in sets for row in _score_rows(left)]
    classes = [
        sorted({(is_excitatory[a], is_excitatory[b]) for a, b in w.pathways})
        for w in flat
    ]
    for name in RULES:
        rule, first = PlainRule(name, flat, classes), 0
        for left in sets:
            mine = list(range(first, first + len(left.windows)))
            for place in mine:
                distribution = rule.predict(mine, flat[place], classes[place])
                found = score(distribution, rows[place]["connected_n"])
                rows[place].setdefault("plain", {})[name] = found["log_score"]
            first += len(mine)
    return _conclude(rows)


def _conclude(rows: list[dict]) -> dict:
    """Sum the scores up and say what follows."""
    if len(rows) < 2:
        sentence = "With fewer than two recordings with counts nothing can be left out."
        return {"rows": rows, "sentence": sentence}
    place = np.array([row["place"] for row in rows])
    inside = int(((place > 0.05) & (place < 0.95)).sum())
    mean = float(np.mean([row["log_score"] for row in rows]))
    plain = {
        name: float(np.mean([row["plain"][name] for row in rows])) for name in RULES
    }
    best = max(plain, key=plain.get)
    false_share = false_discovery_control([row["surprise_p"] for row in rows])
    for row, share in zip(rows, false_share, strict=True):
        row["false_share"] = float(share)
    rows = sorted(rows, key=lambda row: row["surprise_p"])
    disagree = [row["row"] for row in rows if row["false_share"] < FALSE_SHARE]
    return {
        "rows": rows,
        "recordings_n": len(rows),
        "coverage_90": inside / len(rows),
        "coverage_50": float(((place > 0.25) & (place < 0.75)).mean()),
        "log_score": mean,
        "log_score_plain": plain,
        "best_plain_rule": best,
        "gain": mean - plain[best],
        "disagree": disagree,
        "sentence": _sentence(rows, inside, mean - plain[best], best, disagree),
    }


def _sentence(rows, inside: int, gain: float, best: str, disagree) -> str:
    n = len(rows)
    seen = (
        f"{inside} of {n} recordings lie within the 90 % interval that the others give"
    )
    if binom.cdf(inside, n, 0.9) < _LEVEL:
        trust = f"The intervals are too narrow on these data: only {seen}"
    else:
        trust = f"The intervals can be trusted on these data: {seen}"
    worth = "more" if gain > 0 else "no more"
    trust += f"; they tell {worth} than the rule '{best}' ({gain:+.2f} per recording)"
    if not disagree:
        return trust + "; no recording disagrees with the rest."
    names = ", ".join(str(row) for row in disagree)
    return trust + f"; disagreeing with the rest: row {names}."


def leave_one_out(tables: RunTables) -> dict:
    """Check the intervals on the recordings of a finished run; see `check_intervals`."""
    windows, everything = _windows(tables)
    signs, homes = _types(tables)
    totals = _bouton_totals(tables, everything)
    seed = int(tables.provenance["seed"])
    return check_intervals(signs, homes, windows, totals, seed=seed)
