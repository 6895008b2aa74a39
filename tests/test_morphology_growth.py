"""Growth of stand-in arbors from descriptions."""

import dataclasses
from pathlib import Path

import numpy as np
import oracles_morphology_growth as oracles
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.sparse.csgraph import minimum_spanning_tree
from scipy.spatial import distance_matrix

from circuitgen.core.errors import InputError
from circuitgen.morphology.describe import EnvelopeError, read_description
from circuitgen.morphology.envelope import Site, carrier_points
from circuitgen.morphology.growth import grow, grow_files
from circuitgen.morphology.spanning import balanced_tree

FOLDER = Path(__file__).parent.parent / "morphologies"
DESCRIPTIONS = sorted((FOLDER / "growth").glob("*.yaml"))
SEED = 1  # of the shipped files; their README says so


def cloud(seed, points_n=60):
    return np.random.default_rng(seed).uniform(-100, 100, (points_n, 3))


def span(points, balance):
    """Wire and path lengths of the tree that grows from the first point."""
    order, parent = balanced_tree(points[:1], np.zeros(1), points[1:], balance)
    nodes = np.concatenate([points[:1], points[1:][order]])
    wire = np.linalg.norm(nodes[1:] - nodes[parent], axis=1)
    path = np.zeros(len(nodes))
    for child, above in enumerate(parent, start=1):
        path[child] = path[above] + wire[child - 1]
    return wire.sum(), path[1:], np.linalg.norm(nodes[1:] - nodes[0], axis=1)


class TestRule:
    @pytest.mark.parametrize("seed", range(5))
    def test_without_balance_it_is_the_minimum_spanning_tree(self, seed):
        points = cloud(seed)
        # scipy.sparse.csgraph: an independent implementation (Kruskal, not Prim).
        reference = minimum_spanning_tree(distance_matrix(points, points)).sum()
        assert span(points, 0.0)[0] == pytest.approx(reference, rel=1e-12)

    @pytest.mark.parametrize("seed", range(5))
    def test_with_a_large_balance_every_path_is_straight(self, seed):
        # By the triangle inequality no path beats the straight line to the root.
        _, path, straight = span(cloud(seed), 1e9)
        np.testing.assert_allclose(path, straight, rtol=1e-9)

    def test_balance_trades_wire_for_path(self):
        # Cuntz et al. 2010: a larger balancing factor shortens the paths to the root
        # and costs wire. The rule is greedy, so this holds on average over trees.
        balances = [0.0, 0.2, 0.5, 1.0, 2.0]
        trees = [
            [span(cloud(seed), balance) for seed in range(20)] for balance in balances
        ]
        wire = [np.mean([tree[0] for tree in row]) for row in trees]
        path = [np.mean([tree[1].mean() for tree in row]) for row in trees]
        assert (np.diff(wire) > 0).all()
        assert (np.diff(path) < 0).all()

    @given(
        seed=st.integers(0, 10**6), balance=st.floats(0, 3), starts_n=st.integers(1, 4)
    )
    @settings(max_examples=30, deadline=None, derandomize=True)
    def test_equals_trying_everything(self, seed, balance, starts_n):
        points = cloud(seed, 20)
        starts, rest = points[:starts_n], points[starts_n:]
        path = np.linalg.norm(starts, axis=1)
        fast = balanced_tree(starts, path, rest, balance)
        slow = oracles.balanced_tree(starts, path, rest, balance)
        np.testing.assert_array_equal(fast[0], slow[0])
        np.testing.assert_array_equal(fast[1], slow[1])


class TestEnvelope:
    SITE = Site(800.0, 7.0, 1600.0, 1.0)

    @staticmethod
    def draw(purpose, rows_n):
        return np.random.default_rng(len(purpose)).random((rows_n, 4))

    def body(self, name, row):
        description = read_description(FOLDER / "growth" / f"{name}.yaml")
        return description.neurites[-1].parts[row]

    def points(self, body, points_n=20_000):
        points = carrier_points(body, self.SITE, self.draw, "part 0", points_n, 0.0)
        # The centre is off the axis; only the shape is looked at here.
        points[:, [0, 2]] -= points[:, [0, 2]].mean(axis=0)
        return points

    def test_ellipsoid_fades_as_described(self):
        # Density 1 - r^2 in the unit ball: mean of r^2 = (1/5 - 1/7)/(1/3 - 1/5) = 3/7,
        # of r^4 = (1/7 - 1/9)/(1/3 - 1/5) = 5/21; four standard errors.
        body = self.body("L23_basket", 0)
        points = self.points(body) / [body.radius_um, body.height_um[1], body.radius_um]
        square = (points**2).sum(axis=1)
        error = np.sqrt((5 / 21 - (3 / 7) ** 2) / len(points))
        assert square.mean() == pytest.approx(3 / 7, abs=4 * error)
        assert abs((points[:, 1] ** 2).mean() / square.mean() - 1 / 3) < 0.01

    def test_cylinder_fades_to_its_side_and_is_even_along_its_axis(self):
        # Density 1 - r^2 on the unit disc: mean of r^2 = 1/3, of r^4 = 1/6.
        body = self.body("L1_dense", 0)
        points = self.points(body)
        square = (points[:, [0, 2]] ** 2).sum(axis=1) / body.radius_um**2
        error = np.sqrt((1 / 6 - 1 / 9) / len(points))
        assert square.mean() == pytest.approx(1 / 3, abs=4 * error)
        depth = 800.0 - points[:, 1]
        even = np.histogram(depth, bins=5, range=(10, 115))[0] / len(points)
        np.testing.assert_allclose(even, 0.2, atol=4 * np.sqrt(0.16 / len(points)))

    def test_more_points_keep_the_earlier_ones(self):
        for name in ("L23_basket", "L1_dense", "L23_axo_axonic"):
            body = self.body(name, 0)
            few = carrier_points(body, self.SITE, self.draw, "part 0", 50, 20.0)
            many = carrier_points(body, self.SITE, self.draw, "part 0", 80, 20.0)
            np.testing.assert_array_equal(many[:50], few)


def lines_without_version(path):
    lines = path.read_text(encoding="utf-8").splitlines()
    return [line for line in lines if not line.startswith("# circuitgen ")]


class TestReproduction:
    # Coordinates are rounded to 0.01 um, so that the last bits of sines and of the
    # incomplete beta function, in which platforms differ, do not show.
    @pytest.mark.parametrize("path", DESCRIPTIONS, ids=lambda path: path.stem)
    def test_shipped_files_grow_again(self, path, tmp_path):
        for file in grow_files(path, tmp_path, None, SEED):
            assert lines_without_version(file) == lines_without_version(
                FOLDER / file.name
            )

    def test_same_key_same_neuron_whatever_grew_before(self):
        description = read_description(FOLDER / "growth" / "L23_bitufted.yaml")
        first = grow(description, 1, 7)
        grow(description, 0, 7)
        again = grow(description, 1, 7)
        for field in dataclasses.fields(first)[1:]:
            np.testing.assert_array_equal(
                getattr(first, field.name), getattr(again, field.name)
            )

    def test_seed_and_number_make_other_neurons(self):
        description = read_description(FOLDER / "growth" / "L23_bitufted.yaml")
        depths = len(description.soma_depths_um)
        grown = [grow(description, *key) for key in ((0, 7), (0, 8), (depths, 7))]
        lengths = {round(neuron.length_um.sum(), 2) for neuron in grown}
        assert len(lengths) == 3
        assert [neuron.name[-2:] for neuron in grown] == ["_1", "_1", "_4"]


SMALL = """\
name: sketch
cortex_thickness_um: 1000
soma_radius_um: 6
soma_depths_um: [{depth}]
neurites:
  - kind: basal
    cable_um: 900
    balance: {balance}
    stems: {{count: [1, 5], elevation_deg: [-90, 90]}}
    bare_um: 15
    start_radius_um: 1
    tip_radius_um: 0.3
    wiggle: {wiggle}
    parts:
      - {{shape: ellipsoid, radius_um: 80, height_um: [-90, 90]}}
"""


@given(
    depth=st.integers(40, 960),
    balance=st.floats(0, 5).map(lambda value: round(value, 3)),
    wiggle=st.floats(0, 0.6).map(lambda value: round(value, 3)),
    seed=st.integers(0, 2**64 - 1),
)
@settings(max_examples=40, deadline=None, derandomize=True)
def test_any_description_grows_a_tree_below_the_pia(
    tmp_path_factory, depth, balance, wiggle, seed
):
    path = tmp_path_factory.mktemp("sketch") / "sketch.yaml"
    path.write_text(SMALL.format(depth=depth, balance=balance, wiggle=wiggle))
    neuron = grow(read_description(path), 0, seed)
    assert neuron.parent[0] == -1
    assert (neuron.parent[1:] < np.arange(1, neuron.parent.size)).all()
    assert (neuron.parent[1:] >= 0).all()
    children = np.bincount(neuron.parent[1:])
    assert (children[1:] <= 2).all()
    assert 1 <= children[0] <= 5
    assert (depth - neuron.position_um[:, 1]).min() > 0
    assert (neuron.length_um[neuron.parent > 0] > 0).all()
    # Spread of 10 % and a miss of at most 20 %.
    assert 900 * 0.72 < neuron.length_um.sum() - 15 < 900 * 1.32 + 15


class TestErrors:
    @pytest.fixture
    def good(self):
        return SMALL.format(depth=300, balance=0.4, wiggle=0.3)

    def problems(self, tmp_path, text):
        path = tmp_path / "bad.yaml"
        path.write_text(text)
        with pytest.raises(InputError) as caught:
            grow_files(path, tmp_path / "out", 1, 1)
        assert not (tmp_path / "out").exists()
        return caught.value.problems

    @pytest.mark.parametrize(
        ("old", "new", "line", "field", "rule"),
        [
            ("name: sketch", "name: a/b", 1, "name", "letters"),
            ("soma_radius_um: 6", "soma_radius_um: -6", 3, "soma_radius_um", "> 0"),
            ("[300]", "[]", 4, "soma_depths_um", "at least one"),
            ("[300]", "[300, 1200]", 4, "soma_depths_um.2", "cortex_thickness_um"),
            ("kind: basal", "kind: dendrite", 6, "neurites.1.kind", "one of axon"),
            ("balance: 0.4", "balance: 0.4x", 8, "neurites.1.balance", "a number"),
            ("[1, 5]", "[5, 1]", 9, "neurites.1.stems.count", "[fewest, most]"),
            (
                "tip_radius_um: 0.3",
                "tip_radius_um: 3",
                12,
                "neurites.1.tip_radius_um",
                "<=",
            ),
            (
                "height_um: [",
                "depth_um: [1, 2], height_um: [",
                15,
                "parts.1",
                "keep one",
            ),
            ("height_um: [-90, 90]", "height_um: [90, -90]", 15, "height_um", "smaller"),
            ("ellipsoid", "rows", 15, "row_length_um", "is missing"),
            ("height_um: [-90, 90]", "height_um: [290, 390]", 15, "parts.1", "middle"),
            (
                "80, height_um: [-90, 90]",
                "9, height_um: [-20, 20]",
                15,
                "parts.1",
                "hardly",
            ),
            ("cable_um: 900", "cable_um: 200000", 7, "neurites.1.cable_um", "suit"),
        ],
    )
    def test_each_names_line_field_and_rule(
        self, good, tmp_path, old, new, line, field, rule
    ):
        assert good.count(old) == 1
        problems = self.problems(tmp_path, good.replace(old, new))
        hits = [
            problem
            for problem in problems
            if problem.line == line and field in problem.field and rule in problem.rule
        ]
        assert len(hits) == 1
        assert len(problems) == 1

    def test_misspelt_key_gets_the_nearest_name(self, good, tmp_path):
        problems = self.problems(tmp_path, good.replace("balance", "balanse"))
        assert {problem.line for problem in problems} == {6, 8}
        assert "balance" in {problem.nearest for problem in problems}

    def test_two_ways_out_of_the_soma(self, good, tmp_path):
        text = good.replace("    bare_um", "    trunk: {end_height_um: 50}\n    bare_um")
        (problem,) = self.problems(tmp_path, text)
        assert (problem.line, problem.field) == (10, "neurites.1.trunk")

    def test_growing_without_a_file_names_the_field(self, good, tmp_path):
        path = tmp_path / "narrow.yaml"
        path.write_text(
            good.replace("80, height_um: [-90, 90]", "9, height_um: [-20, 20]")
        )
        with pytest.raises(EnvelopeError, match=r"^neurites\.1\.parts\.1 has hardly"):
            grow(read_description(path), 0, 1)
