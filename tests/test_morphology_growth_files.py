"""The grown files that the project ships: sizes, shapes, depths, and their headers."""

import dataclasses
from pathlib import Path

import numpy as np
import pytest

from circuitgen.morphology import read_description

FOLDER = Path(__file__).parent.parent / "morphologies"
DESCRIPTIONS = sorted((FOLDER / "growth").glob("*.yaml"))
FILES = sorted(FOLDER.glob("*.swc"))
SEED = 1  # their README says so

# The layers for which the shipped files were grown: depth of upper and lower border.
LAYERS_UM = {
    "L1": (0, 120),
    "L23": (120, 450),
    "L4": (450, 690),
    "L5": (690, 1110),
    "L6": (1110, 1600),
}
EXCITATORY = {
    "L23_pyramidal",
    "L4_stellate",
    "L4_pyramidal",
    "L5_slender",
    "L5_thick",
    "L6_pyramidal",
    "L6_inverted",
}
TUFTED = ["L23_pyramidal", "L4_pyramidal", "L5_slender", "L5_thick"]
SOMA, AXON, BASAL, APICAL = 1, 2, 3, 4


def type_of(path):
    return path.stem.rpartition("_")[0]


@dataclasses.dataclass(frozen=True)
class File:
    """An SWC file read in the plainest way, without the package."""

    depth_um: float
    kind: np.ndarray
    position_um: np.ndarray
    radius_um: np.ndarray
    parent: np.ndarray

    @property
    def step_um(self):
        step = np.linalg.norm(self.position_um - self.position_um[self.parent], axis=1)
        return np.where(self.parent > 0, step, 0.0)


@pytest.fixture(scope="module")
def shipped():
    files = {}
    for path in FILES:
        rows = np.loadtxt(path)
        assert (rows[:, 0] == np.arange(len(rows)) + 1).all()
        depths = read_description(
            FOLDER / "growth" / f"{type_of(path)}.yaml"
        ).soma_depths_um
        number = int(path.stem.rpartition("_")[2]) - 1
        files[path.stem] = File(
            depths[number % len(depths)],
            rows[:, 1].astype(int),
            rows[:, 2:5],
            rows[:, 5],
            rows[:, 6].astype(int) - 1,
        )
    return files


class TestShippedFiles:
    def test_enough_types_in_every_layer(self):
        types = {type_of(path) for path in FILES}
        assert types == {path.stem for path in DESCRIPTIONS}
        assert len(types) >= 12
        assert {name.partition("_")[0] for name in types} == set(LAYERS_UM)
        assert all(
            3 <= sum(type_of(path) == name for path in FILES) <= 4 for name in types
        )

    def test_all_together_are_small(self):
        assert sum(path.stat().st_size for path in FILES) < 12e6

    def test_each_says_that_it_is_invented_and_how_it_grew(self):
        for path in FILES:
            header = [line for line in path.read_text().splitlines() if line[0] == "#"]
            text = " ".join(line[2:] for line in header)
            for word in ("SYNTHETIC", "invented", "not a measured", "e1000877"):
                assert word in text
            assert f"{type_of(path)}.yaml, seed {SEED}, number" in text

    @pytest.mark.filterwarnings("ignore")  # navis calls pandas in outdated ways
    def test_another_reader_finds_the_same_neuron(self, shipped):
        import navis

        for name in ("L23_basket_1", "L5_thick_3"):
            neuron = navis.read_swc(FOLDER / f"{name}.swc")
            file = shipped[name]
            # navis counts the pieces from the soma's centre to the stems as well.
            stems = np.linalg.norm(file.position_um[file.parent == 0], axis=1).sum()
            cable = file.step_um.sum() + stems
            assert neuron.cable_length == pytest.approx(cable, rel=1e-6)
            assert neuron.n_trees == 1
            assert (neuron.nodes.label.astype(int) == file.kind).all()

    def test_somata_are_spread_over_their_layer(self, shipped):
        for path in DESCRIPTIONS:
            upper, lower = LAYERS_UM[path.stem.partition("_")[0]]
            depths = np.array(read_description(path).soma_depths_um)
            assert (depths > upper).all()
            assert (depths < lower).all()
            if path.stem != "L6_inverted":
                assert np.ptp(depths) > 0.4 * (lower - upper)

    def test_cable_is_as_long_as_in_cortex(self, shipped):
        # Common ranges for rodent cortex, from memory: local axon 5-20 mm, dendrites
        # 2.5-8.5 mm, the thick-tufted pyramid the largest.
        dendrites = {}
        for name, file in shipped.items():
            step = file.step_um
            assert 5000 < step[file.kind == AXON].sum() < 20000
            dendrites[name] = step[file.kind >= BASAL].sum()
            assert 2400 < dendrites[name] < 8500
        thick = [um for name, um in dendrites.items() if name.startswith("L5_thick")]
        assert min(thick) > 6500
        assert min(thick) > max(um for um in dendrites.values() if um not in thick)

    def test_smooth_cells_have_denser_axon(self, shipped):
        # Cable per volume of the ellipsoid that has the axon's spread.
        density = {}
        for name, file in shipped.items():
            axon = (file.kind == AXON) & (file.step_um > 0)
            volume = np.prod(file.position_um[axon].std(axis=0))
            density.setdefault(name.rpartition("_")[0], []).append(
                file.step_um[axon].sum() / volume
            )
        density = {name: np.mean(values) for name, values in density.items()}
        baskets = [value for name, value in density.items() if "basket" in name]
        assert min(baskets) > 2 * max(density[name] for name in EXCITATORY)

    def test_axon_spreads_sideways_as_in_cortex(self, shipped):
        for name, file in shipped.items():
            axon = file.position_um[file.kind == AXON]
            reach = np.hypot(axon[:, 0], axon[:, 2]).max()
            if name.rpartition("_")[0] in EXCITATORY:
                assert 180 < reach < 480
            elif "basket" in name:
                assert 130 < reach < 300
            elif "bitufted" in name:
                assert reach < 140

    def test_everything_lies_inside_the_cortex(self, shipped):
        for file in shipped.values():
            depth = file.depth_um - file.position_um[:, 1]
            assert depth.min() > 1.0
            assert depth.max() < 1600.0

    def test_at_most_two_branches_from_a_sample_and_few_from_the_soma(self, shipped):
        for file in shipped.values():
            children = np.bincount(file.parent[1:], minlength=file.parent.size)
            assert children[1:].max() == 2
            assert 3 <= children[0] <= 11
            assert (file.parent[1:] < np.arange(1, file.parent.size)).all()
            assert file.kind[0] == SOMA
            assert (file.kind[1:] != SOMA).all()

    def test_stems_leave_in_different_directions(self, shipped):
        for file in shipped.values():
            stems = file.position_um[file.parent == 0]
            unit = stems / np.linalg.norm(stems, axis=1)[:, None]
            cosine = unit @ unit.T - 2 * np.eye(len(unit))
            assert cosine.max() < np.cos(np.radians(12))

    def test_cable_bends_gently_and_never_runs_straight_for_long(self, shipped):
        for file in shipped.values():
            children = np.bincount(file.parent[1:], minlength=file.parent.size)
            inner = np.flatnonzero((file.parent > 0) & (children[file.parent] == 1))
            inner = inner[file.parent[file.parent[inner]] >= 0]
            step = file.position_um - file.position_um[file.parent]
            step /= np.maximum(np.linalg.norm(step, axis=1), 1e-9)[:, None]
            turn = (step[inner] * step[file.parent[inner]]).sum(axis=1)
            assert np.degrees(np.arccos(turn.clip(-1, 1))).max() < 45
            assert 0.7 < np.median(file.step_um[inner]) / 4.0 < 1.3
            assert file.step_um[inner].max() < 10

    def test_radii_are_thick_at_the_soma_and_thin_at_tips(self, shipped):
        for file in shipped.values():
            tip = np.bincount(file.parent[1:], minlength=file.parent.size) == 0
            axon, dendrite = file.kind == AXON, file.kind >= BASAL
            assert 5 <= file.radius_um[0] <= 9
            assert file.radius_um[axon & tip].max() <= 0.25
            assert 0.3 <= file.radius_um[dendrite & tip].min()
            assert file.radius_um[dendrite & tip].max() <= 0.6
            assert file.radius_um[axon].max() <= 0.6
            thicker = file.radius_um > file.radius_um[file.parent] + 1e-9
            assert not thicker[1:].any()

    @pytest.mark.parametrize("name", TUFTED)
    def test_tuft_reaches_layer_1_wherever_the_soma_is(self, shipped, name):
        upper, lower = LAYERS_UM[name.partition("_")[0]]
        tops = [
            file.position_um[file.kind == APICAL, 1].max()
            for key, file in shipped.items()
            if key.rpartition("_")[0] == name
        ]
        # For every soma depth one file ends below the pia and yet inside layer 1.
        for depth in np.linspace(upper + 15, lower - 5, 50):
            assert any(0 < depth - top < LAYERS_UM["L1"][1] for top in tops)

    def test_corticothalamic_apical_ends_about_layer_4(self, shipped):
        for name, file in shipped.items():
            if name.startswith("L6_pyramidal"):
                top = file.depth_um - file.position_um[file.kind == APICAL, 1].max()
                assert 450 < top < 690

    def test_axo_axonic_axon_runs_upright_where_initial_segments_are(self, shipped):
        for name, file in shipped.items():
            axon = (file.kind == AXON) & (file.step_um > 0)
            rise = np.abs((file.position_um - file.position_um[file.parent])[axon, 1])
            upright = rise.sum() / file.step_um[axon].sum()
            if name.startswith("L23_axo_axonic"):
                depth = file.depth_um - file.position_um[axon, 1]
                assert ((depth > 130) & (depth < 500)).mean() > 0.95
                assert upright > 0.6
            elif "basket" in name:
                # Without a preferred direction the mean of |cos| is one half.
                assert upright == pytest.approx(0.5, abs=0.06)

    def test_bitufted_dendrites_form_an_upper_and_a_lower_bundle(self, shipped):
        for name, file in shipped.items():
            if name.startswith("L23_bitufted"):
                dendrite = file.position_um[file.kind == BASAL]
                aside = np.hypot(dendrite[:, 0], dendrite[:, 2])
                level = np.abs(dendrite[:, 1]) < 30
                assert level.mean() < 0.15
                assert aside.max() < 110
                assert dendrite[:, 1].max() > 120
                assert dendrite[:, 1].min() < -150
