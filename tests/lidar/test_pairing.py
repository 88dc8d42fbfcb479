import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bandratio.lidar.pairing import pair_shots


def _greedy(a, b, radius):
    """The rule itself, slowly: the nearest two are a pair, then the nearest two of the rest."""
    distance = np.linalg.norm(a[:, None] - b[None], axis=2)
    pairs = []
    while distance.size and np.min(distance, initial=np.inf) <= radius:
        i, j = np.unravel_index(np.argmin(distance), distance.shape)
        pairs.append((int(i), int(j)))
        distance[i, :] = np.inf
        distance[:, j] = np.inf
    return sorted(pairs)


@pytest.mark.parametrize("radius", [0.05, 0.3, 5.0])
def test_pairs_are_those_of_the_rule(radius):
    rng = np.random.default_rng(3)
    a, b = rng.random((60, 2)), rng.random((80, 2))
    first, second, distance = pair_shots(a, b, radius)
    assert list(zip(first.tolist(), second.tolist(), strict=True)) == _greedy(a, b, radius)
    np.testing.assert_allclose(distance, np.linalg.norm(a[first] - b[second], axis=1))


grid = st.lists(st.tuples(st.integers(0, 4), st.integers(0, 4)), min_size=1, max_size=12)


@given(grid, grid, st.sampled_from([0.0, 1.0, 1.5, 10.0]))
def test_one_to_one_and_none_left_within_reach_even_with_equal_distances(a, b, radius):
    a, b = np.array(a, dtype=float), np.array(b, dtype=float)
    first, second, distance = pair_shots(a, b, radius)
    assert len(set(first)) == len(first)
    assert len(set(second)) == len(second)
    assert (distance <= radius).all()
    left_a = np.delete(a, first, axis=0)
    left_b = np.delete(b, second, axis=0)
    assert not (np.linalg.norm(left_a[:, None] - left_b[None], axis=2) <= radius).any()


def test_missing_positions_are_never_paired():
    first, second, _ = pair_shots([[np.nan, 0], [0, 0]], [[0, np.nan], [0, 0.5]], 1.0)
    assert (first.tolist(), second.tolist()) == ([1], [1])
