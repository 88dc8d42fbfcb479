"""Real spectra written as rasters and read back: the whole road from a file to a parameter.

Sources: Kokaly et al. 2017, USGS Spectral Library Version 7, Data Series 1035, doi:10.3133/ds1035; lunar soil 62231:
Pieters 1999, New Views of the Moon II, abstract 8025 (RELAB).
"""

import csv

import numpy as np
import pytest

import bandratio as br

from .reference.soil_62231 import REFLECTANCE
from .test_files_cubes import braced, write_raw, write_tif

BANDS = (480, 600, 700, 750, 830)


@pytest.fixture(scope="module")
def spectra(lab):
    """All 34 laboratory samples and the soil, shape (band, 5, 7); the ice at 77 K has no red value."""
    with (lab / "values.csv").open() as stream:
        rows = [[float(row[f"r{nm}"] or "nan") for nm in BANDS] for row in csv.DictReader(stream)]
    rows.append([REFLECTANCE[nm] for nm in BANDS])
    assert len(rows) == 35
    return np.array(rows).T.reshape(5, 5, 7).astype("f4")


@pytest.mark.parametrize("kind", ["GeoTIFF", "band by band", "line by line", "pixel by pixel"])
def test_parameters_of_a_file_are_those_of_the_definitions(spectra, tmp_path, kind):
    interleave = {"band by band": "bsq", "line by line": "bil", "pixel by pixel": "bip"}.get(kind)
    if interleave is None:
        cube = br.open_cube(write_tif(tmp_path / "lab.tif", spectra), BANDS)
    else:
        cube = br.open_cube(write_raw(tmp_path, spectra, interleave, wavelength=braced(BANDS)))
    maps = br.parameters(cube, br.Noise(random=0.001)).compute()
    r = {nm: spectra[i].astype(float) for i, nm in enumerate(BANDS)}
    # A'Hearn et al. 1984, AJ 89, 579 for the slopes; the depths are common practice, no source
    expected = {
        "uv_vis_slope": 2e4 * (r[600] - r[480]) / (120 * (r[600] + r[480])),
        "red_slope": 2e4 * (r[700] - r[600]) / (100 * (r[700] + r[600])),
        "reflectance_700": r[700],
        "mafic_depth": 1 - r[830] / r[750],
        "mafic_depth_continuum": 1 - r[830] / (r[750] + (r[750] - r[600]) * 80 / 150),
    }
    assert {name for name in maps if not name.endswith("_sigma")} == set(expected)
    for name, values in expected.items():
        np.testing.assert_allclose(maps[name], values, rtol=1e-6, atol=1e-6)
    assert int(np.isnan(maps["red_slope"]).sum()) == 1  # the ice at 77 K, whose spectrum starts at 859 nm
