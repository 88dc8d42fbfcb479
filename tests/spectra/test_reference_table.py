"""The embedded table: its figures against the published ones, its sources, and what it refuses."""

from importlib.resources import files

import numpy as np
import pytest

import bandratio as br
from bandratio.spectra import chosen_samples

from ..reference import soil_62231, usgs_splib07a, velikodsky_2011


def test_it_is_small_and_every_row_has_its_source():
    assert (files("bandratio") / "data" / "reference.csv").stat().st_size < 50_000
    table = br.reference_spectra()
    assert table.sizes["sample"] >= 30
    assert all(table.source.values)
    assert all(table.specimen.values)
    assert {
        "opaque", "plagioclase", "low-calcium pyroxene", "high-calcium pyroxene", "olivine", "basalt", "highland",
        "mare", "moon", "ice",
    } == set(table.group.values)  # fmt: skip
    assert table.quantity.item() == "reflectance_factor"
    assert len(set(table.sample.values)) == table.sizes["sample"]


def test_figures_of_the_usgs_library():
    table = br.reference_spectra()
    records = list(table.record.values)
    for record, figures in usgs_splib07a.REFLECTANCE.items():
        row = table.isel(sample=records.index(str(record)))
        for wavelength, value in figures.items():
            assert row.sel(wavelength=wavelength).item() == pytest.approx(value, abs=6e-5)


def test_figures_of_the_soil_and_of_the_moon():
    table = br.reference_spectra()
    for wavelength, value in soil_62231.REFLECTANCE.items():
        assert table.sel(sample="Soil 62231", wavelength=wavelength).item() == value
    for name, figures in velikodsky_2011.ALBEDO.items():
        for wavelength, value in figures.items():
            assert table.sel(sample=name, wavelength=wavelength).item() == value


def test_every_row_against_the_whole_spectra(lab):
    table = br.reference_spectra()
    library = br.open_library(lab / "usgs_splib07a")
    compared = 0
    for row, record in enumerate(library.record.values):
        mine = table.isel(sample=list(table.record.values).index(record)).dropna("wavelength")
        theirs = br.band_average(library.isel(sample=row), mine.wavelength.values)
        np.testing.assert_allclose(mine, theirs, rtol=6e-4)  # four digits
        compared += mine.size
    assert compared > 4000


def test_soil_and_telescope_agree_on_the_slope():
    """Two roads to the same ground: the returned soil in the laboratory, and the highland seen from afar."""
    spectra = br.reference_spectra([480, 600, 700])
    for slope in (br.uv_vis_slope(spectra), br.red_slope(spectra)):
        difference = slope.sel(sample="Soil 62231") - slope.sel(sample="Moon highland")
        assert abs(difference.item()) < 4  # % per 100 nm


def test_bands_through_the_table_agree_with_bands_through_whole_spectra(lab):
    centres = [480, 600, 700, 750, 830, 950]
    library = br.open_library(lab / "usgs_splib07a")
    whole = br.band_average(library, centres, 20)
    table = br.reference_spectra(centres, 20)
    order = [list(table.record.values).index(record) for record in library.record.values]
    difference = np.abs(table.values[order] - whole.values)
    assert np.isnan(difference).sum() == np.isnan(whole.values).sum()
    assert np.nanmax(difference) < 0.005
    assert np.nanmedian(difference) < 2e-4


def test_interpolation_is_refused_where_points_are_too_far_apart():
    spectra = br.reference_spectra([1064, 1400, 1535])
    soil = spectra.sel(sample="Soil 62231")
    assert soil.sel(wavelength=1064).item() == pytest.approx(0.20017 + 64 / 65 * (0.21 - 0.20017))
    assert np.isnan(soil.sel(wavelength=1400))  # between 1250 and 1500 nm the soil has no point
    assert "no value at 1400 nm for Soil 62231" in spectra.left_out
    assert np.isfinite(spectra.sel(sample="Ilmenite HS231.3B")).all()


def test_the_ice_starts_where_its_spectrum_does():
    ice = br.reference_spectra([700, 900]).sel(sample="H2O-Ice GDS136 77K")
    assert np.isnan(ice[0])
    assert ice[1].item() == pytest.approx(0.7742, abs=1e-4)  # USGS record 13510


def test_the_table_cannot_be_spoilt_by_its_user():
    br.reference_spectra()[:] = 0
    assert br.reference_spectra().max() > 0.8


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (([300, 480],), r"no points for the band at 300 nm; it reaches from 350 to 2500 nm"),
        (([480, 3000], 20), r"no points for the band at 3000 nm"),
        (([0.48, 0.6],), r"look like µm"),
        (([],), r"one number per band"),
    ],
)
def test_bad_bands(arguments, message):
    with pytest.raises(ValueError, match=message):
        br.reference_spectra(*arguments)


def test_samples_are_chosen_by_group_name_or_specimen():
    table = br.reference_spectra()
    assert chosen_samples(table, "opaque").sum() == 4
    assert chosen_samples(table, "PYX02").sum() == 5
    assert chosen_samples(table, ["Opaque", "soil 62231"]).sum() == 5
    mask = np.arange(table.sizes["sample"]) < 3
    assert chosen_samples(table, mask) is mask


@pytest.mark.parametrize(
    ("wanted", "message"),
    [
        ("olvine", r"no group or sample is called 'olvine'; did you mean olivine"),
        (["Soil 62321"], r"did you mean Soil 62231"),
        ([], r"name at least one group or sample"),
        (np.array([True, False]), r"must have 38 values, got \(2,\)"),
    ],
)
def test_unknown_materials_are_answered_with_the_nearest(wanted, message):
    with pytest.raises(ValueError, match=message):
        chosen_samples(br.reference_spectra(), wanted)
