"""Mended files read back without repairs and hold the same cable, gaps included."""

from __future__ import annotations

import numpy as np
import pytest
from builders_inspection import STAND_INS, real_files, stand_in
from builders_morphology import PLAIN, made_up_tree, write_table

from circuitgen.core.errors import InputError
from circuitgen.inspection import inspect_file, mend_files, page_html, table_text
from circuitgen.morphology import read_reconstruction

# Text of files in disorder; each is mended by some rule of the reader.
MESSY = {
    "title": "n type x y z r parent\n" + PLAIN,
    "root_mark": PLAIN.replace("5 -1\n", "5 0\n"),
    "glia": PLAIN + "10 7 90 0 0 1 -1\n11 7 99 0 0 1 10\n",
    "unknown_types": PLAIN.replace("5 3 30", "5 6 30").replace("9 4 0", "9 0 0"),
    "radii": PLAIN.replace("0.4 5", "0 5"),
    "tiny_radii": "title\n" + PLAIN.replace("0.4 5", "0.0001 5"),
    "doubled": PLAIN + "10 2 0 -60 0 0.3 3\n11 2 0 -60.0001 0 0.3 10\n"
    "12 2 0 -90 0 0.3 11\n",
    "lone": PLAIN + "10 2 400 0 0 1 -1\n",
    "near_soma": PLAIN + "10 3 0 0 9 0.5 -1\n11 3 0 0 60 0.5 10\n",
    "on_cable": PLAIN + "10 2 8 -30 0 0.2 -1\n11 2 90 -30 0 0.2 10\n"
    "12 2 8 -45 0 0.2 -1\n13 2 90 -45 0 0.2 12\n",
    "chain": PLAIN + "10 2 0 -80 0 0.2 -1\n11 2 0 -120 0 0.2 10\n"
    "12 2 20 -100 0 0.2 -1\n13 2 90 -100 0 0.2 12\n",
    "backward": PLAIN + "10 2 90 -30 0 0.2 -1\n11 2 8 -30 0 0.2 10\n",
    "far": PLAIN + "10 2 900 -30 0 0.2 -1\n11 2 990 -30 0 0.2 10\n",
    "no_soma": PLAIN.replace("1 1 0 0", "1 3 0 0"),
    "rerooted": "1 3 60 0 0 0.5 -1\n2 3 9 0 0 0.5 1\n3 1 0 0 0 5 2\n4 2 0 -70 0 0.4 3\n",
    "three_point": "title\n" + PLAIN + "10 1 0 5 0 5 1\n11 1 0 -5 0 5 1\n",
    "soma_radius": PLAIN.replace("0 0 0 5 -1", "0 0 0 0 -1"),
    "stray_soma": PLAIN.replace("6 3 50", "6 1 50"),
    "outline": "".join(
        f"{i + 1} 1 {6 * np.cos(i / 2):.3f} {6 * np.sin(i / 2):.3f} 0 0.1 {i or -1}\n"
        for i in range(13)
    )
    + "14 3 40 0 0 0.5 1\n15 2 -60 0 0 0.5 7\n",
}


def mended(tmp_path, path):
    """Mend one file and return the sheets before and after."""
    before = inspect_file(path)
    [target] = mend_files([before], tmp_path / "mended")
    return before, inspect_file(target), target


@pytest.mark.parametrize("name", MESSY)
def test_a_mended_file_needs_no_repair(tmp_path, name):
    path = tmp_path / f"{name}.swc"
    path.write_text(MESSY[name])
    before, after, target = mended(tmp_path, path)
    assert after.number_of("repair") == 0
    assert {r.code for r in after.remarks} <= {r.code for r in before.remarks}
    header = [line for line in target.read_text().splitlines() if line[0] == "#"]
    changed = [r for r in before.remarks if r.severity == "repair"]
    assert all(any(r.seen in line for line in header) for r in changed)


@pytest.mark.parametrize("name", sorted(set(MESSY) - {"outline"}))
def test_cable_is_kept_and_grows_by_the_gaps_alone(tmp_path, name):
    path = tmp_path / f"{name}.swc"
    path.write_text(MESSY[name])
    before, after, target = mended(tmp_path, path)
    gaps_um = 0.0
    for line in target.read_text().splitlines():
        if line.endswith("um in all"):
            gaps_um = float(line.split(" cable now, ")[1].split()[0])
    one, other = before.measures, after.measures
    grown = other.axon_um + other.dendrite_um - one.axon_um - one.dendrite_um
    # Coordinates are written to 0.001 um, gaps to 0.1 um.
    assert grown == pytest.approx(gaps_um, abs=0.1)
    assert other.longest_axon_path_um == pytest.approx(
        one.longest_axon_path_um, abs=0.05
    )
    tips = one.axon_tips_n + one.dendrite_tips_n
    # A joint in the middle of cable makes no tip and takes none away.
    assert other.axon_tips_n + other.dendrite_tips_n == tips or gaps_um


def test_neurites_of_an_outlined_soma_begin_at_its_middle(tmp_path):
    path = tmp_path / "outline.swc"
    path.write_text(MESSY["outline"])
    before, after, _ = mended(tmp_path, path)
    middle = before.reconstruction.soma_center_um
    radius_um = before.measures.soma_radius_um
    for end, um in (((40, 0, 0), "basal_um"), ((-60, 0, 0), "axon_um")):
        expected = np.linalg.norm(np.array(end) - middle) - radius_um
        assert getattr(after.measures, um) == pytest.approx(expected, abs=0.01)


@pytest.mark.parametrize("path", real_files(), ids=lambda path: path.stem)
def test_real_files_are_mended(tmp_path, path):
    _, after, _ = mended(tmp_path, path)
    assert after.number_of("repair") == 0


def test_random_breaks_are_mended(tmp_path):
    table, rng = stand_in("L23_pyramidal_2"), np.random.default_rng(4)
    for round_ in range(5):
        broken = table.copy()
        broken[rng.choice(np.arange(1, len(table)), 40, replace=False), 6] = -1
        gone = rng.choice(np.arange(1, len(table)), 40, replace=False)
        broken = np.delete(broken, gone, axis=0)
        left = set(broken[:, 0].tolist())
        broken[:, 6] = [p if p in left else -1 for p in broken[:, 6].tolist()]
        path = write_table(tmp_path / f"broken_{round_}.swc", broken)
        _, after, _ = mended(tmp_path, path)
        assert after.number_of("repair") == 0


def test_made_up_cells_of_any_kind_are_inspected_and_mended(tmp_path):
    """Loose, of no extent, of odd types, all soma: no error, no repair left over."""
    rng, spoil, mended_n = np.random.default_rng(5), range(5), 0
    for round_ in range(60):
        table = made_up_tree(rng, samples=int(rng.choice([0, 8, 40])))
        which = spoil[round_ % len(spoil)]
        if which == 0:
            table[:, 2:5] = 0
        elif which == 1:
            table[:, 2:5] = np.round(table[:, 2:5])
            table[:, 5] = 0
        elif which == 2:
            table[rng.random(len(table)) < 0.2, 6] = -1
        elif which == 3:
            table[:, 1] = rng.integers(0, 8, len(table))
        else:
            table[:, 1] = 1
        sheet = inspect_file(write_table(tmp_path / f"{round_}.swc", table))
        assert "nan" not in page_html([sheet]) + table_text([sheet])
        for path in mend_files([sheet], tmp_path / "mended"):
            assert inspect_file(path).number_of("repair") == 0
            mended_n += 1
    assert mended_n > 20


def test_sound_files_are_not_written(tmp_path):
    assert mend_files([inspect_file(STAND_INS[0])], tmp_path / "mended") == []
    assert not (tmp_path / "mended").exists()


def test_nothing_is_overwritten(tmp_path):
    for name in ("one", "two"):
        (tmp_path / f"{name}.swc").write_text(MESSY["title"])
    sheets = [inspect_file(tmp_path / f"{name}.swc") for name in ("one", "two")]
    there = tmp_path / "two.swc"
    with pytest.raises(InputError, match="two.swc: exists already"):
        mend_files(sheets[1:], tmp_path)
    assert there.read_text() == MESSY["title"]
    mend_files(sheets[1:], tmp_path / "mended")
    with pytest.raises(InputError, match="exists already"):
        mend_files(sheets, tmp_path / "mended")
    assert not (tmp_path / "mended" / "one.swc").exists()


def test_two_files_of_one_name_are_refused(tmp_path):
    paths = [tmp_path / folder / "cell.swc" for folder in "ab"]
    for path in paths:
        path.parent.mkdir()
        path.write_text(MESSY["title"])
    with pytest.raises(InputError, match="would hold two files"):
        mend_files([inspect_file(path) for path in paths], tmp_path / "mended")
    assert not (tmp_path / "mended").exists()


def test_a_folder_that_cannot_be_is_told(tmp_path):
    path = tmp_path / "cell.swc"
    path.write_text(MESSY["title"])
    with pytest.raises(InputError, match="cannot be written"):
        mend_files([inspect_file(path)], path / "below")


def test_the_mended_file_is_the_same_neuron_for_other_readers(tmp_path):
    """One tree, rooted at the soma, parents before children, numbered from 1."""
    path = tmp_path / "cell.swc"
    path.write_text(MESSY["chain"])
    _, _, target = mended(tmp_path, path)
    table = np.loadtxt(target, comments="#")
    assert (table[:, 0] == np.arange(1, len(table) + 1)).all()
    assert (table[:, 6] < table[:, 0]).all()
    assert (table[:, 6] == -1).sum() == 1
    assert table[0, 1] == 1
    assert not read_reconstruction(target).bridged.any()
