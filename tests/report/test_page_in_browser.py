"""The page in a real browser: no complaint, no network, pointing, selecting, layers, keyboard, hostile names."""

import re

import numpy as np
import pytest
import xarray as xr

import bandratio as br

NOISE = br.Noise(random=0.001, band_gain=0.003)
HOSTILE = '<img src=x onerror="window.broken=1">'
SCRIPT = "</script><script>window.broken=2</script> ${title} $$\\alpha$$ & '"


def scene(shape=(60, 80)):
    rng = np.random.default_rng(0)
    R = rng.normal(0.12, 0.004, shape)
    S = rng.normal(11, 0.5, shape)
    R[10:16, 20:30], S[10:16, 20:30] = 0.2, 3.0
    R[40:43, 60:63], S[40:43, 60:63] = 0.2, 3.0
    R1 = R * (1 - S / 200) / (1 + S / 200)
    cube = xr.DataArray(
        np.stack([0.8 * R1, R1, R, 1.05 * R]).astype(np.float32),
        dims=("wavelength", "y", "x"),
        coords={
            "y": ("y", 1000.0 * np.arange(shape[0])[::-1], {"units": "m"}),
            "x": ("x", 1000.0 * np.arange(shape[1]), {"units": "m"}),
        },
    )
    cube = br.as_cube(cube, [480, 600, 700, 830])
    maps = br.parameters(cube, NOISE, parts=True)
    return cube, maps, br.pyroclastic_flags(maps, brighter_than=0.17, darker_than=0.05, flatter_than=7)


@pytest.fixture(scope="module")
def made(tmp_path_factory):
    cube, maps, flags = scene()
    page = tmp_path_factory.mktemp("page") / "page.html"
    br.write_report(
        maps, page, flags=flags, cube=cube, noise=NOISE, title="Corvane Basin", command="bandratio report …"
    )
    return page, maps


@pytest.fixture
def page(browser, made):
    browser.driver.get_log("browser")
    browser.driver.get_log("performance")
    browser.open(made[0])
    return browser


def place(page, view, x, y):
    """Pixel of the window that shows a point of a view's data coordinates."""
    return page.run(
        """
        const view = Bokeh.index.get_by_id(Bokeh.documents[0].get_model_by_name(arguments[0]).id);
        const box = view.el.getBoundingClientRect();
        const frame = view.frame;
        return [box.left + frame.x_scale.compute(arguments[1]), box.top + frame.y_scale.compute(arguments[2])];
        """,
        view, x, y,
    )  # fmt: skip


def mouse(page, *steps):
    for kind, (x, y), pressed in steps:
        page.driver.execute_cdp_cmd(
            "Input.dispatchMouseEvent",
            {"type": kind, "x": x, "y": y, "button": "left" if pressed else "none", "buttons": int(pressed), "clickCount": int(pressed)},
        )  # fmt: skip


def selected(page):
    return page.run("return Array.from(Bokeh.documents[0].get_model_by_name('points').selected.indices)")


def test_no_complaint_and_no_network(page):
    assert page.complaints() == []
    asked = [
        entry["message"]
        for entry in page.driver.get_log("performance")
        if "requestWillBeSent" in entry["message"]
    ]
    assert not any('"url":"http' in message for message in asked)
    assert page.run("return performance.getEntriesByType('resource').map(entry => entry.name)") == []


def test_pointing_at_a_pixel_gives_its_values(page, made):
    _, maps = made
    here = maps.isel(y=12, x=25)
    at = place(page, "map-left", float(here.x) / 1000, float(here.y) / 1000)
    mouse(page, ("mouseMoved", (at[0] - 3, at[1]), False), ("mouseMoved", at, False))
    page.wait(lambda: any("flag" in text for text in page.deep_text(".bk-Tooltip")))
    text = "".join(page.deep_text(".bk-Tooltip"))
    for name in ("reflectance_700", "red_slope", "mafic_depth"):
        value, sigma = float(here[name]), float(here[f"{name}_sigma"])
        shown = f"{float(f'{value:.4g}')}"
        assert shown.rstrip("0") in text
        assert f"{float(f'{sigma:.4g}')}".rstrip("0") in text
    assert "bright candidate" in text


def test_pointing_at_a_map_without_coordinates(browser, tmp_path):
    """Rows count from the top; the pictures are of 3 × 3 pixels, and the last squares reach beyond the scene."""
    row, column = np.mgrid[:1001, :1301]
    maps = xr.Dataset({"row": (("y", "x"), row.astype("f4")), "column": (("y", "x"), column.astype("f4"))})
    browser.open(br.write_report(maps, tmp_path / "plain.html"))
    for x, y in ((1000, 900), (30, 24)):
        at = place(browser, "map-left", x, y)
        mouse(browser, ("mouseMoved", (at[0] - 3, at[1]), False), ("mouseMoved", at, False))
        shown = {}

        def near(x=x, y=y, shown=shown):
            text = "".join(browser.deep_text(".bk-Tooltip")).rpartition("}")[2]
            found = re.findall(r"(row|column): ([\d.]+)", text)
            shown.update(dict(found[-2:]))
            # the window's pixel covers a few of the scene's
            return (
                len(shown) == 2 and abs(float(shown["column"]) - x) < 6 and abs(float(shown["row"]) - y) < 6
            )

        browser.wait(near, 10)


@pytest.mark.parametrize(
    ("view", "first", "last"),
    [("map-left", (19.5, 49.5), (29.5, 43.5)), ("scatter", (0.18, 7.5), None)],
)
def test_selecting_in_one_view_highlights_in_the_others(page, view, first, last):
    assert selected(page) == []
    if last is None:  # down to the corner of the view
        last = page.run(
            "const p = Bokeh.documents[0].get_model_by_name(arguments[0]);"
            "return [p.x_range.end - 1e-3, p.y_range.start + 1e-3]",
            view,
        )
    start, end = place(page, view, *first), place(page, view, *last)
    middle = [(a + b) / 2 for a, b in zip(start, end, strict=True)]
    mouse(
        page,
        ("mouseMoved", start, False), ("mousePressed", start, True), ("mouseMoved", middle, True), ("mouseMoved", end, True),
        ("mouseReleased", end, True),
    )  # fmt: skip
    page.wait(lambda: len(selected(page)) > 0)
    chosen = selected(page)
    columns = page.run(
        "const d = Bokeh.documents[0].get_model_by_name('points').data; return [Array.from(d.x), Array.from(d.y), Array.from(d.region)]"
    )
    region = np.array(columns[2])[chosen]
    expected = {"map-left": 60, "scatter": 69}[view]
    assert len(chosen) == expected
    assert set(region) == ({1} if view == "map-left" else {1, 2})
    # all three views draw their points from one source, with a look of their own for what is selected
    for name in ("points-left", "points-right", "points-scatter"):
        assert page.run(
            "const r = Bokeh.documents[0].get_model_by_name(arguments[0]);"
            "return r.data_source.name === 'points' && r.selection_glyph.fill_color.value === '#D55E00'",
            name,
        )
    assert f"{expected} pixels are selected" in page.run(
        "return document.getElementById('selection').textContent"
    )


def test_layers_and_axes(page, made):
    from selenium.webdriver.common.by import By
    from selenium.webdriver.support.ui import Select

    def visible(name):
        return page.run("return Bokeh.documents[0].get_model_by_name(arguments[0]).visible", name)

    names = [option.text for option in Select(page.driver.find_element(By.ID, "layer-left")).options]
    wanted = names.index("mafic_depth")
    Select(page.driver.find_element(By.ID, "layer-left")).select_by_visible_text("mafic_depth")
    assert visible(f"image-left-{wanted}")
    assert not visible(f"image-left-{names.index('reflectance_700')}")
    assert visible("flags-left")
    title = page.run("return Bokeh.documents[0].get_model_by_name('map-left').title.text.text")
    assert title.replace("\n", " ") == made[1]["mafic_depth"].attrs["long_name"]
    page.driver.find_element(By.ID, "show-flags").click()
    assert not visible("flags-left")
    assert not visible("flags-right")
    page.driver.find_element(By.ID, "show-values").click()
    assert not visible(f"image-left-{wanted}")
    Select(page.driver.find_element(By.ID, "scatter-x")).select_by_visible_text("mafic_depth")
    assert (
        page.run("return Bokeh.documents[0].get_model_by_name('points-scatter').glyph.x.field")
        == f"v{wanted}"
    )
    assert page.complaints() == []


def test_views_stand_side_by_side_in_a_wide_window(page):
    tops = page.run(
        "return ['left', 'right', 'scatter'].map(n => document.getElementById('view-' + n).getBoundingClientRect().top)"
    )
    assert len(set(tops)) == 1
    assert page.run("return document.documentElement.scrollWidth <= window.innerWidth")


def test_table_sorts_and_selects_by_keyboard(page):
    from selenium.webdriver.common.by import By
    from selenium.webdriver.common.keys import Keys

    section = page.driver.find_element(By.CSS_SELECTOR, "section[aria-labelledby=regions-title]")

    def pixels():
        return [
            row.find_elements(By.TAG_NAME, "td")[3].text
            for row in section.find_elements(By.CSS_SELECTOR, "tbody tr")
        ]

    assert pixels() == ["60", "9"]
    header = section.find_elements(By.CSS_SELECTOR, "th")[2]
    header.find_element(By.TAG_NAME, "button").send_keys(Keys.ENTER)
    assert pixels() == ["9", "60"]
    assert header.get_attribute("aria-sort") == "ascending"
    header.find_element(By.TAG_NAME, "button").send_keys(Keys.ENTER)
    assert pixels() == ["60", "9"]
    section.find_elements(By.CSS_SELECTOR, "button[data-region]")[1].send_keys(Keys.ENTER)
    assert len(selected(page)) == 9
    page.driver.find_element(By.ID, "clear").send_keys(Keys.ENTER)
    assert selected(page) == []


def test_accessibility(page, axe):
    """Deque's axe-core, all its rules: names, roles, keyboard, contrast."""
    page.run(axe)
    found = page.driver.execute_async_script(
        "const done = arguments[0]; axe.run(document, {}).then(done, error => done({error: String(error)}))"
    )
    assert "error" not in found
    assert [(each["id"], each["nodes"][0]["html"][:120]) for each in found["violations"]] == []
    assert any(each["id"] == "color-contrast" for each in found["passes"])


def test_hostile_names_are_harmless(browser, tmp_path):
    _, maps, flags = scene()
    maps = maps.rename({"red_slope": HOSTILE, "red_slope_sigma": f"{HOSTILE}_sigma"})
    maps[HOSTILE].attrs |= {"long_name": SCRIPT, "units": HOSTILE, "source": SCRIPT, "definition": HOSTILE}
    maps.attrs |= {"noise": SCRIPT, HOSTILE: SCRIPT}
    flags.attrs |= {"thresholds": SCRIPT, "noise": HOSTILE, "history": HOSTILE}
    page = tmp_path / "hostile.html"
    br.write_report(maps, page, flags=flags, title=HOSTILE + SCRIPT, command=SCRIPT)
    browser.driver.get_log("browser")
    browser.open(page)
    here = maps.isel(y=12, x=25)
    at = place(browser, "map-left", float(here.x) / 1000, float(here.y) / 1000)
    mouse(browser, ("mouseMoved", (at[0] - 3, at[1]), False), ("mouseMoved", at, False))
    browser.wait(lambda: any(HOSTILE in text for text in browser.deep_text(".bk-Tooltip")))
    assert browser.run("return window.broken ?? null") is None
    assert browser.run("return document.querySelectorAll('img').length") == 0
    assert browser.complaints() == []
    assert browser.run("return document.title").startswith(HOSTILE)
    assert HOSTILE in browser.run("return document.getElementById('layer-left').textContent")
    assert SCRIPT in browser.run("return document.body.textContent")
