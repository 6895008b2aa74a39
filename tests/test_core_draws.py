"""Keyed draws against numpy's own Philox generator."""

from __future__ import annotations

import hashlib

import numpy as np
import pytest
from scipy.stats import kstest

from circuitgen.core import draws
from circuitgen.core.draws import stage_key, uniforms


def _numpy_row(seed, stage, index, first, second, third):
    word = int.from_bytes(hashlib.sha256(stage.encode()).digest()[:8], "little")
    key = np.array([seed, word], dtype=np.uint64)
    counter = np.array([index, first, second, third], dtype=np.uint64)
    return np.random.Generator(np.random.Philox(key=key, counter=counter)).random(4)


def test_draws_equal_numpys_philox_for_random_keys_and_counters():
    rng = np.random.default_rng(0)
    for trial in range(2000):
        seed = int(rng.integers(0, 2**64, dtype=np.uint64))
        # The index stays below its last value: numpy carries there, we do not need to.
        words = [int(rng.integers(0, 2 ** int(rng.integers(1, 63)))) for _ in range(4)]
        stage = f"stage {trial % 17}"
        found = uniforms(seed, stage, *words[1:], index=words[0])
        np.testing.assert_array_equal(found, [_numpy_row(seed, stage, *words)])


@pytest.mark.parametrize("seed", [0, 1, 2**63, 2**64 - 1])
def test_draws_of_many_rows_are_those_of_each_row(seed):
    first = np.arange(50) * 7
    second = np.arange(50)[::-1]
    found = uniforms(seed, "some", first, second, 3, index=np.arange(50) % 4)
    for row in range(50):
        by_numpy = _numpy_row(seed, "some", row % 4, first[row], second[row], 3)
        np.testing.assert_array_equal(found[row], by_numpy)


def test_ids_are_broadcast_and_made_flat():
    found = uniforms(5, "some", np.arange(3)[:, None], np.arange(2)[None, :])
    assert found.shape == (6, 4)
    np.testing.assert_array_equal(found[3], uniforms(5, "some", 1, 1)[0])
    assert uniforms(5, "some", 1).shape == (1, 4)
    assert uniforms(5, "some", np.zeros(0, int)).shape == (0, 4)


def test_stages_seeds_and_every_id_give_other_numbers():
    rows = np.concatenate(
        [
            uniforms(1, "one", 2, 3, 4, index=5),
            uniforms(1, "two", 2, 3, 4, index=5),
            uniforms(2, "one", 2, 3, 4, index=5),
            uniforms(1, "one", 3, 2, 4, index=5),
            uniforms(1, "one", 2, 4, 3, index=5),
            uniforms(1, "one", 2, 3, 4, index=6),
        ]
    )
    assert np.unique(rows).size == rows.size
    assert stage_key("one") != stage_key("two")


def test_numbers_are_uniform_from_zero_to_below_one():
    """Kolmogorov-Smirnov on a fixed seed; false alarm 1e-4 had it been random."""
    found = uniforms(9, "uniform", np.arange(20_000)).reshape(-1)
    assert found.min() >= 0
    assert found.max() < 1
    assert kstest(found, "uniform").pvalue > 1e-4


def test_kernels_draw_the_same_without_the_compiler(monkeypatch):
    compiled = uniforms(2**64 - 1, "some", np.arange(40), 2**40)
    for name in ("_high_product", "_fill_uniforms"):
        kernel = getattr(draws, name)
        monkeypatch.setattr(draws, name, getattr(kernel, "py_func", kernel))
    plain = uniforms(2**64 - 1, "some", np.arange(40), 2**40)
    np.testing.assert_array_equal(plain, compiled)
