"""Photometric laws against closed forms, reciprocity and published properties."""

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st
from scipy.integrate import dblquad

from bandratio.mixing import reflectance_from_albedo
from bandratio.photometry import (
    Akimov,
    ExponentialPhase,
    Geometry,
    Hapke,
    Lambert,
    LommelSeeliger,
    LunarLambert,
    Minnaert,
    TabulatedPhase,
)
from bandratio.photometry.hapke import rough_surface
from bandratio.photometry.laws import law_of

DISK_LAWS = [Lambert(), LommelSeeliger(), LunarLambert(), LunarLambert(0.4), Minnaert(0.7), Akimov()]

NODES = np.polynomial.legendre.leggauss(400)
angle = st.floats(0, 80)
azimuths = st.floats(0, 180)


def _phase(i, e, azimuth):
    i, e, azimuth = np.deg2rad([i, e, azimuth])
    return np.degrees(
        np.arccos(np.clip(np.cos(i) * np.cos(e) + np.sin(i) * np.sin(e) * np.cos(azimuth), -1, 1))
    )


@pytest.mark.parametrize("law", DISK_LAWS, ids=str)
@given(i=angle, e=angle, azimuth=azimuths)
def test_disk_laws_are_reciprocal(law, i, e, azimuth):
    # Helmholtz reciprocity: r/μ0 does not change when source and viewer change places
    # (Minnaert 1941, Astrophys. J. 93, 403, doi:10.1086/144279)
    g = _phase(i, e, azimuth)
    assume(g < 150)
    mu0, mu = np.cos(np.deg2rad([i, e]))
    forth, back = law.disk(mu0, mu, g) / mu0, law.disk(mu, mu0, g) / mu
    assert forth == pytest.approx(back, rel=1e-6)


@given(
    i=angle, e=angle, azimuth=azimuths, w=st.floats(0.01, 1), b=st.floats(0, 0.6), c=st.floats(-1, 1),
    rough=st.floats(0, 40),
)  # fmt: skip
def test_hapke_is_reciprocal(i, e, azimuth, w, b, c, rough):
    law = Hapke(b=b, c=c, B0=0.8, h=0.06, roughness_deg=rough)
    g = _phase(i, e, azimuth)
    mu0, mu = np.cos(np.deg2rad([i, e]))
    assert law.reflectance_factor(w, mu0, mu, g) == pytest.approx(
        law.reflectance_factor(w, mu, mu0, g), rel=1e-6
    )


def _geometric_albedo(law):
    """Brightness of a full disk at zero phase over that of a flat Lambert disk: ∫ I/F dA / π over the unit disk."""
    value, _ = dblquad(
        lambda r, _: float(law.disk(np.sqrt(1 - r**2), np.sqrt(1 - r**2), 0.0)) * r,
        0,
        2 * np.pi,
        0,
        1 - 1e-12,
    )
    return value / np.pi


@pytest.mark.parametrize(
    ("law", "closed_form"),
    [
        (
            Lambert(),
            2 / 3,
        ),  # Hapke 2012, ch. 11: a Lambert sphere's geometric albedo is 2/3 of its reflectivity
        (LommelSeeliger(), 1.0),  # uniform disk at zero phase, so equal to its radiance factor there
        (Akimov(), 1.0),  # Shkuratov et al. 2011: no limb darkening at zero phase
        (Minnaert(0.5), 1.0),  # μ0^k μ^(k−1) = μ^(2k−1) at zero phase: ∫ 2 μ^(2k−1) r dr = 2/(2k + 1)
        (Minnaert(0.8), 2 / 2.6),
        (LunarLambert(0.4), 0.4 + 0.6 * 2 / 3),
    ],
    ids=str,
)
def test_geometric_albedo_of_a_sphere(law, closed_form):
    assert _geometric_albedo(law) == pytest.approx(closed_form, rel=1e-6)


def test_lommel_seeliger_disk_is_uniform_at_zero_phase():
    mu = np.linspace(0.01, 1, 50)
    np.testing.assert_allclose(LommelSeeliger().disk(mu, mu, 0.0), 1.0, rtol=1e-12)


def test_lunar_lambert_weight_is_the_published_polynomial_and_never_negative():
    # McEwen 1996, Lunar Planet. Sci. 27, 841: L = 1 − 0.019 g + 2.42e-4 g² − 1.46e-6 g³ (constants from memory)
    law = LunarLambert()
    g = np.array([0.0, 10.0, 30.0, 60.0])
    np.testing.assert_allclose(law.weight(g), 1 - 0.019 * g + 2.42e-4 * g**2 - 1.46e-6 * g**3, rtol=1e-12)
    assert (law.weight(np.array([110.0, 150.0])) == 0).all()


def test_akimov_limb_darkens_with_longitude_as_published():
    # on the photometric equator the form is cos(g/2)·cos(π/(π−g)·(γ − g/2))/cos γ (Shkuratov et al. 2011, eq. for
    # the parameter-free disk function): it vanishes at the terminator γ = g − 90°, and is 1 at the mirror point
    # γ = g/2, where cos(g/2)/cos(g/2) = 1
    g, longitude = np.deg2rad(40.0), np.deg2rad([20.0, -49.999])
    mu0, mu = np.cos(longitude - g), np.cos(longitude)
    mirror, terminator = Akimov().disk(mu0, mu, 40.0)
    assert mirror == pytest.approx(1.0, abs=1e-9)
    assert abs(terminator) < 1e-4


@pytest.mark.parametrize("law", DISK_LAWS, ids=str)
@given(i=st.floats(5, 75), e=st.floats(5, 75), azimuth=st.floats(20, 160))
def test_closed_slopes_agree_with_differences(law, i, e, azimuth):
    g = _phase(i, e, azimuth)
    assume(g < 110)
    mu0, mu = np.cos(np.deg2rad([i, e]))
    closed, numeric = law.log_slopes(mu0, mu, g), super(type(law), law).log_slopes(mu0, mu, g)
    np.testing.assert_allclose(closed, numeric, rtol=1e-4, atol=1e-5)


@given(i=st.floats(0, 80), e=st.floats(0, 80), w=st.floats(0, 1))
def test_isotropic_hapke_is_the_mixing_rooms(i, e, w):
    mu0, mu = np.cos(np.deg2rad([i, e]))
    ours = Hapke().reflectance_factor(w, mu0, mu, abs(i - e))
    assert ours == pytest.approx(float(reflectance_from_albedo(w, i, e)), rel=1e-12, abs=1e-15)


@pytest.mark.parametrize("form", [1981, 2002])
@pytest.mark.parametrize("rough", [0.0, 25.0])
def test_hapke_inversion_round_trip(form, rough):
    rng = np.random.default_rng(11)
    i, e, azimuth = rng.uniform(0, 75, 4000), rng.uniform(0, 75, 4000), rng.uniform(0, 180, 4000)
    w = rng.uniform(0, 1, 4000)
    law = Hapke(b=0.25, c=0.4, B0=1.2, h=0.07, roughness_deg=rough, h_form=form)
    mu0, mu = np.cos(np.deg2rad(i)), np.cos(np.deg2rad(e))
    g = _phase(i, e, azimuth)
    back = law.albedo(law.reflectance_factor(w, mu0, mu, g), mu0, mu, g)
    assert np.abs(back - w).max() < 1e-9


def test_hapke_gives_nan_where_no_albedo_is_bright_enough():
    brightest = float(Hapke().reflectance_factor(1.0, 0.9, 1.0, 25.0))
    assert np.isnan(Hapke().albedo(brightest * 1.01, 0.9, 1.0, 25.0))
    assert np.isnan(Hapke().albedo(-0.01, 0.9, 1.0, 25.0))


@given(b=st.floats(0, 0.9), c=st.floats(-1, 1))
def test_single_scattering_phase_function_has_mean_one(b, c):
    # ½ ∫ p(g) sin g dg = 1, the definition (Hapke 2012, ch. 6)
    x, weight = NODES
    assert 0.5 * (
        weight * Hapke(b=b, c=c).single_scattering(np.degrees(np.arccos(x)))
    ).sum() == pytest.approx(1, rel=1e-6)


def test_rough_surface_tends_to_the_smooth_one_and_casts_shadow():
    i, e = np.deg2rad([20.0, 50.0, 70.0]), np.deg2rad([60.0, 10.0, 70.0])
    mu0, mu, g = np.cos(i), np.cos(e), np.array([70.0, 55.0, 100.0])
    for got, smooth in zip(rough_surface(mu0, mu, g, 0.01), (mu0, mu, 1.0), strict=True):
        np.testing.assert_allclose(got, np.broadcast_to(smooth, 3), rtol=1e-6)
    # Hapke 1984, Icarus 59, 41: at zero phase every shadow is hidden by what casts it, S = 1, and μ0e = μe
    mu0e, mue, at_zero = rough_surface(mu0, mu0, 0.0, 30.0)
    np.testing.assert_allclose(at_zero, 1, rtol=1e-6)
    np.testing.assert_allclose(mu0e, mue, rtol=1e-6)
    # seen against the light shadows show: at 100° phase the surface is much darker than a smooth one
    assert rough_surface(mu0[2], mu[2], 100.0, 30.0)[2] < 0.5


def test_phase_functions_hold_their_values_and_their_range():
    f = ExponentialPhase({480: (-0.02, 1e-4), 700: (-0.018,)}, 5, 90)
    first, second = f.for_bands([481, 700])
    assert float(first.value(30)) == pytest.approx(np.exp(-0.6 + 0.09))
    assert float(second.value(30)) == pytest.approx(np.exp(-0.54))
    assert np.isnan(first.value(np.array([2.0, 91.0]))).all()
    table = TabulatedPhase((0, 30, 60), {480: (1, 0.6, 0.4), 700: (1, 0.7, 0.5)})
    assert [float(t.value(15)) for t in table.for_bands([480, 700])] == pytest.approx([0.8, 0.85])
    assert np.isnan(table.for_bands([480])[0].value(61.0))


@pytest.mark.parametrize(
    ("make", "error", "message"),
    [
        (lambda: law_of("lambrt"), ValueError, "unknown photometric law 'lambrt'; did you mean lambert"),
        (lambda: law_of(3), TypeError, "law must be a name or a law"),
        (lambda: Minnaert(k=-0.2), ValueError, "k of Minnaert's law must lie between 0 and 2, got -0.2"),
        (lambda: Minnaert(k="steep"), TypeError, "k of Minnaert's law must be a number or one per band"),
        (
            lambda: Minnaert(k={480: 0.6}).for_bands([480, 700]),
            ValueError,
            "k has values at 480 nm, but the cube's",
        ),
        (lambda: LunarLambert(L=3), ValueError, "L of the lunar-Lambert law must lie between 0 and 1.5"),
        (
            lambda: LunarLambert(L=[0.5]).for_bands([480, 700]),
            ValueError,
            "L has 1 values, but the cube has 2 bands",
        ),
        (lambda: Hapke(b=1.2), ValueError, "b of Hapke's law must lie between 0 and 0.99"),
        (lambda: Hapke(b=0.5, c=5), ValueError, "make the single-scattering phase function negative"),
        (lambda: Hapke(roughness_deg=75), ValueError, "roughness_deg must lie between 0 and 60"),
        (lambda: Hapke(h_form=1999), ValueError, "h_form must be one of 2002, 1981"),
        (lambda: ExponentialPhase(()), ValueError, "needs finite coefficients"),
        (lambda: ExponentialPhase((-0.02,), 50, 20), ValueError, "the lower end first, got 50 to 20"),
        (lambda: TabulatedPhase((30, 0), (1, 2)), ValueError, "two or more ascending angles"),
        (lambda: TabulatedPhase((0, 30), (1, -2)), ValueError, "must be positive and finite, got 1, -2"),
        (
            lambda: TabulatedPhase((0, 30), (1, 0.8, 0.7)),
            ValueError,
            "needs 2 values, one for each angle, got 3",
        ),
        (lambda: Geometry(95, 0, 95), ValueError, "incidence must lie from 0 to below 90°, got 95°"),
        (lambda: Geometry(30, 0, 50), ValueError, "no surface has incidence 30°, emission 0° and phase 50°"),
        (lambda: Geometry("a", 0, 50), TypeError, "incidence must be a number in degrees"),
        (lambda: Geometry.of((30, 0)), ValueError, "three angles in degrees, .*got \\(30, 0\\)"),
    ],
)
def test_bad_laws_are_refused(make, error, message):
    with pytest.raises(error, match=message):
        make()
