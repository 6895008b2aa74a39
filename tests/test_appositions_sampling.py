"""How finely a reconstruction was sampled changes no count of appositions."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from builders import DENDRITES_AND_SOMA

from circuitgen.appositions import find_appositions, index_targets, make_scene
from circuitgen.morphology import build_arbor, read_reconstruction

MORPHOLOGIES = Path(__file__).parent.parent / "morphologies"
FILES = ("L4_stellate_2.swc", "L4_basket_2.swc")


def _cut_every_piece(source: Path, target: Path, parts: int) -> None:
    """Copy an SWC file with every piece between neurite samples cut in equal parts."""
    rows = np.loadtxt(source)
    by_number = {int(row[0]): row for row in rows}
    number, lines, renamed = 0, [], {}
    for row in rows:
        parent = renamed.get(int(row[6]), -1)
        above = by_number.get(int(row[6]))
        steps = parts if above is not None and above[1] == row[1] else 1
        for step in range(1, steps + 1):
            at = row[2:6]
            if steps > 1:
                at = above[2:6] + (row[2:6] - above[2:6]) * step / steps
            number += 1
            place = " ".join(f"{value:.12g}" for value in at)
            lines.append(f"{number} {int(row[1])} {place} {parent}")
            parent = number
        renamed[int(row[0])] = number
    target.write_text("\n".join(lines) + "\n")


def _counts(files) -> dict[tuple[int, int], int]:
    """Appositions of every pair of 24 cells made of the files, placed at random."""
    arbors = [
        build_arbor(read_reconstruction(f), upright="y", min_spacing_um=4.0, ais_um=40.0)
        for f in files
    ]
    rng = np.random.default_rng(5)
    n = 24
    scene = make_scene(
        arbors,
        arbor_index=np.arange(n) % len(arbors),
        position_um=rng.uniform(0, 120, (n, 3)),
        azimuth_deg=rng.uniform(0, 360, n),
        target_mask=np.full(n, DENDRITES_AND_SOMA),
        max_gap_um=1.0,
        min_spacing_um=4.0,
    )
    found = find_appositions(index_targets(scene, np.arange(n)), np.arange(n))
    pairs = zip(found.pre.tolist(), found.post.tolist(), strict=True)
    return dict(zip(pairs, found.count.tolist(), strict=True))


@pytest.mark.parametrize("parts", [2, 13], ids=["cut in two", "about 0.3 um"])
def test_finer_sampling_changes_no_count(tmp_path, parts):
    coarse = [MORPHOLOGIES / name for name in FILES]
    fine = [tmp_path / name for name in FILES]
    for source, target in zip(coarse, fine, strict=True):
        _cut_every_piece(source, target, parts)
    first, second = _counts(coarse), _counts(fine)
    assert sum(first.values()) > 3000
    assert second == first
