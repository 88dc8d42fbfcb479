"""What stands on the page, its size, and what it refuses."""

import re

import dask.array as da
import numpy as np
import pytest
import xarray as xr

import bandratio as br

NOISE = br.Noise(random=0.001)


def maps_and_flags(shape=(20, 30), chunks=None):
    R = np.full(shape, 0.1, dtype=np.float32)
    R[2:5, 3:7] = 0.3
    cube = br.as_cube(np.stack([0.9 * R, R]), [600, 700])
    if chunks:
        cube = cube.chunk(chunks)
    maps = br.parameters(cube, NOISE)
    return cube, maps, br.pyroclastic_flags(maps, brighter_than=0.2)


def text_of(page):
    return re.sub(
        r"<[^>]*>", " ", re.sub(r"<(script|style)\b.*?</\1>", " ", page.read_text(), flags=re.DOTALL)
    )


def test_question_answer_and_provenance(tmp_path):
    cube, maps, flags = maps_and_flags()
    page = br.write_report(
        maps, tmp_path / "page.html", flags=flags, cube=cube, noise=NOISE, title="Corvane Basin",
        command=["bandratio", "report", "my maps.tif", "-o", "page.html"],
    )  # fmt: skip
    text = " ".join(text_of(page).split())
    assert "Where does this scene look like a pyroclastic deposit?" in text
    assert "12 bright candidate pixels of 600 (2.00%), in 1 region." in text
    assert "at most 5 % of the candidates are false" in text
    assert "never proof of a pyroclastic deposit" in text
    assert "bandratio report 'my maps.tif' -o page.html" in text.replace("&#x27;", "'")
    assert "threshold brighter_than 0.2, absolute; whole sigma" in text
    assert f"bandratio {br.__version__}" in text
    assert "if the noise is what was stated (random 0.001)" in text
    assert "noise random 0.001 geometry" in text
    # of the page's own tags none refers to another file; the browser's test sees that nothing is asked for
    tags = re.findall(
        r"<[^>]*>", re.sub(r"(<script\b[^>]*>).*?</script>", r"\1", page.read_text(), flags=re.DOTALL)
    )
    assert not [tag for tag in tags if re.search(r"\b(src|href)\s*=", tag)]


def test_without_flags_and_without_candidates(tmp_path):
    _, maps, _ = maps_and_flags()
    text = text_of(br.write_report(maps, tmp_path / "a.html"))
    assert "how well are they known?" in text
    assert "No candidates were flagged" in text
    none = br.pyroclastic_flags(maps, brighter_than=0.9)
    text = text_of(br.write_report(maps, tmp_path / "b.html", flags=none))
    assert "Nowhere that can be told from the noise" in text


def test_ice_page_carries_the_laser_caution(tmp_path):
    _, maps, flags = maps_and_flags()
    flags = flags.drop_vars("p_bright")
    words = "no_data ice_free opaque_like undecided unexplained ice_candidate"
    flags["flag"].attrs |= {"flag_meanings": words, "flag_values": np.arange(6, dtype=np.int8)}
    flags["flag"] = (
        flags["flag"].where(flags["flag"] != 3, 5).astype(np.int8).assign_attrs(flags["flag"].attrs)
    )
    text = text_of(br.write_report(maps, tmp_path / "ice.html", flags=flags))
    assert "look like ice?" in text
    assert "12 ice candidate pixels" in text
    assert "IEC 60825-1" in text


def test_a_large_scene_stays_small_and_says_so(tmp_path):
    """Seven parameters of 9 million pixels each, lazy, and every tenth pixel of the half scene a candidate."""
    rng = np.random.default_rng(0)
    tile = rng.random((300, 300), dtype=np.float32)
    plane = da.from_array(np.tile(tile, (10, 10)), chunks=(600, 3000))
    maps = xr.Dataset()
    for place in range(7):
        maps[f"parameter_{place}"] = (("y", "x"), plane * (place + 1))
        maps[f"parameter_{place}_sigma"] = (("y", "x"), plane * 0.1)
    codes = np.where(np.tile(tile, (10, 10)) < 0.1, 3, 1).astype(np.int8)
    codes[:, 1500:] = 1
    flag = xr.Variable(("y", "x"), codes, {"flag_values": np.arange(5, dtype=np.int8), "flag_meanings": "no_data background undecided bright_candidate dark_candidate"})  # fmt: skip
    flags = xr.Dataset({"flag": flag}, attrs={"false_discovery_rate": 0.05})
    page = br.write_report(maps, tmp_path / "large.html", flags=flags, min_pixels=5)
    assert 2e6 < page.stat().st_size < 15e6
    text = " ".join(text_of(page).split())
    assert re.search(r"The pictures are averaged over \d+ × \d+ pixels of 3,000 × 3,000", text)
    assert "candidates are in the pictures and the table, but not among those" in text
    assert re.search(r"The 500 largest of [\d,]+\.", text)


def test_very_many_parameters_stay_small(tmp_path):
    rng = np.random.default_rng(0)
    R = rng.normal(0.2, 0.05, (300, 300)).astype(np.float32)
    cube = br.as_cube(np.stack([0.9 * R, R]), [600, 700])
    names = {f"parameter_{place}": br.BandRatio({600: 1, 700: place}, {700: 1}) for place in range(80)}
    maps = br.parameters(
        cube,
        NOISE,
        ["reflectance_700", *[br.BandRatio(r.numerator, r.denominator, name=n) for n, r in names.items()]],
    )
    flags = br.pyroclastic_flags(maps, brighter_than=0.28)
    page = br.write_report(maps, tmp_path / "many.html", flags=flags, cube=cube, noise=NOISE)
    assert page.stat().st_size < 15e6


def test_maps_in_degrees_and_with_gaps(tmp_path):
    cube, _, _ = maps_and_flags()
    cube = cube.copy()
    cube[0, 8:12] = np.nan
    cube = cube.assign_coords(y=np.linspace(50, 40, 20), x=np.linspace(10, 25, 30)).rio.write_crs("+proj=longlat +R=1737400 +no_defs")  # fmt: skip
    maps = br.parameters(cube, NOISE)
    page = br.write_report(
        maps, tmp_path / "degrees.html", flags=br.pyroclastic_flags(maps, brighter_than=0.2)
    )
    text = " ".join(text_of(page).split())
    assert "latitude 4" in text
    assert "x [°] y [°]" in text
    assert "true area [km²]" in text
    assert "map unit" not in text


def test_places_of_regions_have_a_unit_and_few_digits(tmp_path):
    _, maps, flags = maps_and_flags()
    text = " ".join(text_of(br.write_report(maps, tmp_path / "page.html", flags=flags)).split())
    assert "area [map unit²] x [pixel] y [pixel]" in text
    # the middle of columns 3 to 6 and rows 2 to 4
    assert "4.500 3.000" in text


def test_outlines_are_white_and_black_round_groups_and_left_away_where_they_would_hide_the_map():
    from bandratio.report.figures import _outlined

    orange = np.uint32(0xFF009FE6)
    colours = np.zeros((40, 40), dtype=np.uint32)
    colours[10:20, 10:20] = orange
    colours[14, 14] = 0
    seen = _outlined(colours)
    assert (seen == orange).sum() == 99
    assert seen[14, 14] == 0
    assert seen[9, 9:21].tolist() == [0xFFFFFFFF] * 12
    assert seen[8, 8:22].tolist() == [0xFF000000] * 14
    assert seen[7, 7:23].tolist() == [0] * 16
    colours[::6, ::6] = orange
    assert (_outlined(colours) == colours).all()


@pytest.mark.parametrize(
    ("change", "error", "message"),
    [
        ({"path": "page.pdf"}, ValueError, "its name must end in .html"),
        ({"path": "nowhere/page.html"}, FileNotFoundError, "the folder nowhere does not exist"),
        ({"path": __file__.replace("test_page.py", "page.html")}, FileExistsError, "exists already"),
        ({"maps": np.zeros((3, 3))}, TypeError, "maps must be a Dataset"),
        ({"maps": xr.Dataset()}, ValueError, "the maps hold no parameter over an image (nothing)"),
        ({"maps": xr.Dataset({"red_slope": ("sample", [1.0])})}, ValueError, "shows maps of two dimensions"),
        ({"flags": 3}, TypeError, "flags must be the Dataset of a flagging function"),
        ({"flags": "small"}, ValueError, "the flags have {'y': 19, 'x': 30} and the maps {'y': 20, 'x': 30}"),
        ({"min_pixels": 0}, ValueError, "min_pixels is a number of pixels"),
    ],
)
def test_bad_input(change, error, message, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    if "exists" in message:
        change = {"path": tmp_path / "page.html"}
        (tmp_path / "page.html").write_text("older")
    _, maps, flags = maps_and_flags()
    if change.get("flags") == "small":
        change = {"flags": flags.isel(y=slice(1, None))}
    options = {"maps": maps, "path": "page.html", "flags": flags, **change}
    with pytest.raises(error, match=re.escape(message)):
        br.write_report(options.pop("maps"), options.pop("path"), **options)
    assert not (tmp_path / "page.html").exists() or (tmp_path / "page.html").read_text() == "older"
