"""Trees as arrays, against climbing them sample by sample."""

import numpy as np
import oracles_morphology as oracles
from hypothesis import given
from hypothesis import strategies as st

from circuitgen.morphology import trees


@st.composite
def links(draw):
    """Any parents of up to 25 samples, cycles included."""
    n = draw(st.integers(1, 25))
    return np.array(draw(st.lists(st.integers(-1, n - 1), min_size=n, max_size=n)))


@given(links())
def test_depths_orders_and_cycles_are_those_of_the_slow_twin(parent):
    expected = [oracles.depth(parent, row) for row in range(parent.size)]
    assert trees.depth_of(parent).tolist() == expected
    order = trees.order_from_roots(parent)
    sound = np.flatnonzero(np.array(expected) >= 0)
    assert sorted(order.tolist()) == sound.tolist()
    place = {row: i for i, row in enumerate(order.tolist())}
    assert all(place.get(int(parent[row]), -1) < place[row] for row in sound.tolist())
    in_cycle = [row for cycle in trees.cycles_of(parent) for row in cycle.tolist()]
    assert len(in_cycle) == len(set(in_cycle))
    # A sample is in a cycle when climbing from it comes back to it.
    for row in range(parent.size):
        here, back = int(parent[row]), False
        for _ in range(parent.size):
            back |= here == row
            here = int(parent[here]) if here >= 0 else -1
        assert (row in in_cycle) == back


@given(st.lists(st.tuples(st.integers(-1, 99), st.booleans()), min_size=1, max_size=25))
def test_the_nearest_stop_is_that_of_the_slow_twin(draws):
    parent = np.array([min(above, i - 1) for i, (above, _) in enumerate(draws)])
    stop = np.array([is_stop for _, is_stop in draws])
    expected = [oracles.nearest_stop(parent, stop, row) for row in range(parent.size)]
    assert trees.nearest_stop(parent, stop).tolist() == expected
