"""Conversions among reflectance quantities, and what is refused."""

import numpy as np
import pytest
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st

import bandratio as br
from bandratio.mixing import reflectance_from_albedo

from .scenes import BANDS

CONVERTIBLE = ["reflectance_factor", "radiance_factor", "bidirectional_reflectance", "brdf"]


def _cube(quantity=None, shape=(3, 5), **kwargs):
    rng = np.random.default_rng(2)
    return br.as_cube(rng.uniform(0.05, 0.3, (4, *shape)), BANDS, quantity=quantity, **kwargs)


@pytest.mark.parametrize("quantity", CONVERTIBLE)
def test_conversions_agree_with_the_definitions(quantity):
    # Hapke 2012, ch. 10 (from memory): I/F = π·r, BRDF = r/μ0, REFF = π·r/μ0
    r, mu0 = 0.04, np.cos(np.deg2rad(52.0))
    values = {
        "bidirectional_reflectance": r,
        "radiance_factor": np.pi * r,
        "brdf": r / mu0,
        "reflectance_factor": np.pi * r / mu0,
    }
    cube = br.as_cube([values[quantity]], [700], quantity=quantity)
    for to, wanted in values.items():
        converted = br.convert_quantity(cube, to, incidence=52.0)
        assert float(converted[0]) == pytest.approx(wanted, rel=1e-12)
        assert str(converted.quantity.values) == to


@pytest.mark.parametrize("quantity", CONVERTIBLE)
def test_conversions_agree_with_the_scattering_model(quantity):
    # the mixing room states the same quantities for a Hapke surface, written independently
    reff = reflectance_from_albedo(0.6, 40.0, 10.0)
    wanted = reflectance_from_albedo(0.6, 40.0, 10.0, quantity=quantity)
    cube = br.as_cube([float(reff)], [700], quantity="reflectance_factor")
    assert float(br.convert_quantity(cube, quantity, incidence=40)[0]) == pytest.approx(
        float(wanted), rel=1e-12
    )


@given(i=st.floats(0, 85), first=st.sampled_from(CONVERTIBLE), second=st.sampled_from(CONVERTIBLE))
def test_there_and_back(i, first, second):
    cube = _cube(first)
    incidence = i if i > 4 else 0.0  # smaller ones are taken for radians
    back = br.convert_quantity(
        br.convert_quantity(cube, second, incidence=incidence), first, incidence=incidence
    )
    np.testing.assert_allclose(back.values, cube.values, rtol=1e-12)


def test_planes_and_lazy_cubes_convert_alike():
    incidence = np.linspace(10, 80, 15).reshape(3, 5)
    cube = _cube("radiance_factor")
    eager = br.convert_quantity(cube, "reflectance_factor", incidence=incidence)
    lazy = br.convert_quantity(cube.chunk(x=2), "reflectance_factor", incidence=incidence)
    assert lazy.chunks is not None
    np.testing.assert_allclose(lazy.values, eager.values)
    np.testing.assert_allclose(eager.values, cube.values / np.cos(np.deg2rad(incidence)))


def test_precision_and_attributes_stay():
    cube = _cube("radiance_factor").astype(np.float32).assign_attrs(units="1", instrument="imager")
    converted = br.convert_quantity(cube, "brdf", incidence=30)
    assert converted.dtype == np.float32
    assert converted.attrs == {"units": "sr-1", "instrument": "imager"}
    assert converted.dims == cube.dims


def test_grazing_light_is_masked_not_divided_by():
    cube = _cube("radiance_factor", shape=(2,))
    converted = br.convert_quantity(cube, "reflectance_factor", incidence=[30.0, 89.9])
    assert np.isfinite(converted.values[:, 0]).all()
    assert np.isnan(converted.values[:, 1]).all()


def test_a_normalised_cube_knows_its_incidence():
    flat = br.normalise(_cube("radiance_factor"), incidence=45.0, emission=0.0, phase=45.0)
    reff = br.convert_quantity(flat, "reflectance_factor")
    np.testing.assert_allclose(reff.values, flat.values / np.cos(np.deg2rad(30)), rtol=1e-12)


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (
            lambda: br.convert_quantity(_cube(), "brdf", incidence=30),
            ValueError,
            "it is not said; give quantity=",
        ),
        (
            lambda: br.convert_quantity(_cube("brdf"), "albedo", incidence=30),
            ValueError,
            "to must be one of .*got 'albedo'",
        ),
        (
            lambda: br.convert_quantity(_cube("radiance_factor"), "brdf"),
            ValueError,
            "cosine of incidence enters; give incidence",
        ),
        (
            lambda: br.convert_quantity(_cube("radiance_factor"), "brdf", incidence=0.52),
            ValueError,
            "look like radians or cosines; give degrees",
        ),
        (
            lambda: br.convert_quantity(_cube("radiance_factor"), "brdf", incidence=[[30.0, 20.0]]),
            ValueError,
            r"incidence has shape \(1, 2\), but a band of the cube has \(3, 5\)",
        ),
        (
            lambda: br.convert_quantity(_cube("zero_phase_albedo"), "reflectance_factor", incidence=30),
            ValueError,
            "differ in geometry, not in definition",
        ),
        (
            lambda: br.convert_quantity(_cube("reflectance_factor"), "zero_phase_albedo", incidence=30),
            ValueError,
            "opposition effect",
        ),
        (
            lambda: br.convert_quantity(xr.Dataset(), "brdf", incidence=30),
            TypeError,
            "a cube must be a DataArray",
        ),
        (
            lambda: br.require_quantity(_cube("brdf"), "reflectance_factor", what="a laboratory threshold"),
            ValueError,
            "a laboratory threshold needs reflectance_factor, got bidirectional reflectance dist.*convert_quantity",
        ),
    ],
)
def test_bad_conversions_are_refused(call, error, message):
    with pytest.raises(error, match=message):
        call()
