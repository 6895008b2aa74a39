"""Individual pairs of cells, of the built circuit or outside it."""

from __future__ import annotations

import csv
import io
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from circuitgen.appositions import find_appositions, index_targets
from circuitgen.core.errors import InputError, Problem, nearest_name
from circuitgen.prediction.quantiles import summarise
from circuitgen.prediction.tables import RunTables
from circuitgen.run import ReopenedCircuit
from circuitgen.wiring import show

_PLACED = ("type", "morphology", "x_um", "y_um", "z_um", "azimuth_deg")
COLUMNS = tuple(
    f"{side}_{name}" for side in ("pre", "post") for name in ("cell_id", *_PLACED)
)


@dataclass(frozen=True)
class AskedCell:
    """One cell of an asked pair: an id of the circuit, or a place of its own."""

    cell_id: int | None
    type_name: str
    morphology: str
    position_um: tuple[float, float, float]
    azimuth_deg: float


class _RowReader:
    """Reads the cells of one row; collects what is wrong with them."""

    def __init__(self, tables: RunTables, path: Path):
        self._tables, self._path = tables, path
        self.problems: list[Problem] = []
        frame = tables.cell_table
        self._morphologies = {
            str(name): sorted(own.morphology.astype(str).unique())
            for name, own in frame.groupby("cell_type", observed=True)
        }

    def _fault(self, line: int, field: str, rule: str, nearest=None) -> None:
        self.problems.append(Problem(str(self._path), line, field, rule, nearest))

    def cell(self, side: str, values: dict[str, str], line: int) -> AskedCell | None:
        """Return a cell, None when the row does not say which."""
        faults = len(self.problems)
        if values.get(f"{side}_cell_id"):
            cell = self._known(side, values, line)
        else:
            cell = self._placed(side, values, line)
        return cell if len(self.problems) == faults else None

    def _number(self, field: str, text: str, line: int, kind: Callable) -> float:
        try:
            number = kind(text)
            if np.isfinite(number):
                return number
        except ValueError:
            pass
        self._fault(line, field, f"= {text!r} must be a finite number")
        return 0

    def _known(self, side: str, values, line: int) -> AskedCell | None:
        field = f"{side}_cell_id"
        number = self._number(field, values[field], line, int)
        count = len(self._tables.cell_table)
        if not 0 <= number < count:
            self._fault(line, field, f"= {number} must be a cell id, 0 to {count - 1}")
            return None
        for name in _PLACED:
            if values.get(f"{side}_{name}"):
                self._fault(line, f"{side}_{name}", f"is given beside {field}; keep one")
        row = self._tables.cell_table.iloc[int(number)]
        place = (float(row.x_um), float(row.y_um), float(row.z_um))
        return AskedCell(
            int(number), str(row.cell_type), str(row.morphology), place, row.azimuth_deg
        )

    def _placed(self, side: str, values, line: int) -> AskedCell | None:
        fields = {name: values.get(f"{side}_{name}", "") for name in _PLACED}
        for name, text in fields.items():
            if not text:
                rule = f"is missing; without {side}_cell_id it is needed"
                self._fault(line, f"{side}_{name}", rule)
        kind, morphology = fields["type"], fields["morphology"]
        known = list(self._morphologies)
        if kind and kind not in known:
            rule = f"= {kind!r} is no cell type of the run"
            self._fault(line, f"{side}_type", rule, nearest_name(kind, known))
        elif morphology and kind and morphology not in self._morphologies[kind]:
            own = self._morphologies[kind]
            rule = f"= {morphology!r} is no reconstruction of {kind}"
            self._fault(line, f"{side}_morphology", rule, nearest_name(morphology, own))
        numbers = [
            self._number(f"{side}_{name}", fields[name], line, float)
            for name in _PLACED[2:]
            if fields[name]
        ]
        if len(numbers) < 4:
            return None
        return AskedCell(None, kind, morphology, tuple(numbers[:3]), numbers[3])


def read_pairs(tables: RunTables, path: Path) -> list[tuple[AskedCell, AskedCell]]:
    """Read the pairs that somebody asks for from a CSV file.

    Every row names two cells, each by `cell_id` or by `type`, `morphology`, `x_um`,
    `y_um`, `z_um` and `azimuth_deg`, in columns that begin with pre_ and post_.
    InputError lists all that is wrong.
    """
    try:
        text = Path(path).read_text(encoding="utf-8-sig")
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(
            [Problem(str(path), None, "", f"cannot be read: {error}")]
        ) from None
    rows = csv.reader(io.StringIO(text, newline=""))
    header = [name.strip() for name in next(rows, [])]
    reader = _RowReader(tables, path)
    unknown = [name for name in header if name not in COLUMNS]
    reader.problems += [
        Problem(str(path), 1, name, "is no known column", nearest_name(name, COLUMNS))
        for name in unknown
    ]
    out = []
    if not unknown:
        for cells in rows:
            if not any(cells):
                continue
            values = {n: c.strip() for n, c in zip(header, cells, strict=False)}
            pair = [reader.cell(side, values, rows.line_num) for side in ("pre", "post")]
            out.append(tuple(pair))
    if not out and not reader.problems:
        reader.problems.append(Problem(str(path), None, "", "names no pair"))
    if reader.problems:
        raise InputError(reader.problems)
    return out


def _stored_appositions(tables: RunTables, pairs) -> dict[tuple[int, int], int]:
    """Look up the appositions of pairs of the circuit; 0 where they do not touch."""
    wanted = {(a.cell_id, b.cell_id) for a, b in pairs}
    wanted = {pair for pair in wanted if None not in pair}
    types = sorted({int(tables.cells.type_index[pre]) for pre, _ in wanted})
    if not wanted:
        return {}
    frame = tables.pairs(types)
    asked = pd.MultiIndex.from_tuples(sorted(wanted))
    found = frame.set_index(["pre_cell_id", "post_cell_id"]).appositions_n
    return found.reindex(asked, fill_value=0).to_dict()


def _computed_appositions(folder: Path, pairs) -> list[int]:
    """Find the appositions of pairs whose cells stand anywhere."""
    circuit = ReopenedCircuit(folder)
    names = circuit.spec.type_names
    places = {
        (names[kind], arbor.name): place
        for place, (kind, arbor) in enumerate(
            zip(circuit.type_of_arbor, circuit.arbors, strict=True)
        )
    }
    cells = [cell for pair in pairs for cell in pair]
    scene = circuit.scene(
        np.array([places[cell.type_name, cell.morphology] for cell in cells]),
        np.array([cell.position_um for cell in cells]),
        np.array([cell.azimuth_deg for cell in cells], float),
    )
    out = []
    for number in range(len(pairs)):
        index = index_targets(scene, np.array([2 * number + 1]))
        sites = find_appositions(index, np.array([2 * number]), threads=1)
        out.append(int(sites.count.sum()))
    return out


def predict_pairs(tables: RunTables, pairs) -> list[dict]:
    """Predict individual pairs: appositions, probability, expected synapses."""
    stored = _stored_appositions(tables, pairs)
    outside = [p for p in pairs if p[0].cell_id is None or p[1].cell_id is None]
    computed = iter(_computed_appositions(tables.folder, outside) if outside else [])
    rows = []
    for pre, post in pairs:
        key = (pre.cell_id, post.cell_id)
        a = int(next(computed) if None in key else stored[key])
        code = tables.code(pre.type_name, post.type_name)
        histogram = np.zeros(a + 1)
        histogram[a] = 1.0
        drawn = show(tables.draws, {code: histogram})
        mean = np.nan_to_num(drawn.mean) * drawn.probability
        offset = np.subtract(post.position_um, pre.position_um)
        for axis, period in enumerate(tables.wrap_um):
            if period:
                offset[axis] -= period * np.round(offset[axis] / period)
        rows.append(
            {
                "pre_cell_id": pre.cell_id,
                "post_cell_id": post.cell_id,
                "pre_type": pre.type_name,
                "post_type": post.type_name,
                "soma_distance_um": float(np.linalg.norm(offset)),
                "appositions_n": a,
                "p_connect": summarise(drawn.probability),
                "synapses_expected": summarise(mean),
            }
        )
    return rows
