"""Pictures: what is drawn where, what the labels say, and what is refused."""

import re

import dask.array as da
import matplotlib as mpl
import numpy as np
import pytest
import xarray as xr

import bandratio as br

mpl.use("Agg")
import matplotlib.pyplot as plt

NOISE = br.Noise(random=0.001, band_gain=0.01)
SOUTH = "+proj=stere +lat_0=-90 +R=1737400 +units=m +no_defs"


@pytest.fixture(autouse=True)
def _closed():
    yield
    plt.close("all")


def scene(shape=(30, 40), crs=SOUTH, step=500.0):
    rng = np.random.default_rng(0)
    R = rng.normal(0.12, 0.01, shape).astype(np.float32)
    R[3:6, 4:9] = 0.3
    R[-1, -1] = np.nan
    coords = {"y": 50_000 - step * np.arange(shape[0]), "x": 20_000 + step * np.arange(shape[1])}
    cube = br.as_cube(
        xr.DataArray(np.stack([0.8 * R, 0.9 * R, R, 1.05 * R]), dims=("wavelength", "y", "x"), coords=coords),
        [480, 600, 700, 830],
    )
    if crs is not None:
        import rioxarray  # noqa: F401 (it adds .rio)

        cube = cube.rio.write_crs(crs)
    return cube


def maps_of(cube):
    return br.parameters(cube, NOISE, parts=True)


def drawn(ax):
    return np.ma.filled(ax.images[0].get_array().astype(float), np.nan)


def texts(ax):
    return [text.get_text() for text in ax.figure.findobj(mpl.text.Text)]


def test_map_has_values_unit_extent_and_scale_bar():
    maps = maps_of(scene())
    ax = br.plot_map(maps, "red_slope")
    np.testing.assert_allclose(drawn(ax), maps.red_slope)
    assert ax.images[0].get_extent() == pytest.approx([19_750, 39_750, 35_250, 50_250])
    assert any("[% per" in text.replace("\n", " ") for text in texts(ax))
    assert "5 km" in texts(ax)  # a quarter of 20 km at most, rounded down to 1, 2 or 5
    bar = next(each for each in ax.artists if hasattr(each, "size_bar"))
    assert bar.size_bar.get_children()[0].get_width() == 5000


def test_sigma_stands_beside_the_value():
    maps = maps_of(scene())
    left, right = br.plot_map(maps, "reflectance_700", sigma=True)
    np.testing.assert_allclose(drawn(left), maps.reflectance_700)
    np.testing.assert_allclose(drawn(right), maps.reflectance_700_sigma)
    assert right.images[0].get_cmap().name != left.images[0].get_cmap().name
    figure, axes = plt.subplots(1, 2)
    assert br.plot_map(maps, "red_slope", sigma=True, ax=axes)[1] is axes[1]
    assert figure.axes[0].images


@pytest.mark.parametrize(
    ("crs", "labels"),
    [
        ("+proj=longlat +R=1737400 +no_defs", ("longitude [°]", "latitude [°]")),
        (None, ("x", "y")),
    ],
)
def test_axes_without_projection(crs, labels):
    ax = br.plot_map(maps_of(scene(crs=crs, step=0.01)), "red_slope")
    assert (ax.get_xlabel(), ax.get_ylabel()) == labels
    plain = br.plot_map(maps_of(scene().drop_vars(["x", "y", "spatial_ref"])), "red_slope")
    assert (plain.get_xlabel(), plain.get_ylabel()) == ("column", "row")
    assert plain.images[0].get_extent() == [-0.5, 39.5, 29.5, -0.5]


def test_values_of_both_signs_are_white_at_zero():
    maps = xr.Dataset({"depth": (("y", "x"), np.linspace(-1, 1.2, 100).reshape(10, 10))})
    image = br.plot_map(maps, "depth").images[0]
    low, high = image.get_clim()
    assert low == -high
    # the middle of a diverging scale (ColorBrewer PuOr) is all but white
    assert min(image.get_cmap()(0.5)[:3]) > 0.93


def test_colour_bar_says_where_values_lie_beyond():
    values = np.random.default_rng(0).normal(0.1, 0.01, (50, 50))
    ax = br.plot_map(xr.Dataset({"p": (("y", "x"), values)}), "p")
    low, high = ax.images[0].get_clim()
    assert (low, high) == pytest.approx(tuple(np.percentile(values, [1, 99])))
    assert ax.images[0].colorbar.extend == "both"
    flat = br.plot_map(xr.Dataset({"p": (("y", "x"), np.full((5, 5), 0.1))}), "p")
    assert flat.images[0].colorbar.extend == "neither"


def test_flags_have_a_key_with_counts():
    flags = br.pyroclastic_flags(maps_of(scene()), brighter_than=0.2)
    ax = br.plot_map(flags, "flag")
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert labels == [
        "no data (1)", "background (1,184)", "undecided (0)", "bright candidate (15)", "dark candidate (0)"
    ]  # fmt: skip
    codes = drawn(ax)
    assert (codes[3:6, 4:9] == 3).all()
    colours = {patch.get_facecolor() for patch in ax.get_legend().legend_handles}
    assert len(colours) == 5


def test_large_lazy_maps_are_averaged_and_say_so():
    plane = da.random.default_rng(0).normal(0.1, 0.01, (2100, 2300), chunks=500)
    maps = xr.Dataset({"p": (("y", "x"), plane)})
    ax = br.plot_map(maps, "p")
    assert ax.get_title() == "averaged over 2 × 2 pixels"
    assert drawn(ax).shape == (1050, 1150)
    expected = plane.compute()[:2, :2].mean()
    assert drawn(ax)[0, 0] == pytest.approx(expected)


def test_squares_that_reach_beyond_the_map_stay_in_place():
    """2101 columns in squares of 2: the last square is half outside, and the others must not be squeezed."""
    values = np.zeros((2001, 2101), dtype=np.float32)
    values[:, 2098:2100] = 1.0
    ax = br.plot_map(xr.Dataset({"p": (("y", "x"), values)}), "p")
    left, right, bottom, top = ax.images[0].get_extent()
    width = (right - left) / drawn(ax).shape[1]
    column = int(np.flatnonzero(drawn(ax)[0] == 1)[0])
    assert (left + column * width, left + (column + 1) * width) == pytest.approx((2097.5, 2099.5))
    assert (top - bottom) / drawn(ax).shape[0] == pytest.approx(-2)
    assert ax.get_xlim() == (-0.5, 2100.5)
    assert ax.get_ylim() == (2000.5, -0.5)


def test_a_lone_candidate_survives_averaging():
    codes = np.ones((2100, 2300), dtype=np.int8)
    codes[777, 1000] = 3
    attributes = {
        "flag_values": np.arange(5, dtype=np.int8),
        "flag_meanings": "no_data background undecided bright_candidate dark_candidate",
    }
    ax = br.plot_map(xr.Dataset({"flag": (("y", "x"), codes, attributes)}), "flag")
    assert drawn(ax)[388, 500] == 3
    assert (drawn(ax) == 3).sum() == 1


def test_scatter_shows_scene_candidates_and_laboratory():
    maps = maps_of(scene())
    flags = br.pyroclastic_flags(maps, brighter_than=0.2)
    laboratory = br.parameters(br.reference_spectra([480, 600, 700, 830]))
    ax = br.plot_scatter(maps, "reflectance_700", "red_slope", laboratory=laboratory, flags=flags)
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert "bright candidate (15)" in labels
    assert set(laboratory["group"].values) <= set(labels)
    assert "median ± σ of a pixel" in labels
    assert ax.get_ylabel() == "spectral slope 600 to 700 nm [% per 100 nm]"
    candidates = next(line for line in ax.lines if line.get_label().startswith("bright"))
    np.testing.assert_allclose(candidates.get_xdata(), 0.3, rtol=1e-6)
    given = plt.figure().subplots()
    assert br.plot_scatter(maps, "reflectance_700", "red_slope", ax=given) is given


def test_many_pixels_are_drawn_as_density():
    rng = np.random.default_rng(0)
    maps = xr.Dataset({name: (("y", "x"), rng.normal(size=(100, 100))) for name in "pq"})
    ax = br.plot_scatter(maps, "p", "q")
    (density,) = ax.collections
    assert density.get_array().sum() == 10_000


def test_composite_has_a_key_and_the_right_channels():
    maps = xr.Dataset(
        {
            name: (("y", "x"), np.where(np.arange(12).reshape(3, 4) == place, 1.0, 0.0), {"units": "1"})
            for place, name in enumerate(("first", "second", "third"))
        }
    )
    ax = br.plot_composite(maps, ["first", "second", "third"], limits=[(0, 1)] * 3)
    colours = drawn(ax)
    for place in range(3):
        assert colours[0, place].tolist() == [float(place == channel) for channel in range(3)]
    told = " ".join(texts(ax))
    for text in ("red: first", "green: second", "blue: third"):
        assert text in told
    turned = br.plot_composite(maps, ["first", "second", "third"], limits=[(1, 0)] * 3)
    np.testing.assert_allclose(drawn(turned), 1 - colours)
    missing = maps.where(maps["first"] == 0)
    assert drawn(br.plot_composite(missing, ["first", "second", "third"]))[0, 0].tolist() == [1, 1, 1]


def test_histogram_with_thresholds():
    maps = maps_of(scene())
    ax = br.plot_histogram(
        maps, "reflectance_700", thresholds={"bright": br.Threshold(0.2, 0.01), "dark": 0.05}
    )
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert "bright: 0.2 ± 0.01" in labels
    assert "dark: 0.05" in labels
    assert ax.get_yscale() == "log"
    low, high = ax.get_xlim()
    assert low < 0.05
    assert high > 0.3
    for alone in (0.2, br.Threshold(0.2), [0.2], (br.Threshold(0.2), 0.1)):
        br.plot_histogram(maps, "reflectance_700", thresholds=alone)


def test_names_with_dollars_are_no_formulas(tmp_path):
    maps = xr.Dataset({"$a$": (("y", "x"), np.eye(4), {"long_name": r"$\broken", "units": "$"})})
    for ax in (
        br.plot_map(maps, "$a$"),
        br.plot_histogram(maps, "$a$", thresholds={"$x": 0.5}),
        br.plot_scatter(maps, "$a$", "$a$"),
    ):
        ax.figure.savefig(tmp_path / "a.png")


def test_a_map_without_any_value(tmp_path):
    maps = xr.Dataset({"p": (("y", "x"), np.full((4, 4), np.nan))})
    br.plot_map(maps, "p").figure.savefig(tmp_path / "a.png")
    br.plot_composite(maps.assign(q=maps.p, r=maps.p), ["p", "q", "r"]).figure.savefig(tmp_path / "b.png")
    br.plot_scatter(maps, "p", "p").figure.savefig(tmp_path / "c.png")


@pytest.mark.parametrize(
    ("call", "error", "message"),
    [
        (lambda maps: br.plot_map(maps, "red_slop"), ValueError, "did you mean red_slope"),
        (lambda maps: br.plot_map(maps.red_slope, "red_slope"), TypeError, "array.to_dataset(name=…)"),
        (lambda maps: br.plot_map(maps.isel(y=0), "red_slope"), ValueError, "a picture of a map needs two"),
        (lambda maps: br.plot_map(maps.isel(y=slice(0)), "red_slope"), ValueError, "red_slope is empty"),
        (
            lambda maps: br.plot_map(maps[["red_slope"]], "red_slope", sigma=True),
            ValueError,
            "map with noise=… for one",
        ),
        (
            lambda maps: br.plot_map(maps, "red_slope", ax=3),
            TypeError,
            "ax must be one matplotlib axes, got 3",
        ),
        (
            lambda maps: br.plot_map(maps, "red_slope", sigma=True, ax=plt.figure().subplots()),
            TypeError,
            "ax must be two axes",
        ),
        (lambda maps: br.plot_scatter(maps, "red_slope", "blue"), ValueError, "the maps hold no 'blue'"),
        (lambda maps: br.plot_scatter([1], "red_slope", "blue"), TypeError, "maps must be a Dataset"),
        (
            lambda maps: br.plot_scatter(maps, "red_slope", "mafic_depth", flags=maps.red_slope),
            TypeError,
            "with CF flag_values",
        ),
        (
            lambda maps: br.plot_scatter(
                maps,
                "red_slope",
                "mafic_depth",
                flags=br.pyroclastic_flags(maps, darker_than=0.1).isel(y=slice(2)),
            ),
            ValueError,
            "flag these same maps",
        ),
        (
            lambda maps: br.plot_scatter(maps, "red_slope", "mafic_depth", laboratory="mare"),
            TypeError,
            "laboratory must be a Dataset",
        ),
        (lambda maps: br.plot_composite(maps, "red_slope"), ValueError, "names must be three parameters"),
        (
            lambda maps: br.plot_composite(maps, ["red_slope"] * 2),
            ValueError,
            "names must be three parameters",
        ),
        (lambda maps: br.plot_composite(maps, ["red_slope"] * 3, limits=[(0, 1)]), ValueError, "three pairs"),
        (
            lambda maps: br.plot_composite(maps, ["red_slope"] * 3, limits=[(1, 1)] * 3),
            ValueError,
            "unlike finite numbers",
        ),
        (
            lambda maps: br.plot_histogram(maps, "red_slope", thresholds="high"),
            TypeError,
            "must be a number or a Threshold",
        ),
        (
            lambda maps: br.plot_histogram(
                maps, "red_slope", thresholds=br.Threshold(0.1, parameter="mafic_depth")
            ),
            ValueError,
            "was given for red_slope",
        ),
        (lambda maps: br.plot_histogram(maps * np.nan, "red_slope"), ValueError, "has no finite value"),
    ],
)
def test_bad_input(call, error, message):
    with pytest.raises(error, match=re.escape(message)):
        call(maps_of(scene((6, 7))))
