import itertools

import dask.array as da
import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import false_discovery_control

from bandratio.detection import false_discovery
from bandratio.detection.false_discovery import adjusted, adjusted_table, false_discovery_cut

from ..reference import benjamini_hochberg_1995 as published

METHODS = {"positive": "bh", "any": "by"}  # scipy's words: the outside reference


def test_published_example():
    p = np.array(published.P_VALUES)
    cut = false_discovery_cut(p, 0.05)
    assert (p <= cut).sum() == published.REJECTED_AT_5_PERCENT
    assert (p <= 0.05 / p.size).sum() == published.REJECTED_BY_BONFERRONI


def _values(seed: int, size: int) -> np.ndarray:
    """P-values of every shape that makes a counting method stumble."""
    rng = np.random.default_rng(seed)
    p = rng.random(size)
    match seed % 6:
        case 1:
            p = p**8
        case 2:  # ties, and values far below the smallest normal float
            p = np.round(p, 1) * rng.choice([0, 5e-324, 1e-300, 0.1, 1], size)
        case 3:  # all within rounding of the line that decides
            p = np.arange(1, size + 1) / size * 0.05 * (1 + 1e-13 * rng.normal(size=size))
            rng.shuffle(p)
        case 4:
            p = np.where(rng.random(size) < 0.3, -0.0, p)
        case 5:
            p = np.full(size, p[0] / 10)
    return np.clip(p, -0.0, 1)


@pytest.mark.parametrize("held", [4_000_000, 7], ids=["whole", "divided"])
@pytest.mark.parametrize("dependence", METHODS)
def test_decisions_and_adjusted_values_are_scipys(held, dependence, monkeypatch):
    monkeypatch.setattr(false_discovery, "_HELD", held)
    for seed, rate in itertools.product(range(180), (0.05, 0.3)):
        p = _values(seed, 2 + seed % 50 if seed < 150 else 3000)
        reference = false_discovery_control(p, method=METHODS[dependence])
        np.testing.assert_array_equal(p <= false_discovery_cut(p, rate, dependence), reference <= rate)
        np.testing.assert_array_equal(adjusted(p, dependence), reference)


def test_a_million_values_decided_as_scipy_does():
    rng = np.random.default_rng(11)
    p = rng.random(1_000_000)
    p[:60_000] **= 5
    for rate in (1e-4, 0.05, 0.5):
        np.testing.assert_array_equal(p <= false_discovery_cut(p, rate), false_discovery_control(p) <= rate)


def test_crowded_bin_is_divided_until_it_is_decided():
    # five million values in one bin: more than are held at once, so the bits below the bin's number decide;
    # the line is met at the end of the crowd, and not by the 300 above it
    rng = np.random.default_rng(3)
    p = 0.04 * (1 + 1e-4 * np.concatenate([rng.uniform(0, 0.5, 5_000_000), rng.uniform(0.9, 1.5, 300)]))
    rate = 0.04 * (1 + 1.2e-4)
    cut = false_discovery_cut(p, rate)
    order = np.sort(p)
    expected = order[np.flatnonzero(order * (p.size / np.arange(1, p.size + 1)) <= rate)[-1]]
    assert cut == expected
    assert 0.9 * p.size < (p <= cut).sum() < p.size - 250


@pytest.mark.parametrize("held", [4_000_000, 100])
def test_streams_lazy_and_labelled_values_alike(held, monkeypatch):
    monkeypatch.setattr(false_discovery, "_HELD", held)
    rng = np.random.default_rng(5)
    p = rng.random((60, 70)) ** 3
    p[rng.random(p.shape) < 0.1] = np.nan
    expected = false_discovery_cut(p[np.isfinite(p)], 0.1)
    assert expected > 0
    assert false_discovery_cut(p, 0.1) == expected
    lazy = da.from_array(p, chunks=(7, 30))
    assert false_discovery_cut(lazy, 0.1) == expected
    assert false_discovery_cut(xr.DataArray(lazy, dims=("y", "x")), 0.1) == expected
    assert false_discovery_cut(xr.DataArray(p, dims=("y", "x")), 0.1) == expected
    assert false_discovery_cut(lambda: (row for row in p), 0.1) == expected
    assert false_discovery_cut(p[::-1, ::-1], 0.1) == expected


def test_single_precision_is_decided_as_the_same_numbers_in_double():
    p = np.random.default_rng(8).random(2_500_000, dtype=np.float32) ** 2
    assert false_discovery_cut(p, 0.05) == false_discovery_cut(p.astype(float), 0.05)


def test_nothing_rejected_and_nothing_given():
    assert false_discovery_cut([0.3, 0.9], 0.05) == -1.0
    assert false_discovery_cut([], 0.05) == -1.0
    assert false_discovery_cut([np.nan, np.nan], 0.05) == -1.0
    assert false_discovery_cut([0.0], 0.05) == 0.0
    assert adjusted([]).shape == (0,)


def test_missing_values_stay_missing_and_do_not_count():
    q = adjusted([[0.01, np.nan], [0.04, 0.03]])
    np.testing.assert_allclose(q, [[0.03, np.nan], [0.04, 0.04]])
    assert np.isnan(adjusted_table([0.01, 0.2])([np.nan])[0])


@given(st.lists(st.floats(0, 1), min_size=1, max_size=40), st.sampled_from(sorted(METHODS)))
def test_table_is_never_below_and_at_most_a_bin_above(p, dependence):
    exact = adjusted(p, dependence)
    looked_up = adjusted_table(p, dependence)(p)
    assert (looked_up >= exact).all()
    assert (looked_up <= exact * (1 + 1 / 512) + 1e-300).all()


def test_false_share_holds_on_average():
    # Benjamini & Hochberg's theorem: mean share of false discoveries at most (share of true nulls) × rate
    rng = np.random.default_rng(21)
    shares = []
    for _ in range(2000):
        p = rng.random(200)
        p[:40] = p[:40] ** 6
        found = p <= false_discovery_cut(p, 0.1)
        shares.append(found[40:].sum() / max(found.sum(), 1))
    standard_error = np.std(shares) / np.sqrt(len(shares))
    assert abs(np.mean(shares) - 0.08) < 4 * standard_error


@pytest.mark.parametrize(
    ("p", "rate", "dependence", "error", "message"),
    [
        ([0.1, 1.2], 0.05, "positive", ValueError, r"must lie in \[0, 1\].*got 1.2"),
        ([0.1, -0.2], 0.05, "positive", ValueError, r"got -0.2"),
        ([0.1, np.inf], 0.05, "positive", ValueError, "got inf"),
        ([0.1], 5, "positive", ValueError, "must lie between 0 and 1.*got 5"),
        ([0.1], "x", "positive", TypeError, "false discovery rate must be a number"),
        ([0.1], 0.05, "negative", ValueError, "one of positive, any, got 'negative'"),
        (iter([0.1]), 0.05, "positive", TypeError, "passed over once only; give a callable"),
    ],
)
def test_bad_input(p, rate, dependence, error, message):
    with pytest.raises(error, match=message):
        false_discovery_cut(p, rate, dependence)


def test_bad_p_values_for_adjusted():
    with pytest.raises(ValueError, match="got 2"):
        adjusted([0.1, 2])
    with pytest.raises(ValueError, match="got inf"):
        adjusted([0.1, np.inf])
    with pytest.raises(ValueError, match="got -1"):
        adjusted_table([0.1])([-1])


def test_second_pass_that_differs_is_refused(monkeypatch):
    monkeypatch.setattr(false_discovery, "_HELD", 10)
    passes = itertools.count()

    def blocks():
        return [np.linspace(1e-6, 1e-3, 30) / (1 + next(passes))]

    with pytest.raises(ValueError, match="other values at the second pass"):
        false_discovery_cut(blocks, 0.05)
