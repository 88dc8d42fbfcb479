"""What the parameters say about materials: the table against plain formulas, and laboratory truth."""

import numpy as np
import pytest

import bandratio as br

BANDS = [480, 600, 700, 750, 830]


def test_values_are_the_formulas():
    """Slopes as in A'Hearn et al. 1984, AJ 89, 579, on the table's own figures."""
    table, spectra = br.material_table(BANDS), br.reference_spectra(BANDS)
    R = {nm: spectra.sel(wavelength=nm).values for nm in BANDS}
    slope = 100 * 100 * 2 * (R[700] - R[600]) / (100 * (R[700] + R[600]))
    np.testing.assert_allclose(table.red_slope, slope, rtol=1e-6)
    np.testing.assert_allclose(table.mafic_depth, 1 - R[830] / R[750], rtol=1e-6, atol=1e-9)
    assert table.mafic_depth.attrs["shoulder"] == 750
    assert table.group.values.tolist() == spectra.group.values.tolist()


def test_sigma_is_that_of_one_pixel():
    noise = br.Noise(relative=0.01, band_gain=0.02)
    table = br.material_table(BANDS, noise=noise)
    for name in ("red_slope", "mafic_depth", "reflectance_700"):
        expected = br.named_ratio(name, BANDS).sigma(br.reference_spectra(BANDS), noise)
        np.testing.assert_allclose(table[f"{name}_sigma"], expected, rtol=1e-6)


def test_laboratory_truth_in_the_table():
    """Opaques are dark at 700 nm, plagioclases bright; olivine and low-calcium pyroxene deep (USGS splib07a)."""
    table = br.material_table(BANDS)
    of_group = {str(name): rows for name, rows in table.groupby("group")}
    dark = of_group["opaque"].sel(sample=["Ilmenite HS231.2B", "Ilmenite HS231.3B", "Magnetite HS195.3B"])
    assert (dark.reflectance_700 < 0.08).all()
    assert (of_group["plagioclase"].reflectance_700 > 0.25).all()
    deepest_plagioclase = of_group["plagioclase"].mafic_depth.max()
    low_calcium = of_group["low-calcium pyroxene"]
    named = [str(n).split()[0] in ("Enstatite", "Bronzite", "Hypersthene") for n in low_calcium.sample.values]
    assert (low_calcium.mafic_depth[named] > deepest_plagioclase).all()
    assert (of_group["olivine"].mafic_depth > deepest_plagioclase).all()
    # the limit to state: augite and basalt are missed at 830 nm
    assert (of_group["basalt"].mafic_depth < 0.03).all()


def test_a_choice_of_materials_names_and_bands():
    table = br.material_table(BANDS, 20, names=["red_slope"], materials=["olivine", "Soil 62231"])
    assert list(table.data_vars) == ["red_slope"]
    assert table.sizes["sample"] == 8
    frame = table.to_dataframe()
    assert frame.loc["Soil 62231", "red_slope"] == pytest.approx(11.2, abs=0.2)


def test_a_library_and_filters_of_the_users_own(tmp_path):
    (tmp_path / "slag.csv").write_text(
        "wavelength_nm,slag,ash\n" + "".join(f"{nm},{nm / 2000},{0.3}\n" for nm in range(400, 1001, 5))
    )
    library = br.open_library(tmp_path / "slag.csv")
    responses = {f"{c}": ([c - 20, c, c + 20], [0, 1, 0]) for c in (480, 600, 700)}
    table = br.material_table(None, responses=responses, spectra=library)
    assert table.red_slope.sel(sample="slag").item() == pytest.approx(2 * 100 / 1300 * 100, rel=1e-6)
    assert table.red_slope.sel(sample="ash").item() == pytest.approx(0, abs=1e-9)


def test_what_is_missing_is_said():
    table = br.material_table([480, 600, 700])
    assert "mafic_depth: no band within 15 nm" in table.attrs["left_out"]
    assert table.attrs["materials_left_out"] == "no value at 480, 600, 700 nm for H2O-Ice GDS136 77K"
    assert np.isnan(table.red_slope.sel(sample="H2O-Ice GDS136 77K"))


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (
            {"wavelengths": [480, 600], "materials": ["ilmenit"]},
            r"no group or sample is called 'ilmenit'; did you mean",
        ),
        ({"wavelengths": [480, 600], "names": ["red_slope"]}, r"red_slope: no band within 15 nm of 700 nm"),
        ({"wavelengths": [1250]}, r"allow no parameter of the catalogue"),
        ({"wavelengths": None}, r"give the band centres in nm"),
        (
            {"wavelengths": [480, 600], "noise": br.Noise(shared_within=[0, 1])},
            r"a table of materials has no pixels",
        ),
        (
            {"wavelengths": [480, 600], "noise": br.Noise(random=[0.1] * 3)},
            r"random has 3 values, but the cube has 2",
        ),
    ],
)
def test_bad_input(options, message):
    with pytest.raises(ValueError, match=message):
        br.material_table(**options)
