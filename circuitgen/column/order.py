"""The order of cells along a space-filling curve."""

from __future__ import annotations

import numpy as np

TILE_UM = 50.0


def hilbert_index(column: np.ndarray, row: np.ndarray, bits: int) -> np.ndarray:
    """Return places along Hilbert's curve (1891) through a square of 2**bits tiles.

    Parameters
    ----------
    column, row : int64 (n,)
        Tiles, 0 to 2**bits - 1.
    bits : int
        Levels of the curve, at most 31.

    Returns
    -------
    ndarray of int64, shape (n,)
        Tiles with consecutive numbers share a side.
    """
    column, row = column.copy(), row.copy()
    index = np.zeros_like(column)
    for bit in reversed(range(bits)):
        right, upper = (column >> bit) & 1, (row >> bit) & 1
        index = 4 * index + ((3 * right) ^ upper)
        # Turn the quarter so that the curve enters and leaves it at the right corners.
        flip = (upper == 0) & (right == 1)
        mask = (1 << bit) - 1
        column, row = column & mask, row & mask
        column, row = (
            np.where(flip, mask - column, column),
            np.where(flip, mask - row, row),
        )
        swap = upper == 0
        column, row = np.where(swap, row, column), np.where(swap, column, row)
    return index


def order_in_space(
    type_index: np.ndarray, position_um: np.ndarray, corner_um: np.ndarray
) -> np.ndarray:
    """Return the order of cells: by type, along Hilbert's curve, from the pia down.

    The curve runs through square tiles of `TILE_UM` in the x-y plane; within a tile
    cells go from the pia downward.

    Parameters
    ----------
    type_index : int (n,)
        Cell type of every cell.
    position_um : float64 (n, 3)
        Soma centres.
    corner_um : float64 (2, 3)
        Lowest and highest corner of a box around all cells; fixes the tiles.
    """
    low, high = np.asarray(corner_um)[:, :2]
    tile = np.floor((position_um[:, :2] - low) / TILE_UM).astype(np.int64)
    bits = int((high - low).max() / TILE_UM).bit_length()
    curve = hilbert_index(tile[:, 0], tile[:, 1], bits)
    return np.lexsort((-position_um[:, 2], curve, type_index))
