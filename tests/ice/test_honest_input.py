"""Numbers that can be no albedos are refused, and the ratio test takes them."""

import dask.array as da
import numpy as np
import pytest

import bandratio as br


def test_counts_are_no_albedos():
    with pytest.raises(
        ValueError, match="red must be an albedo, a fraction, but half of the values are above 160"
    ):
        br.ice_flags([160, 170, 150], [270, 280, 260], 3, 3)
    flags = br.ice_flags([160, 170, 150], [270, 280, 260], 3, 3, ice_free_ratio=0.93)
    assert flags["flag"].shape == (3,)


@pytest.mark.parametrize("lazy", [False, True])
def test_a_ground_list_that_does_not_hold_the_ground_is_told(lazy):
    """Bright pyroxene-rich ground, 2,000 shots of it, judged against soil and ilmenite alone: a flood, and a word of it."""
    rng = np.random.default_rng(0)
    red, infrared = (level + 0.002 * rng.standard_normal(2000) for level in (0.42, 0.34))
    if lazy:
        red, infrared = (da.from_array(values, chunks=500) for values in (red, infrared))
    soils = br.ice_flags(red, infrared, 0.002, 0.002, ice_free=["Soil 62231", "Ilmenite HS231.3B"])
    assert soils.attrs["candidate_share"] > 0.9
    assert "of all points are candidates" in soils.attrs["finding"]
    rocks = br.ice_flags(red, infrared, 0.002, 0.002)
    assert rocks.attrs["candidate_share"] < 0.01
    assert "finding" not in rocks.attrs
