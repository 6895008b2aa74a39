"""Slow, readable twins of the drawing kernels."""

from __future__ import annotations

import numpy as np

from circuitgen.wiring.law import Law, size_distribution


def synapses_of_pair(uniform, a: int, law: Law) -> int:
    """Draw the synapses of one pair by inverting two distributions in turn."""
    of_size = size_distribution(a, law)
    connected = of_size[1:].sum()
    if uniform[0] >= connected:
        return 0
    below = np.cumsum(of_size[1:]) / connected
    return min(int(np.searchsorted(below, uniform[1], side="right")) + 1, a)


def chosen_sites(uniform, a: int, synapses: int) -> list[int]:
    """Go through a pair's sites; take one with chance needed / left."""
    taken: list[int] = []
    for site in range(a):
        if uniform[site] < (synapses - len(taken)) / (a - site):
            taken.append(site)
    return taken
