"""An arbor: one reconstructed neuron as capsules, upright, its soma at the origin."""

from __future__ import annotations

from dataclasses import dataclass, fields
from enum import IntEnum

import numpy as np


class Kind(IntEnum):
    """What a segment is; the numbers are those of SWC 1.0."""

    SOMA = 1
    AXON = 2
    BASAL = 3
    APICAL = 4


@dataclass(frozen=True)
class Arbor:
    """Capsules of one neuron in its own frame: z toward the pia, soma centre at 0.

    A capsule is a straight piece with a radius at each end, no longer than the
    spec's `min_spacing_um`. Arrays are read-only. n segments, m samples of the file.

    Attributes
    ----------
    name : str
        File name without ending.
    start_um, end_um : float64 (n, 3)
        Ends of the centre line; `start` is the end nearer to the soma.
    start_radius_um, end_radius_um : float64 (n,)
        Radii at the two ends.
    kind : int8 (n,)
        A `Kind`.
    parent : int32 (n,)
        Index of the segment that this one continues, -1 where it leaves the soma.
    initial : bool (n,)
        True for axon segments of the axon initial segment.
    path_um : float64 (n,)
        Path length along the reconstruction from the soma to `start`.
    path_end_um : float64 (n,)
        The same to `end`.
    cable_start_um, cable_end_um : float64 (n,)
        Where the segment begins and ends on the cable coordinate, in which segments
        and the file's own sample-to-sample pieces lie one after another.
    first_piece, last_piece : int32 (n,)
        First and last piece of the file that the segment stands for.
    piece_number : int64 (m,)
        SWC number of the sample that ends each piece.
    piece_backward : bool (m,)
        True where the file runs the piece toward the soma.
    piece_bounds_um : float64 (m + 1,)
        Cable coordinate of the piece boundaries, never decreasing, from 0: where the
        samples stand beside the segments.
    """

    name: str
    start_um: np.ndarray
    end_um: np.ndarray
    start_radius_um: np.ndarray
    end_radius_um: np.ndarray
    kind: np.ndarray
    parent: np.ndarray
    initial: np.ndarray
    path_um: np.ndarray
    path_end_um: np.ndarray
    cable_start_um: np.ndarray
    cable_end_um: np.ndarray
    first_piece: np.ndarray
    last_piece: np.ndarray
    piece_number: np.ndarray
    piece_backward: np.ndarray
    piece_bounds_um: np.ndarray

    def __post_init__(self):
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, np.ndarray):
                value.setflags(write=False)

    @property
    def segments_n(self) -> int:
        """Number of capsules."""
        return self.kind.size

    @property
    def length_um(self) -> np.ndarray:
        """Length of every segment's centre line, in micrometres, shape (n,)."""
        return np.linalg.norm(self.end_um - self.start_um, axis=1)

    @property
    def soma_radius_um(self) -> float:
        """Largest radius among the soma's capsules, in micrometres."""
        return float(self.end_radius_um[self.kind == Kind.SOMA].max())

    def place_in_file(
        self, segment: np.ndarray, fraction: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Turn places on segments into places on the samples of the SWC file.

        Parameters
        ----------
        segment : int (k,)
            Segment indices.
        fraction : float (k,)
            0 at the segment's start, 1 at its end.

        Returns
        -------
        number : int64 (k,)
            SWC number of the sample that ends the piece.
        fraction : float64 (k,)
            0 at that sample's parent, 1 at the sample.
        """
        begin, end = self.cable_start_um[segment], self.cable_end_um[segment]
        cable = begin + fraction * (end - begin)
        bounds = self.piece_bounds_um
        piece = np.searchsorted(bounds, cable, side="left") - 1
        piece = np.clip(piece, self.first_piece[segment], self.last_piece[segment])
        length = bounds[piece + 1] - bounds[piece]
        # A piece of no length is its sample.
        inside = np.ones(length.shape)
        np.divide(cable - bounds[piece], length, out=inside, where=length > 0)
        inside = np.where(self.piece_backward[piece], 1.0 - inside, inside)
        return self.piece_number[piece], np.clip(inside, 0.0, 1.0)

    def place_on_segment(
        self, number: np.ndarray, fraction: np.ndarray
    ) -> tuple[np.ndarray, np.ndarray]:
        """Turn places on the samples of the SWC file into places on segments.

        The inverse of `place_in_file`; arguments and results are swapped.
        """
        order = np.argsort(self.piece_number, kind="stable")
        place = np.searchsorted(self.piece_number[order], number)
        piece = order[np.minimum(place, order.size - 1)]
        inside = np.where(self.piece_backward[piece], 1.0 - fraction, fraction)
        length = self.piece_bounds_um[piece + 1] - self.piece_bounds_um[piece]
        cable = self.piece_bounds_um[piece] + inside * length
        by_start = np.argsort(self.cable_start_um, kind="stable")
        starts = self.cable_start_um[by_start]
        at = np.searchsorted(starts, cable, side="right") - 1
        segment = by_start[np.maximum(at, 0)]
        begin, end = self.cable_start_um[segment], self.cable_end_um[segment]
        along = np.zeros(cable.shape)
        np.divide(cable - begin, end - begin, out=along, where=end > begin)
        return segment, np.clip(along, 0.0, 1.0)
