"""Compiled counts of common neighbours, 64 cells at a time."""

from __future__ import annotations

import numpy as np

from circuitgen.core.compilation import kernel

_FIVES = np.uint64(0x5555555555555555)
_THREES = np.uint64(0x3333333333333333)
_FIFTEENS = np.uint64(0x0F0F0F0F0F0F0F0F)
_ONES = np.uint64(0x0101010101010101)


@kernel
def _bits(word):
    """Count the bits of a 64-bit word (Warren 2012, Hacker's Delight, section 5-1)."""
    word = word - ((word >> np.uint64(1)) & _FIVES)
    word = (word & _THREES) + ((word >> np.uint64(2)) & _THREES)
    word = (word + (word >> np.uint64(4))) & _FIFTEENS
    return np.int64((word * _ONES) >> np.uint64(56))


@kernel
def count_common(first, second, neighbours, out):
    """Count third cells by how they stand to both cells of each dyad.

    Parameters
    ----------
    first, second : int (dyads,)
        Cells of connected dyads.
    neighbours : uint64 (3, cells, words)
        Bits of the cells that a cell sends to, receives from, is mutual with.
    out : int64 (3, 3)
        Third cells by their relation to the first and to the second cell; added to.
    """
    for i in range(first.size):
        a, b = first[i], second[i]
        for word in range(neighbours.shape[2]):
            for x in range(3):
                mine = neighbours[x, a, word]
                if mine:
                    for y in range(3):
                        both = mine & neighbours[y, b, word]
                        if both:
                            out[x, y] += _bits(both)
