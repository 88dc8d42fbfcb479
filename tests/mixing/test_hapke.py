"""Scattering against an own numerical solution of Chandrasekhar's equation, published tables, and itself."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bandratio.mixing import (
    chandrasekhar_h,
    grain_albedo,
    reflectance_from_albedo,
    single_scattering_albedo,
    white_reflectance,
)

ALBEDOS = np.array([0.1, 0.3, 0.5, 0.7, 0.85, 0.9, 0.95, 0.97, 0.99, 0.995, 0.999, 1.0])


def solved_h(albedo, points=48):
    """H at Gauss points from 1/H(x) = √(1−w) + (w/2)∫ x'/(x+x')·H(x')dx' (Chandrasekhar 1960, Radiative Transfer, ch. V)."""
    node, weight = np.polynomial.legendre.leggauss(points)
    x, weight = (node + 1) / 2, weight / 2
    h = np.ones(points)
    kernel = (albedo / 2) * weight * x / (x[:, None] + x)
    for _ in range(20_000):
        better = 1 / (np.sqrt(1 - albedo) + kernel @ h)
        # averaging two steps keeps the iteration from swinging for w near 1
        better = (better + h) / 2
        if np.max(np.abs(better - h)) < 1e-13:
            break
        h = better
    return x, h


def test_the_numerical_solution_agrees_with_chandrasekhars_table():
    # Chandrasekhar 1960, Radiative Transfer, table XI: H(1) for w = 1 is 2.9078 (from memory); his integral
    # ∫H dx = 2/w·(1 − √(1−w)) is exact.
    for albedo in ALBEDOS:
        _node, weight = np.polynomial.legendre.leggauss(48)
        x, h = solved_h(albedo)
        assert (weight / 2) @ h == pytest.approx(2 / albedo * (1 - np.sqrt(1 - albedo)), rel=1e-9)
    x, h = solved_h(1.0)
    assert np.interp(1.0, x, h) == pytest.approx(2.9078, abs=0.003)


@pytest.mark.parametrize(("h_form", "worst", "worst_at"), [(2002, 0.0100, 0.99), (1981, 0.041, 0.97)])
def test_h_stays_as_near_to_the_exact_solution_as_published(h_form, worst, worst_at):
    # Hapke 2002, Icarus 157, 523: the 2002 form errs by less than 1 %, the 1981 form by up to 4 %.
    error = {}
    for albedo in ALBEDOS:
        x, h = solved_h(albedo)
        error[albedo] = np.max(np.abs(chandrasekhar_h(x, albedo, h_form=h_form) / h - 1))
    assert max(error.values()) < worst
    assert max(error, key=error.get) == worst_at


@pytest.mark.parametrize("h_form", [1981, 2002])
@given(albedo=st.floats(0, 1), incidence=st.floats(0, 85), emission=st.floats(0, 85))
def test_albedo_to_reflectance_and_back(h_form, albedo, incidence, emission):
    reflectance = reflectance_from_albedo(albedo, incidence, emission, h_form=h_form)
    back = single_scattering_albedo(reflectance, incidence, emission, h_form=h_form)
    assert abs(back - albedo) < 1e-9


@pytest.mark.parametrize(
    "quantity", ["reflectance_factor", "radiance_factor", "bidirectional_reflectance", "brdf"]
)
def test_reflectance_to_albedo_and_back_in_every_quantity(quantity):
    reflectance = np.linspace(0, 0.2, 50)
    albedo = single_scattering_albedo(reflectance, 40, 20, quantity=quantity)
    np.testing.assert_allclose(
        reflectance_from_albedo(albedo, 40, 20, quantity=quantity), reflectance, atol=1e-9
    )


def test_quantities_are_multiples_of_the_reflectance_factor():
    # Hapke 2012, ch. 10: I/F = μ0·REFF, r = μ0·REFF/π, BRDF = REFF/π
    factor = reflectance_from_albedo(0.6, 60, 0)
    assert reflectance_from_albedo(0.6, 60, 0, quantity="radiance_factor") == pytest.approx(0.5 * factor)
    assert reflectance_from_albedo(0.6, 60, 0, quantity="bidirectional_reflectance") == pytest.approx(
        0.5 * factor / np.pi
    )
    assert reflectance_from_albedo(0.6, 60, 0, quantity="brdf") == pytest.approx(factor / np.pi)


def test_weak_scatterers_follow_single_scattering():
    # For w → 0 the multiple scattering vanishes: REFF = w/4/(μ0 + μ) (Lommel–Seeliger).
    assert reflectance_from_albedo(1e-6, 30, 0) == pytest.approx(1e-6 / 4 / (np.cos(np.pi / 6) + 1), rel=1e-5)


@given(albedo=st.floats(0.01, 0.999), incidence=st.floats(0, 80), emission=st.floats(0, 80))
def test_reflectance_is_reciprocal(albedo, incidence, emission):
    # Helmholtz: BRDF(i, e) = BRDF(e, i)
    there = reflectance_from_albedo(albedo, incidence, emission, quantity="brdf")
    assert there == pytest.approx(
        reflectance_from_albedo(albedo, emission, incidence, quantity="brdf"), rel=1e-12
    )


def test_missing_stays_missing_and_white_is_reached():
    assert np.isnan(single_scattering_albedo(np.nan))
    assert single_scattering_albedo(white_reflectance()) == pytest.approx(1, abs=1e-12)


def test_a_grain_that_absorbs_nothing_loses_only_what_the_slab_model_gives_away():
    # With k = 0, Θ = 1 and w = S_e + 1 − S_e = 1 exactly.
    assert grain_albedo(1.31, 0, 640, 100) == pytest.approx(1)
    # An opaque grain (Θ = 0) keeps its surface reflection alone: S_e = ((n−1)² + k²)/((n+1)² + k²) + 0.05
    assert grain_albedo(2.0, 1.0, 640, 1000) == pytest.approx(2 / 10 + 0.05)


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: chandrasekhar_h(1.2, 0.5), "cosine must lie between 0 and 1, got 1.2"),
        (lambda: chandrasekhar_h(0.5, -0.1), "albedo must lie between 0 and 1, got -0.1"),
        (lambda: chandrasekhar_h(0.5, 0.5, h_form=1999), "h_form must be one of 1981, 2002, got 1999"),
        (lambda: reflectance_from_albedo(0.5, 90), "incidence_deg must lie between 0 and 90"),
        (lambda: reflectance_from_albedo(0.5, 0, -3), "emission_deg must lie between 0 and 90"),
        (lambda: reflectance_from_albedo(0.5, quantity="radiance"), "quantity must be one of"),
        (lambda: single_scattering_albedo(1.2), "outside 0 to 1.025"),
        (lambda: single_scattering_albedo(-0.01), "reflectance factor of -0.01 is outside"),
        (lambda: grain_albedo(0.9, 0, 640, 10), "n must be above 1, got 0.9"),
        (lambda: grain_albedo(1.3, -1, 640, 10), "k must be zero or above"),
        (lambda: grain_albedo(1.3, 0, 0, 10), "wavelength_nm must be above zero"),
        (lambda: grain_albedo(1.3, 0, 640, 0), "grain_size_um must be above zero"),
    ],
)
def test_bad_input_is_named(call, message):
    with pytest.raises(ValueError, match=message):
        call()
