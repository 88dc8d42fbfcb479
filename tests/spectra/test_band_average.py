"""Spectra averaged to bands: exact for lines, against fine integration and the `spectral` package, never invented."""

import dask.array as da
import numpy as np
import pytest
import spectral
import xarray as xr
from hypothesis import given
from hypothesis import strategies as st

import bandratio as br

SIGMA_PER_FWHM = 1 / 2.354820045  # of a Gaussian: 2·sqrt(2·ln 2), any handbook of statistics


def spectra_of(channels, *rows):
    return xr.DataArray(
        np.array(rows, dtype=float),
        dims=("sample", "wavelength"),
        coords={"sample": [f"s{i}" for i in range(len(rows))], "wavelength": channels},
    )


@given(
    level=st.floats(0.05, 0.5),
    slope=st.floats(-1e-4, 1e-4),
    fwhm=st.floats(8, 60),
    centre=st.floats(520, 880),
    seed=st.integers(0, 10_000),
)
def test_a_linear_spectrum_is_averaged_exactly(level, slope, fwhm, centre, seed):
    gaps = np.random.default_rng(seed).uniform(0.5, 7.9, 400)
    channels = 400 + np.cumsum(gaps)
    spectra = spectra_of(channels, level + slope * channels)
    tabulated = {"t": ([centre - 1.8 * fwhm, centre - 3, centre + 1.2 * fwhm], [0.0, 1.0, 0.2])}
    gaussian = br.band_average(spectra, [centre], fwhm).item()
    assert gaussian == pytest.approx(level + slope * centre, rel=1e-12)
    found = br.band_average(spectra, None, responses=tabulated)
    assert found.item() == pytest.approx(level + slope * found.wavelength.item(), rel=1e-12)


def fine_integral(channels, values, response, low, high):
    """Trapezoids on a grid of 0.02 nm: an independent road to ∫ S·r / ∫ r."""
    x = np.arange(low, high, 0.02)
    r = response(x)
    return np.trapezoid(np.interp(x, channels, values) * r, x) / np.trapezoid(r, x)


@pytest.mark.parametrize("fwhm", [10.0, 20.0, 40.0])
def test_fine_grid_integration_agrees_on_every_laboratory_spectrum(lab, fwhm):
    library = br.open_library(lab / "usgs_splib07a").sel(wavelength=slice(380, 1750))
    centres = [480.0, 600.0, 700.0, 750.0, 950.0, 1535.0]
    found = br.band_average(library, centres, fwhm)
    sigma = fwhm * SIGMA_PER_FWHM
    compared = 0
    for row in range(library.sizes["sample"]):
        own = library.isel(sample=row).dropna("wavelength")
        for centre, value in zip(centres, found.values[row], strict=True):
            if np.isnan(value):
                continue
            # the whole Gaussian, not the part that the package keeps
            expected = fine_integral(
                own.wavelength.values,
                own.values,
                lambda x, c=centre: np.exp(-(((x - c) / sigma) ** 2) / 2),
                centre - 7 * sigma,
                centre + 7 * sigma,
            )
            assert value == pytest.approx(expected, abs=1e-5)
            compared += 1
    assert compared > 150


def test_tabulated_response_against_fine_integration(lab):
    soil = br.open_library(lab / "lunar_soil_62231.csv")
    x, r = np.array([560.0, 575, 600, 612, 640]), np.array([0.0, 0.7, 0.9, 0.4, 0.0])
    found = br.band_average(soil, None, responses={"filter": (x, r)}).item()
    channels, values = soil.wavelength.values, soil.values[0]
    assert found == pytest.approx(
        fine_integral(channels, values, lambda w: np.interp(w, x, r), 560, 640), abs=1e-7
    )


def test_the_resampler_of_spectral_agrees_where_the_definitions_do(lab):
    """It cuts a Gaussian off at half its width, over channels that are boxes: a tabulated response says the same."""
    library = br.open_library(lab / "usgs_splib07a")
    snow = library.sel(sample="Melting snow mSnw05").dropna("wavelength").sel(wavelength=slice(400, 1000))
    channels, fwhm = snow.wavelength.values, 40.0
    centres = np.array([480.0, 600.0, 700.0, 830.0])
    resample = spectral.BandResampler(channels.tolist(), centres.tolist(), [1.0] * channels.size, [fwhm] * 4)
    sigma = fwhm * SIGMA_PER_FWHM
    offsets = np.linspace(-fwhm / 2, fwhm / 2, 401)
    responses = {f"{c:g}": (c + offsets, np.exp(-((offsets / sigma) ** 2) / 2)) for c in centres}
    found = br.band_average(snow, centres, responses=responses)
    np.testing.assert_allclose(found.values, resample(snow.values), rtol=5e-5)


def test_effective_wavelength_moves_with_the_spectrums_colour():
    channels = np.arange(400.0, 1000.0, 2.0)
    spectra = spectra_of(channels, 0.2 + 0 * channels, channels / 1000, 1.0 - channels / 1000)
    found = br.effective_wavelength(spectra, [600.0], fwhm=40)
    variance = (40 * SIGMA_PER_FWHM) ** 2
    # ∫ λ·S·r / ∫ S·r = centre + variance·S'/S for a line S under a Gaussian; 4 sigmas hold 0.9989 of the variance
    expected = [600, 600 + variance * 0.001 / 0.6, 600 - variance * 0.001 / 0.4]
    np.testing.assert_allclose(found.values[:, 0], expected, atol=0.003)
    assert found.attrs["units"] == "nm"


def test_coverage_is_judged_on_each_samples_own_channels():
    fine, coarse = np.arange(400.0, 700.0, 5.0), np.arange(500.0, 900.0, 7.0)
    grid = np.union1d(fine, coarse)
    rows = [np.where(np.isin(grid, own), 0.1 + grid / 5000, np.nan) for own in (fine, coarse)]
    found = br.band_average(spectra_of(grid, *rows), [450, 600, 800], 20)
    assert np.isfinite(found.values).tolist() == [[True, True, False], [False, True, True]]
    # on the shared grid the holes of one sample between the other's channels are no gaps
    np.testing.assert_allclose(found.sel(wavelength=600), 0.1 + 600 / 5000, rtol=1e-12)


def test_a_gap_under_a_band_gives_nan_and_nothing_else():
    channels = np.arange(400.0, 900.0, 5.0)
    row = 0.1 + channels / 5000
    holed = np.where((channels > 585) & (channels < 615), np.nan, row)
    one_missing = np.where(channels == 600, np.nan, row)
    found = br.band_average(spectra_of(channels, holed, one_missing), [600, 700], 20)
    assert np.isnan(found.values[0, 0])
    assert np.isfinite(found.values[[0, 1, 1], [1, 0, 1]]).all()


def test_a_band_at_the_edge_is_not_covered_by_half():
    channels = np.arange(400.0, 900.0, 5.0)
    spectra = spectra_of(channels, 0.2 + 0 * channels)
    half = 4 * 20 * SIGMA_PER_FWHM
    assert np.isnan(br.band_average(spectra, [400 + half - 0.1], 20).item())
    assert br.band_average(spectra, [400 + half + 0.1], 20).item() == pytest.approx(0.2)


def test_without_widths_values_are_interpolated_but_not_over_a_wide_gap():
    spectra = spectra_of([400.0, 450.0, 530.0, 531.0], [0.1, 0.2, 0.36, 0.5])
    found = br.band_average(spectra, [400, 425, 500, 531, 600])
    np.testing.assert_allclose(found.values[0], [0.1, 0.15, np.nan, 0.5, np.nan])


def test_lazy_spectra_stay_lazy_and_images_work():
    channels = np.arange(400.0, 900.0, 5.0)
    values = np.random.default_rng(1).uniform(0.1, 0.2, (channels.size, 6, 4))
    cube = xr.DataArray(values, dims=("wavelength", "y", "x"), coords={"wavelength": channels})
    lazy = br.band_average(cube.copy(data=da.from_array(values, chunks=(50, 3, 4))), [480, 600], 20)
    assert lazy.chunks is not None
    assert lazy.dims == ("wavelength", "y", "x")
    xr.testing.assert_allclose(lazy.compute(), br.band_average(cube, [480, 600], 20))
    assert lazy.fwhm.values.tolist() == [20, 20]


def test_responses_from_a_file(tmp_path):
    file = tmp_path / "filters.csv"
    file.write_text(
        "# measured\nwavelength_nm,blue,red\n450,0,0\n480,1,0\n510,0,0\n590,0,0\n600,0,1\n610,0,0\n"
    )
    channels = np.arange(400.0, 900.0, 5.0)
    found = br.band_average(spectra_of(channels, channels / 1000), None, responses=file)
    np.testing.assert_allclose(found.wavelength, [480, 600])
    np.testing.assert_allclose(found.values, [[0.48, 0.6]])


CHANNELS = np.arange(400.0, 900.0, 5.0)
GOOD = spectra_of(CHANNELS, 0.1 + 0 * CHANNELS)


@pytest.mark.parametrize(
    ("arguments", "error", "message"),
    [
        ((GOOD, [0.48, 0.6], 20), ValueError, r"must be in nm.*look like µm"),
        (
            (GOOD.isel(wavelength=slice(None, None, -1)), [480], 20),
            ValueError,
            r"must ascend; use spectra.sortby",
        ),
        ((GOOD.isel(wavelength=[0, 0, 1]), [401], 2), ValueError, r"hold 400 nm twice"),
        (
            (GOOD.assign_coords(wavelength=CHANNELS / 1000), [480], 20),
            ValueError,
            r"spectra's wavelengths.*µm",
        ),
        ((GOOD, [480, 600], [20, 20, 20]), ValueError, r"one number or one per band \(2\), got 3"),
        ((GOOD, [480], -20), ValueError, r"fwhm at 480 nm must be above zero"),
        ((GOOD, [480], 0), ValueError, r"fwhm at 480 nm must be above zero"),
        (
            (GOOD, [480], 3),
            ValueError,
            r"channels of s0 are 5 nm apart near 480 nm, wider than the band \(3 nm\)",
        ),
        ((GOOD, None, 20), ValueError, r"wavelengths may be None only with responses"),
        (
            (GOOD.values, [480], 20),
            TypeError,
            r"must be a DataArray with a wavelength coordinate.*got ndarray",
        ),
        ((GOOD.isel(wavelength=0), [480], 20), ValueError, r"must have a dimension wavelength"),
    ],
)
def test_bad_spectra_and_bands(arguments, error, message):
    with pytest.raises(error, match=message):
        br.band_average(*arguments)


@pytest.mark.parametrize(
    ("responses", "error", "message"),
    [
        ({}, ValueError, "responses is empty"),
        ({"a": ([500, 490], [0, 1])}, ValueError, r"wavelengths of the response 'a' must ascend"),
        ({"a": ([500, 510], [0, -1])}, ValueError, r"response 'a' must be finite, nowhere negative"),
        ({"a": ([500, 510], [0, 0])}, ValueError, r"somewhere above zero"),
        ({"a": ([500, 510, 520], [0, 1])}, ValueError, r"has 3 wavelengths and 2 values"),
        ({"a": ([0.5, 0.51], [0, 1])}, ValueError, r"look like µm"),
        ({"a": [500, 510, 520]}, TypeError, r"must be a pair"),
    ],
)
def test_bad_responses(responses, error, message):
    with pytest.raises(error, match=message):
        br.band_average(GOOD, None, responses=responses)


def test_widths_and_responses_exclude_each_other():
    with pytest.raises(ValueError, match=r"either fwhm=… or responses=…"):
        br.band_average(GOOD, [480], 20, responses={"a": ([470, 480, 490], [0, 1, 0])})
    with pytest.raises(ValueError, match=r"1 responses and 2 wavelengths"):
        br.band_average(GOOD, [480, 600], responses={"a": ([470, 480, 490], [0, 1, 0])})


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("wavelength_nm,a\n500,x\n510,1\n", r"line 2, column 'a': wanted a number, got 'x'"),
        ("centre,a\n500,0\n510,1\n", r"wanted a column wavelength_nm, got centre, a"),
        ("wavelength_nm\n500\n510\n", r"one column per band"),
        ("wavelength_nm,a\n500,0\n510\n", r"line 3: wanted 2 values as in the header, got 1"),
        ("wavelength,a\n0.5,0\n0.51,1\n", r"look like µm.*call it wavelength_um"),
    ],
)
def test_bad_response_files(tmp_path, text, message):
    file = tmp_path / "filters.csv"
    file.write_text(text)
    with pytest.raises(ValueError, match=message):
        br.band_average(GOOD, None, responses=file)
