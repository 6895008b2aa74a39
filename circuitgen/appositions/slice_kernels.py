"""Compiled walk from sites back to the somata: which paths stay inside a slice."""

from __future__ import annotations

from circuitgen.core.compilation import kernel


@kernel
def _stays(paths, arbor, segment, fraction, across_x, across_y, low, high):
    """Tell whether the path from a place to the soma stays between two planes.

    The planes are `low` and `high` along (across_x, across_y), both in the arbor's own
    frame. Pieces are straight, so that their ends decide.
    """
    at = paths.first[arbor] + segment
    x = paths.start[at, 0] + fraction * (paths.end[at, 0] - paths.start[at, 0])
    y = paths.start[at, 1] + fraction * (paths.end[at, 1] - paths.start[at, 1])
    along = x * across_x + y * across_y
    if along < low or along > high:
        return False
    while segment >= 0:
        at = paths.first[arbor] + segment
        along = paths.start[at, 0] * across_x + paths.start[at, 1] * across_y
        if along < low or along > high:
            return False
        segment = paths.parent[at]
    return True


@kernel
def count_kept(paths, pre, post, first, sites, across, near, offset, thickness, out):
    """Count the sites of every pair that every placed slice keeps, into `out`.

    Parameters
    ----------
    paths : Paths
    pre, post : tuple of (pairs,)
        Arbor, cosine and sine of the azimuth of each pair's two cells.
    first : (pairs + 1,)
        Where the sites of each pair begin.
    sites : tuple of (sites,)
        Axon segment and fraction, target segment and fraction.
    across : (pairs, placements, 2)
        Unit vector across the slice.
    near : (pairs, placements)
        How far the presynaptic soma lies behind the first face.
    offset : (pairs, 2)
        From the presynaptic soma to the postsynaptic one.
    thickness : float
    out : int32 (pairs, placements)
    """
    pre_arbor, pre_cosine, pre_sine = pre
    post_arbor, post_cosine, post_sine = post
    axon, axon_fraction, target, target_fraction = sites
    for i in range(pre_arbor.size):
        for j in range(near.shape[1]):
            x, y = across[i, j, 0], across[i, j, 1]
            # The slice's normal in the frames of the two arbors.
            pre_x = pre_cosine[i] * x + pre_sine[i] * y
            pre_y = pre_cosine[i] * y - pre_sine[i] * x
            post_x = post_cosine[i] * x + post_sine[i] * y
            post_y = post_cosine[i] * y - post_sine[i] * x
            low = -near[i, j]
            apart = offset[i, 0] * x + offset[i, 1] * y
            kept = 0
            for site in range(first[i], first[i + 1]):
                if _stays(
                    paths, pre_arbor[i], axon[site], axon_fraction[site], pre_x, pre_y,
                    low, low + thickness,
                ) and _stays(
                    paths, post_arbor[i], target[site], target_fraction[site], post_x,
                    post_y, low - apart, low - apart + thickness,
                ):  # fmt: skip
                    kept += 1
            out[i, j] = kept
