import dask.array as da
import numpy as np
import pytest
import xarray as xr

import bandratio as br


def _flags(fraction, *, x=None, y=None, flag=None, outside=None, p=None):
    """Flags as ice_flags gives them, with the values that a test is about."""
    n = len(fraction)
    values = {
        "ratio": np.full(n, 2.0), "outside_sigma": np.full(n, 5.0) if outside is None else np.asarray(outside, float),
        "p_value": np.full(n, 1e-6) if p is None else np.asarray(p, float), "q_value": np.full(n, 1e-4),
        "fraction_lower": np.asarray(fraction, float), "fraction_upper": np.ones(n),
        "flag": np.full(n, 5, dtype=np.int8) if flag is None else np.asarray(flag, dtype=np.int8),
    }  # fmt: skip
    coords = {"x": ("shot", x), "y": ("shot", y)} if x is not None else {}
    return xr.Dataset({name: ("shot", array) for name, array in values.items()}, coords)


def test_best_first_and_candidates_only():
    table = br.rank_candidates(_flags([0.1, 0.4, 0.9, 0.3], flag=[5, 5, 3, 5]))
    assert table["shot"].tolist() == [1, 3, 0]
    assert table.index.tolist() == [1, 2, 3]
    assert br.rank_candidates(_flags([0.1, 0.4, 0.9, 0.3]), n=2)["fraction_lower"].tolist() == [0.9, 0.4]


def test_p_values_of_zero_are_told_apart_by_the_distance():
    flags = _flags([0.1] * 4, p=[0, 0, 1e-300, 0], outside=[40, 60, 38, 50])
    assert br.rank_candidates(flags, by="p_value")["shot"].tolist() == [1, 3, 0, 2]
    assert br.rank_candidates(flags, by="fraction_lower")["shot"].tolist() == [1, 3, 0, 2]


def test_missing_values_come_last():
    assert br.rank_candidates(_flags([np.nan, 0.2, 0.3]))["shot"].tolist() == [2, 1, 0]


def test_spots_are_kept_apart():
    rng = np.random.default_rng(2)
    n = 3000
    flags = _flags(rng.random(n), x=rng.uniform(0, 100, n), y=rng.uniform(0, 100, n))
    table = br.rank_candidates(flags, n=50, min_separation=12.0)
    spots = table[["x", "y"]].to_numpy()
    distance = np.linalg.norm(spots[:, None] - spots[None], axis=2)
    assert distance[~np.eye(len(spots), dtype=bool)].min() >= 12
    assert (np.diff(table["fraction_lower"]) <= 0).all()
    # greedy: everything passed over lies near a better one of the list
    last = table["fraction_lower"].min()
    better = flags.isel(shot=flags["fraction_lower"].to_numpy() > last)
    places = np.column_stack([better["x"], better["y"]])
    reach = np.linalg.norm(places[:, None] - spots[None], axis=2)
    ahead = table["fraction_lower"].to_numpy()[None] >= better["fraction_lower"].to_numpy()[:, None]
    assert ((reach < 12) & ahead).any(axis=1).all()


def test_a_map_gives_positions_and_places_and_lazy_flags_the_same():
    rng = np.random.default_rng(5)
    shape = (30, 40)
    red = rng.uniform(0.2, 0.5, shape)
    cube = xr.DataArray(red, dims=("y", "x"), coords={"y": np.arange(30) * 10.0, "x": np.arange(40) * 10.0})
    ground = ["Soil 62231", "Ilmenite HS231.3B"]
    eager = br.ice_flags(cube, cube * 0.8, 0.02, 0.02, ice_free=ground)
    expected = br.rank_candidates(eager, n=15, min_separation=25)
    assert {"x", "y", "x_index", "y_index"} <= set(expected.columns)
    np.testing.assert_array_equal(expected["x"], expected["x_index"] * 10)
    lazy_cube = cube.copy(data=da.from_array(red, chunks=(7, 11)))
    lazy = br.ice_flags(lazy_cube, lazy_cube * 0.8, 0.02, 0.02, ice_free=ground)
    found = br.rank_candidates(lazy, n=15, min_separation=25)
    np.testing.assert_array_equal(found[["x", "y"]], expected[["x", "y"]])
    assert (
        br.rank_candidates(lazy, n=15)["fraction_lower"].tolist()
        == br.rank_candidates(eager, n=15)["fraction_lower"].tolist()
    )


def test_no_candidates_give_an_empty_table():
    table = br.rank_candidates(_flags([0.1, 0.2], flag=[1, 1]))
    assert len(table) == 0
    assert "fraction_lower" in table.columns


@pytest.mark.parametrize(
    ("flags", "options", "error", "message"),
    [
        ({"flag": 1}, {}, TypeError, "the Dataset that ice_flags gives, got dict"),
        (_flags([0.1]).drop_vars("q_value"), {}, TypeError, "that ice_flags gives, got .*ratio"),
        (_flags([0.1]), {"by": "best"}, ValueError, "by must be one of fraction_lower.*got 'best'"),
        (_flags([0.1]), {"n": 0}, ValueError, "n must be a whole number above zero, got 0"),
        (_flags([0.1]), {"n": 2.5}, ValueError, "whole number above zero, got 2.5"),
        (
            _flags([0.1]),
            {"min_separation": 10},
            ValueError,
            "no positions x and y, which min_separation needs",
        ),
        (
            _flags([0.1], x=[0.0], y=[0.0]),
            {"min_separation": -1},
            ValueError,
            "min_separation must be zero or above",
        ),
    ],
)
def test_bad_input(flags, options, error, message):
    with pytest.raises(error, match=message):
        br.rank_candidates(flags, **options)
