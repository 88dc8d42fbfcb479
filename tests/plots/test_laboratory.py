"""Pictures of the laboratory: what is on them, and what they refuse."""

import matplotlib as mpl
import numpy as np
import pytest
import xarray as xr

import bandratio as br

mpl.use("Agg")

import matplotlib.pyplot as plt

from bandratio.plots.laboratory import group_colours, plot_materials, plot_separation, plot_spectra

BANDS = [480, 600, 700, 750, 830]
NOISE = br.Noise(relative=0.01)


@pytest.fixture(autouse=True)
def _closed():
    yield
    plt.close("all")


def test_every_material_is_a_point_at_its_value():
    table = br.material_table(BANDS, noise=NOISE)
    axes = plot_materials(table, ["red_slope", "mafic_depth"])
    assert len(axes) == 2
    drawn = np.concatenate([line.get_xdata() for line in axes[0].lines if line.get_marker() == "o"])
    expected = table.red_slope.values
    np.testing.assert_allclose(np.sort(drawn[np.isfinite(drawn)]), np.sort(expected[np.isfinite(expected)]))
    labels = [label.get_text() for label in axes[0].get_yticklabels()]
    assert "Soil 62231" in labels
    # a material without a value of either has no row
    known = np.isfinite(table.red_slope.values) | np.isfinite(table.mafic_depth.values)
    assert len(labels) == known.sum() < table.sizes["sample"]
    assert axes[0].get_xlabel() == "red_slope\n[% per 100 nm]"
    axes[0].figure.canvas.draw()


def test_groups_have_colours_of_their_own():
    colours = group_colours(br.reference_spectra())
    assert len(set(colours.values())) == len(colours) == 10


def test_a_threshold_is_a_line():
    spectra = br.reference_spectra(BANDS)
    found = br.thresholds(
        spectra, "mafic_depth", "olivine", "plagioclase", noise=NOISE, false_alarm_rate=0.05
    )
    (axes,) = plot_materials(br.material_table(BANDS), "mafic_depth", thresholds=found)
    dashed = [line for line in axes.lines if line.get_linestyle() == "--"]
    assert dashed[0].get_xdata()[0] == found["mafic_depth"].value
    assert axes.get_title().startswith("threshold 0.03")


def test_spectra_are_drawn_at_their_own_channels():
    table = br.reference_spectra()
    ax = plot_spectra(table, wavelengths=[480, 600], fwhm=20)
    soil = table.sel(sample="Soil 62231").dropna("wavelength")
    assert any(np.array_equal(line.get_xdata(), soil.wavelength.values) for line in ax.lines)
    assert len(ax.lines) == table.sizes["sample"]
    assert len(ax.patches) == 2
    assert ax.get_xlabel() == "wavelength [nm]"


def test_groups_beyond_the_colours_have_lines_of_their_own():
    samples = [f"sample {i}" for i in range(25)]
    spectra = xr.DataArray(
        np.full((25, 3), 0.2), dims=("sample", "wavelength"),
        coords={"sample": samples, "wavelength": [500.0, 600.0, 700.0], "group": ("sample", [f"group {s}" for s in samples])},
        name="reflectance",
    )  # fmt: skip
    looks = {(line.get_color(), line.get_linestyle()) for line in plot_spectra(spectra).lines}
    assert len(looks) == 25


def test_roc_curve_and_the_chosen_point():
    spectra = br.reference_spectra(BANDS)
    found = br.thresholds(spectra, "red_slope", "olivine", "plagioclase", noise=NOISE, false_alarm_rate=0.05)
    ax = plot_separation(found)
    point = next(line for line in ax.lines if line.get_marker() == "o")
    separation = found["red_slope"].separation
    assert point.get_xydata()[0].tolist() == [separation.false_alarm_rate, separation.detection_rate]
    assert f"area {separation.area:.3f}" in ax.get_legend().get_texts()[0].get_text()


def test_axes_of_the_users_own_are_used():
    _, axes = plt.subplots(1, 2)
    table = br.material_table(BANDS)
    assert plot_materials(table, ["red_slope", "mafic_depth"], axes=list(axes)) == list(axes)
    assert plot_spectra(br.reference_spectra(), ax=axes[0]) is axes[0]


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda: plot_materials(br.reference_spectra()), TypeError, "table must be a Dataset over sample"),
        (lambda: plot_materials(br.material_table(BANDS), "red_slop"), ValueError, "did you mean red_slope"),
        (lambda: plot_materials(br.material_table(BANDS), axes=[]), ValueError, "4 parameters and 0 axes"),
        (
            lambda: plot_spectra(br.reference_spectra()[0]),
            TypeError,
            "must be a DataArray over sample and wavelength",
        ),
        (
            lambda: plot_separation({"a": br.Threshold(1)}),
            ValueError,
            "none of these thresholds comes from labelled",
        ),
    ],
)
def test_bad_input(call, error, message):
    with pytest.raises(error, match=message):
        call()
