"""The volume of cortex, its layers, and cells in place."""

from circuitgen.column.cells import Cells
from circuitgen.column.placement import Placement, place_cells
from circuitgen.column.volume import Volume, make_volume

__all__ = ["Cells", "Placement", "Volume", "make_volume", "place_cells"]
