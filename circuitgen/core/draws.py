"""Keyed uniform draws: a draw depends on what it is for, never on when it is made.

Philox 4x64 with ten rounds (Salmon, Moraes, Dror & Shaw 2011, Proc. SC'11, article
16). The key is (seed, name of the stage), the counter the ids of what is drawn, so
blocks, threads, order and restarts cannot change a result.
"""

from __future__ import annotations

import hashlib

import numpy as np

from circuitgen.core.compilation import kernel

_MULTIPLIER_0 = np.uint64(0xD2E7470EE14C6C93)
_MULTIPLIER_1 = np.uint64(0xCA5A826395121157)
_WEYL_0 = np.uint64(0x9E3779B97F4A7C15)
_WEYL_1 = np.uint64(0xBB67AE8584CAA73B)
_LOW = np.uint64(0xFFFFFFFF)
_HALF = np.uint64(32)
_SPARE_BITS = np.uint64(11)
_DRAWS = 4
_ROUNDS = 10


def stage_key(stage: str) -> int:
    """Return the 64-bit key word that stands for a stage's name."""
    return int.from_bytes(hashlib.sha256(stage.encode()).digest()[:8], "little")


@kernel
def _high_product(a, b):
    """Upper 64 bits of the 128-bit product of two unsigned 64-bit numbers."""
    a_low, a_high = a & _LOW, a >> _HALF
    b_low, b_high = b & _LOW, b >> _HALF
    cross = a_high * b_low + ((a_low * b_low) >> _HALF)
    other = a_low * b_high + (cross & _LOW)
    return a_high * b_high + (cross >> _HALF) + (other >> _HALF)


@kernel
def _fill_uniforms(key_0, key_1, index, first, second, third, out):
    for row in range(out.shape[0]):
        # numpy's generator steps the counter before use; so do we.
        c0, c1 = index[row] + np.uint64(1), first[row]
        c2, c3 = second[row], third[row]
        k0, k1 = key_0, key_1
        for _ in range(_ROUNDS):
            high_0, low_0 = _high_product(_MULTIPLIER_0, c0), _MULTIPLIER_0 * c0
            high_1, low_1 = _high_product(_MULTIPLIER_1, c2), _MULTIPLIER_1 * c2
            c0, c1, c2, c3 = high_1 ^ c1 ^ k0, low_1, high_0 ^ c3 ^ k1, low_0
            k0, k1 = k0 + _WEYL_0, k1 + _WEYL_1
        out[row, 0] = np.float64(c0 >> _SPARE_BITS) * 2.0**-53
        out[row, 1] = np.float64(c1 >> _SPARE_BITS) * 2.0**-53
        out[row, 2] = np.float64(c2 >> _SPARE_BITS) * 2.0**-53
        out[row, 3] = np.float64(c3 >> _SPARE_BITS) * 2.0**-53


def uniforms(seed, stage, first, second=0, third=0, index=0) -> np.ndarray:
    """Draw four uniform numbers in [0, 1) for every row of ids.

    Parameters
    ----------
    seed : int
        The spec's seed, 0 to 2**64 - 1.
    stage : str
        Name of the stage that draws; stages never share numbers.
    first, second, third : array_like of int
        Ids of what is drawn, broadcast against each other and made flat; not negative.
    index : array_like of int
        Which block of four, for things that need more than four numbers.

    Returns
    -------
    ndarray of float64, shape (n, 4)
        Row i equals the first four doubles of ``numpy.random.Philox(key=[seed,
        stage_key(stage)], counter=[index, first, second, third])``.
    """
    words = np.broadcast_arrays(index, first, second, third)
    words = [np.ascontiguousarray(word, dtype=np.uint64).reshape(-1) for word in words]
    out = np.zeros((words[0].size, _DRAWS))
    # Products wrap around on purpose; numpy warns of it where kernels run uncompiled.
    with np.errstate(over="ignore"):
        _fill_uniforms(np.uint64(seed), np.uint64(stage_key(stage)), *words, out)
    return out
