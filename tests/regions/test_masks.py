"""A mask is one region, and polygons of another body are told so."""

import numpy as np
import pytest

import bandratio as br


def test_a_mask_is_one_region():
    cube = br.as_cube(np.random.default_rng(0).uniform(0.1, 0.2, (2, 6, 7)), [600, 700])
    mask = np.zeros((6, 7), bool)
    mask[1:3, 2:5] = True
    means = br.region_means(cube, br.Noise(random=0.001), mask, ["red_slope"])
    same = br.region_means(cube, br.Noise(random=0.001), mask.astype(int), ["red_slope"])
    assert means["n_pixels"].values.tolist() == [6]
    np.testing.assert_array_equal(means["red_slope"], same["red_slope"])


def test_percent_is_no_limit_of_a_reflectance():
    cube = br.as_cube(np.full((2, 3), 0.2), [600, 700])
    maps = br.parameters(cube, br.Noise(random=0.001))
    with pytest.raises(ValueError, match=r"brighter_than is a reflectance, a fraction, got 20; 20 % is 0.2"):
        br.pyroclastic_flags(maps, brighter_than=20)
