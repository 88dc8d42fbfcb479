"""Libraries of spectra in every open form that is read, and what is said where one cannot be."""

import shutil
import sqlite3
from contextlib import closing, redirect_stdout
from io import StringIO

import numpy as np
import pytest
from spectral.database.ecostress import EcostressDatabase, read_ecostress_file
from spectral.database.relab import RelabDatabase, read_relab_file
from spectral.database.usgs import USGSDatabase

import bandratio as br

from ..reference import usgs_splib07a

ECOSTRESS = """Name: Invented slag
Type: Manmade
Class: Slag
Subclass: none
Particle Size: 74-250um
Sample No.: CB-7
Owner: Corvane Basin
Wavelength Range: VSWIR
Origin: invented for this test
Description: a spectrum in the form of the library, of no real sample
Measurement: Bidirectional reflectance
First Column: X
Second Column: Y
X Units: Wavelength (micrometers)
Y Units: Reflectance (percentage)
First X Value: 0.8
Last X Value: 0.4
Number of X Values: 5
Additional Information: none

0.8\t22.0
0.7\t20.0
0.6\t18.0
0.5\t15.0
0.4\t11.0
"""

RELAB = """5
400.0  0.110  0.001
500.0  0.150  0.001
600.0  0.180  0.001
700.0  0.200  0.001
800.0  0.220  0.001



C1CB07.ASC

CB-CVB-007
Invented slag
Source Angle: 30 Detect Angle: 0 Voltage: 12
"""

#: The package leaves files open, which is none of our doing.
leaves_files_open = pytest.mark.filterwarnings(
    "ignore::ResourceWarning", "ignore::pytest.PytestUnraisableExceptionWarning"
)

USGS_CHANNELS = (
    " splib07a Record=9: Wavelengths TEST invented 0.4-0.8 microns\n 0.4\n 0.5\n 0.6\n 0.7\n 0.8\n"
)
USGS_SPECTRUM = (
    " splib07a Record=77: Slag CB7.a 12um          TESTa AREF\n 0.11\n 0.15\n -1.23e34\n 0.20\n 0.22\n"
)

WAVELENGTHS = [400, 500, 600, 700, 800]
VALUES = [0.11, 0.15, 0.18, 0.20, 0.22]


def write(path, text):
    path.write_text(text, encoding="utf-8")
    return path


# ---- whole laboratory folder


def test_the_usgs_folder_is_read_whole(lab):
    library = br.open_library(lab / "usgs_splib07a")
    assert library.dims == ("sample", "wavelength")
    assert library.sizes["sample"] == 34
    assert library.quantity.item() == "reflectance_factor"
    hypersthene = library.isel(sample=[str(n).startswith("Hypersthene") for n in library.sample.values])
    assert set(hypersthene.specimen.values) == {"PYX02"}  # five grain sizes, one specimen
    assert hypersthene.sizes["sample"] == 5
    assert np.nanmin(library) >= 0
    # BECK and ASD channels side by side; nothing is interpolated
    counts = np.isfinite(library).sum("wavelength")
    assert counts.max() > 2000
    assert 400 < counts.sel(sample="Ilmenite HS231.3B") <= 480
    ice = library.sel(sample="H2O-Ice GDS136 77K").dropna("wavelength")
    assert ice.wavelength[0] == pytest.approx(859, abs=1)  # it starts at 0.859 µm, says the folder's note


def test_values_agree_with_published_figures(lab):
    library = br.open_library(lab / "usgs_splib07a")
    for record, figures in usgs_splib07a.REFLECTANCE.items():
        row = library.isel(sample=list(library.record.values).index(str(record)))
        found = br.band_average(row, list(figures))
        np.testing.assert_allclose(found, list(figures.values()), atol=6e-5)  # they have four digits


def test_one_file_finds_its_channels_beside_it(lab):
    one = br.open_library(lab / "usgs_splib07a" / "splib07a_Ilmenite_HS231.3B_BECKb_AREF.txt")
    assert one.sample.item() == "Ilmenite HS231.3B"
    assert one.record.item() == "5561"
    assert one.group.item() == "ilmenite"


def test_channels_may_lie_in_a_folder_above(lab, tmp_path):
    source = lab / "usgs_splib07a"
    (tmp_path / "chapter").mkdir()
    shutil.copy(source / "splib07a_Ilmenite_HS231.3B_BECKb_AREF.txt", tmp_path / "chapter")
    shutil.copy(source / "splib07a_Wavelengths_BECK_Beckman_0.2-3.0_microns.txt", tmp_path)
    assert br.open_library(tmp_path / "chapter").sizes["sample"] == 1


# ---- each form alone


def test_usgs_text(tmp_path):
    write(tmp_path / "channels.txt", USGS_CHANNELS)
    write(tmp_path / "slag.txt", USGS_SPECTRUM)
    write(tmp_path / "transmission.txt", USGS_SPECTRUM.replace("AREF", "TRAN"))
    write(tmp_path / "readme.txt", "about these files\n")
    library = br.open_library(tmp_path)
    assert library.sample.values.tolist() == ["Slag CB7.a 12um"]
    assert library.specimen.item() == "CB7"
    np.testing.assert_allclose(library.wavelength, WAVELENGTHS)
    np.testing.assert_allclose(library.values[0], [0.11, 0.15, np.nan, 0.20, 0.22])


@leaves_files_open
def test_ecostress_text_as_the_spectral_package_reads_it(tmp_path):
    file = write(tmp_path / "slag.spectrum.txt", ECOSTRESS)
    library = br.open_library(file)
    np.testing.assert_allclose(library.wavelength, WAVELENGTHS)
    np.testing.assert_allclose(library.values[0], VALUES)
    outside = read_ecostress_file(str(file))
    np.testing.assert_allclose(library.wavelength, np.array(outside.x) * 1000)
    np.testing.assert_allclose(library.values[0], np.array(outside.y) / 100)
    assert (library.group.item(), library.grain_size.item()) == ("slag", "74-250um")
    assert library.quantity.item() == "reflectance_factor"
    hemispherical = ECOSTRESS.replace("Bidirectional", "Directional (10 Degree) Hemispherical")
    assert "quantity" not in br.open_library(write(tmp_path / "h.txt", hemispherical)).coords


def test_relab_text_as_the_spectral_package_reads_it(tmp_path):
    file = write(tmp_path / "c1cb07.asc", RELAB)
    library = br.open_library(file)
    outside = read_relab_file(str(file))
    np.testing.assert_allclose(library.wavelength, outside.x)
    np.testing.assert_allclose(library.values[0], outside.y)
    assert library.specimen.item() == outside.sample["relab_id"] == "CB-CVB-007"


@leaves_files_open
@pytest.mark.parametrize("kind", ["ecostress", "relab", "usgs"])
def test_databases_that_the_spectral_package_makes(tmp_path, kind):
    source = tmp_path / "source" / "below"
    source.mkdir(parents=True)
    database = tmp_path / "library.db"
    if kind == "ecostress":
        write(source / "slag.vswir.spectrum.txt", ECOSTRESS)
        made = EcostressDatabase.create(str(database), str(source))
    elif kind == "relab":
        write(source / "c1cb07.asc", RELAB)
        with redirect_stdout(StringIO()):
            made = RelabDatabase.create(str(database), str(source.parent))
    else:
        write(source / "channels.txt", USGS_CHANNELS.replace("TEST", "BECK"))
        write(source / "slag.txt", USGS_SPECTRUM.replace("TEST", "BECK"))
        made = _usgs_database(database, source)
    made.db.close()
    library = br.open_library(database)
    np.testing.assert_allclose(library.wavelength, WAVELENGTHS, rtol=1e-6)
    expected = [0.11, 0.15, np.nan, 0.20, 0.22] if kind == "usgs" else VALUES
    np.testing.assert_allclose(library.values[0], expected, rtol=1e-6)


def _usgs_database(database, source):
    from spectral.database.usgs import SampleData, SpectrometerData

    made = USGSDatabase()
    made._connect(str(database))
    for schema in USGSDatabase.schemas:
        made.cursor.execute(schema)
    made._add_spectrometer_data(SpectrometerData.read_from_file(str(source / "channels.txt")))
    made._add_sample_data(SampleData.read_from_file(str(source / "slag.txt")))
    return made


@pytest.mark.parametrize(("unit", "factor"), [("Nanometers", 1), ("Micrometers", 1000), (None, 1000)])
def test_a_library_with_a_text_header(tmp_path, unit, factor):
    from spectral.io import envi as headers

    header = {"wavelength": [w / factor for w in WAVELENGTHS], "spectra names": ["slag", "ash"]}
    if unit:
        header["wavelength units"] = unit
    values = np.array([VALUES, VALUES[::-1]], dtype=np.float32)
    headers.SpectralLibrary(values, header).save(str(tmp_path / "library"))
    for file in (tmp_path / "library.hdr", tmp_path / "library.sli"):
        library = br.open_library(file)
        assert library.sample.values.tolist() == ["slag", "ash"]
        np.testing.assert_allclose(library.wavelength, WAVELENGTHS)
        np.testing.assert_allclose(library.values, values)


@pytest.mark.parametrize(
    "text",
    [
        "wavelength_nm,slag,ash\n400,0.11,0.2\n500,0.15,\n600,0.18,-1.23e34\n700,0.2,0.5\n",
        "# comment\nwavelength_um;slag;ash\n0.4;0.11;0.2\n0.5;0.15;nan\n0.6;0.18;-9\n0.7;0.2;0.5\n",
        "wavelength_nm,slag %,ash %\n700,20,50\n600,18,\n500,15,NA\n400,11,20\n",
        "name,wavelength_nm,reflectance\nslag,700,0.2\nslag,400,0.11\nslag,500,0.15\nash,400,0.2\nslag,600,.18\nash,700,.5\n",
        "sample,r400,r500,r600,r700\nslag,0.11,0.15,0.18,0.2\nash,0.2,,,0.5\n",
        "sample,0.7um,0.6um,0.5um,0.4um\nslag,0.2,0.18,0.15,0.11\nash,0.5,,,0.2\n",
    ],
    ids=[
        "a column a sample",
        "semicolons and µm",
        "percent, descending",
        "long",
        "a row a sample",
        "bands in µm",
    ],
)
def test_csv_in_each_shape(tmp_path, text):
    library = br.open_library(write(tmp_path / "spectra.csv", text))
    assert [str(n).removesuffix(" %") for n in library.sample.values] == ["slag", "ash"]
    np.testing.assert_allclose(library.wavelength, [400, 500, 600, 700])
    np.testing.assert_allclose(library.values, [[0.11, 0.15, 0.18, 0.2], [0.2, np.nan, np.nan, 0.5]])


def test_texts_of_a_table_are_kept_and_names_are_made_unique(tmp_path):
    text = "sample,specimen,group,record,grain_size,r400,r500\nslag,C7,slag,1,12 um,0.1,0.2\nslag,C7,slag,2,,0.1,0.3\n"
    library = br.open_library(write(tmp_path / "spectra.csv", text), quantity="reflectance_factor")
    assert library.sample.values.tolist() == ["slag [1]", "slag [2]"]
    assert library.specimen.values.tolist() == ["C7", "C7"]
    assert library.grain_size.values.tolist() == ["12 um", ""]
    assert library.quantity.item() == "reflectance_factor"


def test_published_deviations_are_kept_beside_the_values(lab):
    soil = br.open_library(lab / "lunar_soil_62231.csv")
    assert soil.sample.values.tolist() == ["lunar_soil_62231"]
    relative = (soil.standard_deviation / soil).values
    assert 0.03 < np.nanmedian(relative) < 0.045  # Pieters 1999: spread of the measurement 3–4 %


def test_a_folder_of_mixed_forms(tmp_path):
    write(tmp_path / "a.csv", "wavelength_nm,ash\n400,0.2\n500,0.3\n")
    write(tmp_path / "b.txt", ECOSTRESS)
    write(tmp_path / "c.asc", RELAB)
    library = br.open_library(tmp_path)
    assert library.sizes["sample"] == 3
    assert "quantity" not in library.coords  # one of them does not say


# ---- what cannot be read


@leaves_files_open
@pytest.mark.parametrize(
    ("name", "text", "message"),
    [
        (
            "a.csv",
            "wavelength_nm,slag\n400,0.1\n500,bright\n",
            r"a\.csv, line 3, column 'slag': wanted a number, got 'br",
        ),
        (
            "a.csv",
            "wavelength_nm,slag\n400,0.1\n500\n",
            r"a\.csv, line 3: wanted 2 values as in the header, got 1",
        ),
        (
            "a.csv",
            "wavelength_nm,slag\n400,10.1\n500,15\n",
            r"must be a fraction, got values up to 15, which look like",
        ),
        ("a.csv", "wavelength,slag\n0.4,0.1\n0.5,0.2\n", r"look like µm.*call it wavelength_um"),
        (
            "a.csv",
            "wavelength_nm,slag\n400,0.1\n400,0.2\n500,0.2\n",
            r"one direction, each once; got 400 nm and then 400",
        ),
        (
            "a.csv",
            "wavelength_nm,slag\n400,0.1\n600,0.2\n500,0.2\n",
            r"one direction.*got 600 nm and then 500 nm",
        ),
        ("a.csv", "wavelength_nm,slag\n,0.1\n500,0.2\n", r"line 2: the wavelength is missing"),
        (
            "a.csv",
            "wavelength_nm,slag\n400,-1\n500,-1\n",
            r"'slag' has no value that is finite and not negative",
        ),
        ("a.csv", "wavelength_nm,slag,slag\n400,0.1,0.1\n", r"two columns are called 'slag'"),
        ("a.csv", "wavelength_nm\n400\n500\n", r"no column of reflectances beside the wavelength"),
        ("a.csv", "name,colour\nslag,red\n", r"header is of no known shape: name, colour"),
        ("a.csv", "sample,wavelength_nm,brightness\nslag,400,1\n", r"wanted a column reflectance"),
        ("a.csv", "wavelength_nm,slag\n", r"wanted a header and rows of values, got 1 lines"),
        ("a.txt", "hello\n", r"a file of no known form"),
        ("a.txt", USGS_SPECTRUM, r"no wavelength file for the 5 channels of TESTa; found none"),
        ("a.txt", USGS_CHANNELS, r"holds channel positions, not a spectrum"),
        ("a.txt", USGS_SPECTRUM.replace("0.15", "dark"), r"a\.txt, line 3: wanted one number, got 'dark'"),
        ("a.txt", ECOSTRESS.replace("0.5\t15.0", "0.5\tdark"), r"a\.txt, line 24: wanted two numbers"),
        ("a.txt", ECOSTRESS.replace("Reflectance (perc", "Transmittance (perc"), r"holds no reflectance"),
        (
            "a.asc",
            RELAB.replace("5\n", "50\n", 1),
            r"line 1: 50 values are announced, and 1[0-9] lines follow",
        ),
        ("a.asc", RELAB.replace("0.150", "dark"), r"line 3: wanted two numbers, got '500.0  dark  0.001'"),
        ("a.db", "no database at all", r"not an SQLite database"),
        ("a.sli", "binary", r"no text header beside it; wanted a\.hdr"),
        ("a.hdr", "nonsense", r"not readable as a spectral library"),
    ],
)
def test_unreadable_files_say_what_is_wrong_and_where(tmp_path, name, text, message):
    with pytest.raises(ValueError, match=message):
        br.open_library(write(tmp_path / name, text))


def test_nothing_there(tmp_path):
    with pytest.raises(FileNotFoundError, match="no such file or folder of spectra"):
        br.open_library(tmp_path / "absent.csv")
    with pytest.raises(ValueError, match="no reflectance spectrum found"):
        br.open_library(tmp_path)


def test_two_wavelength_files_that_both_fit(tmp_path):
    write(tmp_path / "slag.txt", USGS_SPECTRUM)
    write(tmp_path / "channels.txt", USGS_CHANNELS)
    write(tmp_path / "other.txt", USGS_CHANNELS.replace("splib07a", "splib07b").replace("0.5", "0.51"))
    assert br.open_library(tmp_path).wavelength.values[1] == pytest.approx(500)  # the one of the same library
    write(tmp_path / "third.txt", USGS_CHANNELS.replace("0.5", "0.52"))
    with pytest.raises(ValueError, match="several wavelength files have 5 channels of TESTa"):
        br.open_library(tmp_path)


def test_a_database_of_another_layout(tmp_path):
    with closing(sqlite3.connect(tmp_path / "other.db")) as connection:
        connection.execute("CREATE TABLE rocks (name TEXT)")
    with pytest.raises(ValueError, match=r"wanted the tables Samples and Spectra.*got rocks"):
        br.open_library(tmp_path / "other.db")


def test_an_image_is_no_library(tmp_path):
    from spectral.io import envi as headers

    headers.save_image(str(tmp_path / "image.hdr"), np.zeros((2, 2, 3), dtype=np.float32))
    with pytest.raises(ValueError, match="describes an image, not a spectral library"):
        br.open_library(tmp_path / "image.hdr")


def test_a_quantity_that_contradicts_the_files(tmp_path):
    with pytest.raises(ValueError, match=r"the files say reflectance_factor, and quantity='brdf' was given"):
        br.open_library(write(tmp_path / "a.asc", RELAB), quantity="brdf")
