"""Cells in place: what the column room hands to every later room."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Cells:
    """n placed cells, in order of cell id: by type, then along a space-filling curve.

    Neighbours in id are neighbours in space, so that a block of consecutive cells is
    compact.

    Attributes
    ----------
    type_index : int32 (n,)
        Position of the cell's type in ``spec.cell_types``.
    layer_index : int32 (n,)
        Position of the layer that holds the soma in ``spec.layers``.
    arbor_index : int32 (n,)
        Position of the reconstruction in the list of arbors.
    position_um : float64 (n, 3)
        Soma centre in the circuit frame.
    azimuth_deg : float64 (n,)
        Turn of the arbor about the upright axis, counter-clockwise seen from the pia.
    """

    type_index: np.ndarray
    layer_index: np.ndarray
    arbor_index: np.ndarray
    position_um: np.ndarray
    azimuth_deg: np.ndarray

    @property
    def cells_n(self) -> int:
        """Number of cells."""
        return self.type_index.size
