"""The named parameters: their formulas at nominal and shifted centres, what is left out, and what they say of rocks."""

import csv
from dataclasses import replace

import numpy as np
import pytest

import bandratio as br
from bandratio import catalogue
from bandratio.catalogue.definitions import DEFINITIONS

from .reference.soil_62231 import REFLECTANCE

FIVE = [480.0, 600.0, 700.0, 750.0, 830.0]


def soil(wavelengths):
    return br.as_cube([REFLECTANCE[nm] for nm in wavelengths], wavelengths)


class TestDefinitionsOnSoil:
    """Every named parameter of soil 62231 against its definition written out with the table's numbers."""

    R = REFLECTANCE

    def test_slopes(self):
        # A'Hearn et al. 1984, AJ 89, 579; Jewitt & Meech 1986, ApJ 310, 937: S' = 2 (R2 − R1)/((λ2 − λ1)(R1 + R2))
        uv = 2 * (0.15204 - 0.12562) / (120 * (0.12562 + 0.15204)) * 100 * 100
        red = 2 * (0.17002 - 0.15204) / (100 * (0.15204 + 0.17002)) * 100 * 100
        assert float(br.uv_vis_slope(soil(FIVE))) == pytest.approx(uv, abs=1e-6)
        assert float(br.red_slope(soil(FIVE))) == pytest.approx(red, abs=1e-6)

    def test_reflectance(self):
        assert float(br.reflectance_700(soil(FIVE))) == 0.17002

    def test_depths(self):
        assert float(br.mafic_depth(soil(FIVE))) == pytest.approx(1 - 0.18566 / 0.17715, abs=1e-6)
        assert float(br.mafic_depth(soil(FIVE), shoulder=700)) == pytest.approx(
            1 - 0.18566 / 0.17002, abs=1e-6
        )
        continuum = 0.17715 + (0.17715 - 0.15204) * (830 - 750) / (750 - 600)
        depth = br.parameters(soil(FIVE), names="mafic_depth_continuum").mafic_depth_continuum
        assert float(depth) == pytest.approx(1 - 0.18566 / continuum, abs=1e-6)

    def test_plain_ratios(self):
        maps = br.parameters(soil([415, 750, 950, 1000]))
        for name, above, below in [
            ("r415_r750", 415, 750), ("r750_r415", 750, 415), ("r950_r750", 950, 750), ("r750_r1000", 750, 1000),
        ]:  # fmt: skip
            assert float(maps[name]) == pytest.approx(self.R[above] / self.R[below], abs=1e-6)
            assert maps[name].attrs["source"]


def test_actual_centres_enter_the_formula():
    centres = [478.1, 603.4, 697.7, 752.2, 828.9]
    R = [0.1, 0.15, 0.17, 0.18, 0.19]
    maps = br.parameters(br.as_cube(R, centres))
    assert float(maps.red_slope) == pytest.approx(2e4 * 0.02 / (0.32 * (697.7 - 603.4)), rel=1e-12)
    continuum = 0.18 + 0.03 * (828.9 - 752.2) / (752.2 - 603.4)
    assert float(maps.mafic_depth_continuum) == pytest.approx(1 - 0.19 / continuum, rel=1e-12)
    assert maps.red_slope.attrs["bands"] == "603.4, 697.7 nm"


def test_the_set_without_a_750_nm_band():
    maps = br.parameters(soil([480, 600, 700, 830]))
    assert list(maps.data_vars) == ["uv_vis_slope", "red_slope", "reflectance_700", "mafic_depth"]
    assert float(maps.mafic_depth) == pytest.approx(1 - 0.18566 / 0.17002)
    assert maps.mafic_depth.attrs["shoulder"] == 700
    assert "shoulder at 700 nm" in maps.mafic_depth.attrs["long_name"]
    assert br.mafic_depth(soil([480, 600, 700, 830])).attrs["shoulder"] == 700
    assert br.mafic_depth(soil(FIVE)).attrs["shoulder"] == 750
    assert br.mafic_depth(soil(FIVE), shoulder=700).attrs["shoulder"] == 700
    left_out = maps.attrs["left_out"]
    assert "mafic_depth_continuum: no band within 15 nm of 750 nm" in left_out
    assert "r950_r750: no band within 15 nm of" in left_out


def test_named_ratio_is_what_the_map_computes():
    for name in catalogue.names():
        wavelengths = [415, *FIVE, 950, 1000]
        ratio = br.named_ratio(name, wavelengths)
        assert ratio.name == name
        assert ratio.units
        assert ratio.source
        assert ratio.long_name
        value = br.parameters(soil(wavelengths), names=[name])[name]
        assert float(value) == pytest.approx(float(ratio.value(soil(wavelengths))), rel=1e-12)


def test_the_shoulder_goes_with_the_depth_whatever_it_is_called():
    maps = br.parameters(
        soil([480, 600, 700, 830]), names={"depth": br.named_ratio("mafic_depth", [700, 830])}
    )
    assert maps.depth.attrs["shoulder"] == 700
    # a wide tolerance lets the 700 nm band serve as the 750 nm shoulder: both attributes tell the same
    wide = br.parameters(soil([480, 600, 700, 830]), tolerance=60).mafic_depth.attrs
    assert f"shoulder at {wide['shoulder']:g} nm" in wide["long_name"]


def test_a_ratio_tells_the_centres_that_it_was_computed_with():
    maps = br.parameters(br.as_cube([0.2, 0.25], [749.3, 951.0]), names=[br.BandRatio({950: 1}, {750: 1})])
    assert maps.r950_r750.attrs["definition"] == "R951/R749.3"
    value = br.BandRatio({950: 1}, {750: 1}, units="1").value(br.as_cube([0.2, 0.25], [749.3, 951.0]))
    assert value.attrs["definition"] == "R951/R749.3"
    assert value.attrs["units"] == "1"


def test_own_ratios_beside_the_named_ones():
    own = br.BandRatio({830: 1}, {480: 1})
    maps = br.parameters(soil(FIVE), names=["red_slope", own, replace(own, name="mine")])
    assert list(maps.data_vars) == ["red_slope", "r830_r480", "mine"]
    assert list(br.parameters(soil(FIVE), names={"mine": own}).data_vars) == ["mine"]
    assert list(br.parameters(soil(FIVE), names=own).data_vars) == ["r830_r480"]
    again = br.parameters(soil(FIVE), names=[br.named_ratio("red_slope", FIVE)])
    assert list(again.data_vars) == ["red_slope"]


def test_a_parameter_added_in_ten_lines():
    """As the contributor guide shows it."""

    @catalogue.defines("blue_depth")
    def _blue_depth(pick):
        blue, red = pick(480, 750)
        return br.BandRatio({red: 1, blue: -1}, {red: 1}, long_name="depth at 480 nm", source="this test")

    try:
        maps = br.parameters(soil(FIVE), br.Noise(random=0.001))
        assert float(maps.blue_depth) == pytest.approx(1 - 0.12562 / 0.17715)
        assert float(maps.blue_depth_sigma) > 0
        with pytest.raises(ValueError, match="the name 'blue_depth' is taken"):
            catalogue.defines("blue_depth")
    finally:
        del DEFINITIONS["blue_depth"]


@pytest.mark.parametrize(
    ("names", "options", "message"),
    [
        (["red_slop"], {}, "unknown parameter 'red_slop'; did you mean red_slope"),
        (
            ["r950_r750"],
            {},
            "r950_r750: no band within 15 nm of 950 nm; the bands are 480, 600, 700, 750, 830 nm",
        ),
        ([], {}, "names is empty"),
        ([3], {}, "names holds 3; wanted names of the catalogue or BandRatio objects"),
        (["red_slope", "red_slope"], {}, "two parameters are called 'red_slope'"),
        ([br.BandRatio({480: 1}, name="red_slope")], {}, "is the name of a parameter of the catalogue"),
        ({"red_slope": br.BandRatio({480: 1})}, {}, "is the name of a parameter of the catalogue"),
        (
            ["red_slope", br.BandRatio({480: 1}, name="red_slope_sigma")],
            {},
            "taken by the uncertainty of another",
        ),
        ([br.BandRatio({950: 1})], {}, "no band within 15 nm of 950 nm"),
        ([br.BandRatio({480: 1}, name="wavelength")], {}, "the name of one of the cube's coordinates"),
        (["red_slope"], {"tolerance": 0.0}, None),
        (["red_slope"], {"tolerance": -1}, "tolerance must be zero or above"),
        (None, {"parts": True}, "parts=True splits the sigmas, for which noise=… is needed"),
        (None, {"noise": 0.01}, "noise must be a br.Noise or None, got float; br.Noise"),
    ],
)
def test_bad_requests(names, options, message):
    if message is None:
        assert br.parameters(soil(FIVE), names=names, **options)
        return
    with pytest.raises((ValueError, TypeError), match=message):
        br.parameters(soil(FIVE), names=names, **options)


def test_more_bad_requests():
    with pytest.raises(ValueError, match="allow no parameter of the catalogue; give names="):
        br.parameters(br.as_cube([0.1], [1200]))
    with pytest.raises(ValueError, match="shoulder must be 750 or 700 nm, got 800"):
        br.mafic_depth(soil(FIVE), shoulder=800)
    with pytest.raises(ValueError, match="no band within 15 nm of 750 nm"):
        br.mafic_depth(soil([480, 600, 700, 830]), shoulder=750)
    with pytest.raises(ValueError, match="mafic_depth: no band within 15 nm of 830 nm"):
        br.named_ratio("mafic_depth", [480, 600, 750])
    with pytest.raises(ValueError, match="'mafic_depth' is the name of a parameter of the catalogue"):
        br.parameters(soil(FIVE), names={"mafic_depth": "red_slope"})
    with pytest.raises(ValueError, match="a gradient runs from a shorter to a longer wavelength"):
        catalogue.gradient_ratio(700, 600)
    with pytest.raises(ValueError, match="red_slope: no band within 15 nm of 600 nm"):
        br.red_slope(soil([480, 700]))
    with pytest.raises(TypeError, match="a cube must be a DataArray"):
        br.red_slope([0.1, 0.2])


def test_tolerance_reaches_every_function_that_picks_bands():
    cube = br.as_cube([0.12, 0.15, 0.17, 0.18, 0.19], [460, 620, 720, 770, 850])
    assert float(br.red_slope(cube, tolerance=25)) == pytest.approx(2e4 * 0.02 / (0.32 * 100))
    for function in (br.uv_vis_slope, br.red_slope, br.reflectance_700, br.mafic_depth):
        function(cube, tolerance=25)
        with pytest.raises(ValueError, match="no band within 15 nm"):
            function(cube)
    noise = br.Noise(random={480: 0.1, 600: 0.1, 700: 0.1, 750: 0.1, 830: 0.1})
    assert "red_slope_sigma" in br.parameters(cube, noise, tolerance=25)
    assert br.named_ratio("red_slope", cube.wavelength, tolerance=25).wavelengths == (620, 720)


@pytest.fixture(scope="module")
def rows(lab):
    with (lab / "values.csv").open() as stream:
        return [row for row in csv.DictReader(stream) if row["r480"]]


@pytest.fixture(scope="module")
def cube(rows):
    values = [[float(row[f"r{nm:g}"]) for row in rows] for nm in FIVE]
    return br.as_cube(np.array(values), FIVE).assign_coords(sample=[row["sample"] for row in rows])


class TestLaboratoryMinerals:
    """What the parameters say about real samples.

    Source: Kokaly et al. 2017, USGS Spectral Library Version 7, Data Series 1035, doi:10.3133/ds1035.
    """

    @staticmethod
    def kinds(cube, *words):
        return np.array([str(sample).startswith(words) for sample in cube.sample.values])

    def test_every_definition_on_every_sample(self, rows, cube):
        maps = br.parameters(cube)
        for i, row in enumerate(rows):
            r = {nm: float(row[f"r{nm}"]) for nm in (480, 600, 700, 750, 830)}
            assert float(maps.uv_vis_slope[i]) == pytest.approx(
                2e4 * (r[600] - r[480]) / (120 * (r[600] + r[480])), abs=1e-6
            )
            assert float(maps.red_slope[i]) == pytest.approx(
                2e4 * (r[700] - r[600]) / (100 * (r[700] + r[600])), abs=1e-6
            )
            assert float(maps.reflectance_700[i]) == pytest.approx(r[700], abs=1e-6)
            assert float(maps.mafic_depth[i]) == pytest.approx(1 - r[830] / r[750], abs=1e-6)

    def test_opaques_are_dark_and_plagioclases_bright(self, cube):
        r700 = br.reflectance_700(cube)
        assert (r700[self.kinds(cube, "Ilmenite", "Magnetite")] < 0.08).all()
        assert (r700[self.kinds(cube, "Anorthite", "Bytownite", "Labradorite")] > 0.25).all()

    def test_olivine_and_low_calcium_pyroxene_stand_clear(self, cube):
        depth = br.mafic_depth(cube)
        clear = self.kinds(cube, "Olivine", "Enstatite", "Bronzite", "Hypersthene")
        plagioclase = self.kinds(cube, "Anorthite", "Bytownite", "Labradorite")
        assert clear.sum() == 14
        assert plagioclase.sum() == 4
        assert float(depth[clear].min()) > float(depth[plagioclase].max())

    def test_augite_and_basalt_are_missed_as_stated(self, cube):
        depth = br.mafic_depth(cube)
        missed = depth[self.kinds(cube, "Augite", "Basalt")]
        clear = self.kinds(cube, "Olivine", "Enstatite", "Bronzite", "Hypersthene")
        assert float(missed.max()) < float(depth[clear].min())
        assert float(missed.min().round(2)) >= -0.08
        assert float(missed.max()) <= 0.02
