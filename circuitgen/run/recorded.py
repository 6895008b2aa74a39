"""The recordings of a finished run, as its table of recordings holds them."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

from circuitgen.spec import Recording


def read_recorded(folder: Path) -> list[Recording]:
    """Return every recording of a run, in order of rows."""
    path = Path(folder) / "fit.csv"
    frame = pd.read_csv(path, keep_default_na=False, na_values=[""])
    fields = Recording.model_fields
    whole = {name for name in fields if name.endswith(("_n", "_size"))} | {"row"}
    out = []
    for row in frame.to_dict("records"):
        row |= {
            "synapses_mean": row["synapses_mean_measured"],
            "synapses_sd": row["synapses_sd_measured"],
        }
        if pd.isna(row["tested_n"]):
            row["probability"] = row["p_measured"]
        known = {
            name: int(row[name]) if name in whole else row[name]
            for name in fields
            if name in row and not pd.isna(row[name])
        }
        out.append(Recording.model_construct(**known))
    return out
