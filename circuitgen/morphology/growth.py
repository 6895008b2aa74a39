"""Stand-in arbors: grow neurons from a short description, and write them as SWC.

Grown neurons have invented statistics. They stand in where nobody has a
reconstruction, and every file written here says so.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from circuitgen import __version__
from circuitgen.core.draws import uniforms
from circuitgen.core.errors import InputError
from circuitgen.core.files import whole_file
from circuitgen.morphology import branches
from circuitgen.morphology.arbor import Kind
from circuitgen.morphology.describe import (
    Description,
    EnvelopeError,
    Neurite,
    check_description,
)
from circuitgen.morphology.envelope import (
    Draw,
    Site,
    Skeleton,
    carrier_points,
    clearance_um,
    lay_skeleton,
)
from circuitgen.morphology.spanning import balanced_tree
from circuitgen.spec import read_document

_KINDS = {"axon": Kind.AXON, "basal": Kind.BASAL, "apical": Kind.APICAL}
_TWIG_UM = {"axon": 8.0, "basal": 12.0, "apical": 12.0}
_CABLE_TOLERANCE = 0.03  # good enough to stop trying
_CABLE_MISS = 0.2  # too far from what was described
_TRIES = 8
_MOST_POINTS = 5_000


@dataclass(frozen=True)
class GrownNeuron:
    """A grown neuron, y toward the pia, soma centre at the origin; sample 0 is the soma.

    Attributes
    ----------
    name : str
        Type and number, as in the file's name.
    kind : int8 (n,)
        A `Kind`.
    position_um : float64 (n, 3)
        Sample positions, rounded to 0.01 um.
    radius_um : float64 (n,)
        Sample radii, rounded to 0.01 um.
    parent : int64 (n,)
        Index of the sample before, -1 for the soma.
    """

    name: str
    kind: np.ndarray
    position_um: np.ndarray
    radius_um: np.ndarray
    parent: np.ndarray

    @property
    def length_um(self) -> np.ndarray:
        """Length of the piece that ends at each sample, 0 for the soma, shape (n,)."""
        return branches.steps_um(self.position_um, self.parent)


def grow(description: Description, index: int, seed: int) -> GrownNeuron:
    """Grow one neuron of a type.

    Parameters
    ----------
    description : Description
        The type.
    index : int
        Which neuron, from 0; it also picks the soma depth.
    seed : int
        Seed of every draw; the same description, index and seed grow the same neuron.

    Returns
    -------
    GrownNeuron
    """
    depths = description.soma_depths_um
    grown = [
        _grow_neurite(description, number, depths[index % len(depths)], index, seed)
        for number in range(len(description.neurites))
    ]
    kind, position, radius, parent = [[Kind.SOMA]], [np.zeros((1, 3))], [], [[-1]]
    radius.append([description.soma_radius_um])
    samples_n = 1
    for neurite, (points, above, radii) in zip(description.neurites, grown, strict=True):
        kind.append(np.full(above.size, _KINDS[neurite.kind]))
        position.append(points)
        radius.append(radii)
        parent.append(np.where(above < 0, 0, above + samples_n))
        samples_n += above.size
    return GrownNeuron(
        name=f"{description.name}_{index + 1}",
        kind=np.concatenate(kind).astype(np.int8),
        # Rounding hides the last bits, in which mathematics libraries may differ.
        position_um=np.round(np.concatenate(position), 2) + 0.0,
        radius_um=np.round(np.concatenate(radius), 2),
        parent=np.concatenate(parent).astype(np.int64),
    )


def _grow_neurite(
    description: Description, number: int, soma_depth_um: float, index: int, seed: int
):
    """Grow one neurite with as many carrier points as its cable length asks for."""
    neurite = description.neurites[number]

    def draw(purpose: str, rows_n: int) -> np.ndarray:
        stage = f"growth {description.name} {purpose}"
        return uniforms(seed, stage, index, number, index=np.arange(rows_n))

    vary = 1.0 + description.size_spread * (2.0 * draw("size", 1)[0] - 1.0)
    site = Site(
        soma_depth_um,
        description.soma_radius_um,
        description.cortex_thickness_um,
        float(vary[1]),
    )
    wanted_um = neurite.cable_um * float(vary[0])
    tree = _meet_cable(neurite, number, site, draw, wanted_um)
    return _finish(neurite, *tree)


def _meet_cable(neurite: Neurite, number: int, site: Site, draw: Draw, wanted_um: float):
    """Try numbers of carrier points until the cable is as long as wanted."""
    skeleton = lay_skeleton(neurite, site, draw)
    points_n = wanted_um / 20.0
    best = (np.inf, 0.0, None)
    for _ in range(_TRIES):
        points = _draw_points(neurite, number, site, draw, min(points_n, _MOST_POINTS))
        tree = _span(neurite, site, skeleton, draw, points)
        cable_um = float(branches.steps_um(*tree).sum())
        miss = abs(cable_um / wanted_um - 1.0)
        if miss < best[0]:
            best = (miss, cable_um, tree)
        full = points_n >= _MOST_POINTS and cable_um < wanted_um
        if miss < _CABLE_TOLERANCE or full:
            break
        # The length of a spanning tree of n points in a body goes as n^(2/3).
        points_n *= float(np.clip((wanted_um / cable_um) ** 1.5, 0.25, 4.0))
    if best[0] > _CABLE_MISS:
        rule = f"= {neurite.cable_um:g} does not suit the envelope, which takes about "
        raise EnvelopeError(("neurites", number, "cable_um"), f"{rule}{best[1]:.0f}")
    return best[2]


def _draw_points(
    neurite: Neurite, number: int, site: Site, draw: Draw, points_n: float
) -> np.ndarray:
    """Draw the carrier points of all bodies of an envelope."""
    shares = np.array([body.share for body in neurite.parts])
    counts = np.maximum(np.rint(points_n * shares / shares.sum()), 1).astype(int)
    clear_um = clearance_um(neurite, site)
    drawn = []
    for row, body in enumerate(neurite.parts):
        count = int(counts[row])
        points = carrier_points(body, site, draw, f"part {row}", count, clear_um)
        if points is None:
            rule = "has hardly a place inside the cortex and clear of the soma"
            raise EnvelopeError(("neurites", number, "parts", row), rule)
        drawn.append(points)
    return np.concatenate(drawn)


def _span(
    neurite: Neurite, site: Site, skeleton: Skeleton, draw: Draw, points: np.ndarray
):
    """Span the carrier points, and make the branches natural."""
    bare_um = min(neurite.bare_um, skeleton.path_um.max()) - 1e-6
    free = np.flatnonzero(skeleton.path_um >= bare_um)
    order, joined = balanced_tree(
        skeleton.position_um[free], skeleton.path_um[free], points, neurite.balance
    )
    joined = np.where(
        joined < free.size,
        free[np.minimum(joined, free.size - 1)],
        joined - free.size + skeleton.parent.size,
    )
    position = np.concatenate([skeleton.position_um, points[order]])
    parent = np.concatenate([skeleton.parent, joined])
    position, parent = branches.resample(position, parent)
    parent = branches.make_binary(position, parent)
    twig_um = _TWIG_UM[neurite.kind]
    position, parent = branches.prune_twigs(position, parent, twig_um)
    position = branches.smooth(position, parent)
    # Smoothing draws samples away from the tips: even the pieces out again.
    position, parent = branches.resample(position, parent)
    waves = draw("bends", 2 * branches.WAVES_N)
    pia_um = site.soma_depth_um
    return branches.bend(position, parent, neurite.wiggle, pia_um, waves), parent


def _finish(neurite: Neurite, position: np.ndarray, parent: np.ndarray):
    """Taper the radii and number the samples branch after branch."""
    start_um, tip_um = neurite.start_radius_um, neurite.tip_radius_um
    radius = branches.taper(position, parent, start_um, tip_um)
    order = branches.depth_first(position, parent)
    number = np.zeros(order.size, dtype=np.int64)
    number[order] = np.arange(order.size)
    above = parent[order]
    return position[order], np.where(above < 0, -1, number[above]), radius[order]


def _header(description: Description, file_name: str, index: int, seed: int):
    depths = description.soma_depths_um
    return (
        f"{description.name}, number {index + 1}",
        "SYNTHETIC: a grown stand-in with invented statistics, not a measured neuron.",
        "Grown as a spanning tree that balances wire against path length inside an",
        "envelope (Cuntz, Forstner, Borst & Hausser 2010, PLoS Comput Biol 6:e1000877).",
        f"Description {file_name}, seed {seed}, number {index + 1}",
        f"circuitgen {__version__}",
        f"Grown for a soma {depths[index % len(depths)]:g} um below the pia, cortex "
        f"{description.cortex_thickness_um:g} um thick",
        "Micrometres; y toward the pia; soma centre at the origin",
        "sample type x y z radius parent (1 soma, 2 axon, 3 basal, 4 apical)",
    )


def _text(neuron: GrownNeuron, header: tuple[str, ...]) -> str:
    lines = [f"# {line}" for line in header]
    numbers = np.column_stack([neuron.position_um, neuron.radius_um]).tolist()
    samples = zip(neuron.kind.tolist(), numbers, neuron.parent.tolist(), strict=True)
    for sample, (kind, values, parent) in enumerate(samples, start=1):
        x, y, z, radius = (f"{value:.2f}".rstrip("0").rstrip(".") for value in values)
        before = parent + 1 if parent >= 0 else -1
        lines.append(f"{sample} {kind} {x} {y} {z} {radius} {before}")
    return "\n".join(lines) + "\n"


def grow_files(
    description_path: Path, out_dir: Path, count: int | None = None, seed: int = 1
) -> list[Path]:
    """Grow neurons of a described type and write each as an SWC file.

    Parameters
    ----------
    description_path : Path
        A description in YAML.
    out_dir : Path
        Folder for ``NAME_1.swc``, ``NAME_2.swc``, ...; made if absent.
    count : int, optional
        How many; one for each soma depth of the description when None.
    seed : int
        Seed of every draw.

    Returns
    -------
    list of Path
        The files written.

    Raises
    ------
    InputError
        If the description is wrong; nothing is written then.
    """
    description_path, out_dir = Path(description_path), Path(out_dir)
    document = read_document(description_path)
    description = check_description(document)
    if count is None:
        count = len(description.soma_depths_um)
    texts = {}
    for index in range(count):
        try:
            neuron = grow(description, index, seed)
        except EnvelopeError as error:
            raise InputError([document.problem(error.place, error.rule)]) from None
        header = _header(description, description_path.name, index, seed)
        texts[out_dir / f"{neuron.name}.swc"] = _text(neuron, header)
    for path, text in texts.items():
        with whole_file(path) as partial:
            partial.write_text(text, encoding="utf-8", newline="\n")
    return list(texts)
