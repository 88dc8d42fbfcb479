"""Spectra in databases (SQLite) that the `spectral` package makes, and in libraries with a text header (.hdr)."""

from __future__ import annotations

import sqlite3
from contextlib import closing
from pathlib import Path

import numpy as np

from .._checks import listed
from .spectrum import Spectrum

__all__ = ["read_database", "read_library_with_header"]

_MAGIC = b"SQLite format 3\x00"


def _from_blob(blob: bytes) -> np.ndarray:
    return np.frombuffer(blob, dtype=np.float32).astype(float)


def read_database(path: Path) -> list[Spectrum]:
    """Reflectance spectra of an SQLite database in the layout of the `spectral` package.

    Parameters
    ----------
    path : Path
        Made by its readers of the USGS, ECOSTRESS (or its predecessor) or RELAB libraries.

    Raises
    ------
    ValueError
        If the file is no such database or holds no reflectance.
    """
    with path.open("rb") as stream:
        if stream.read(16) != _MAGIC:
            raise ValueError(f"{path}: not an SQLite database")
    with closing(sqlite3.connect(f"file:{path}?mode=ro", uri=True)) as connection:
        tables = {name for (name,) in connection.execute("SELECT name FROM sqlite_master WHERE type='table'")}
        if {"Samples", "SpectrometerData"} <= tables:
            spectra = _usgs_rows(path, connection)
        elif {"Samples", "Spectra"} <= tables:
            spectra = _sample_rows(path, connection)
        else:
            raise ValueError(
                f"{path}: wanted the tables Samples and Spectra (or SpectrometerData) of the spectral package, got "
                f"{listed(sorted(tables))}"
            )
    if not spectra:
        raise ValueError(f"{path}: no reflectance spectrum in the database")
    return spectra


def _usgs_rows(path: Path, connection: sqlite3.Connection) -> list[Spectrum]:
    query = (
        "SELECT s.Record, s.Description, s.ValuesArray, w.ValuesArray, w.Unit FROM Samples s "
        "JOIN SpectrometerData w ON w.SpectrometerDataID = s.AssumedWLSpmeterDataID "
        "WHERE s.MeasurementType IN ('AREF', 'RREF') ORDER BY s.SampleID"
    )
    spectra = []
    for record, description, values, wavelengths, unit in connection.execute(query):
        words = description.replace("_", " ").split()[:-2]
        scale = 1.0 if unit == "nanometer" else 1000.0
        spectra.append(
            Spectrum(
                " ".join(words),
                _from_blob(wavelengths) * scale,
                _from_blob(values),
                f"{path}, record {record}",
                specimen=words[1].split(".")[0] if len(words) > 1 else words[0],
                group=words[0].lower(),
                record=str(record),
                source="Kokaly et al. 2017, USGS Spectral Library Version 7, doi:10.3133/ds1035",
                quantity="reflectance_factor",
            )
        )
    return spectra


def _sample_rows(path: Path, connection: sqlite3.Connection) -> list[Spectrum]:
    query = (
        "SELECT m.SpectrumID, s.Name, s.Class, s.ParticleSize, s.SampleNum, s.Origin, m.Measurement, m.XUnit, "
        "m.YUnit, m.XData, m.YData FROM Spectra m JOIN Samples s ON s.SampleID = m.SampleID ORDER BY m.SpectrumID"
    )
    spectra = []
    for number, name, group, size, sample, origin, measurement, x_unit, y_unit, x, y in connection.execute(
        query
    ):
        if not (y_unit or measurement or "reflectance").lower().startswith("refl"):
            continue
        in_nm = "nm" in (x_unit or "") or "nanomet" in (x_unit or "")
        # the package's RELAB reader writes "percent" beside values that are fractions
        is_percent = "percent" in (y_unit or "").lower() and origin != "RELab"
        spectra.append(
            Spectrum(
                name,
                _from_blob(x) * (1.0 if in_nm else 1000.0),
                _from_blob(y) * (0.01 if is_percent else 1.0),
                f"{path}, spectrum {number}",
                specimen=(sample or "").strip(),
                group=(group or "").strip().lower(),
                record=str(number),
                grain_size=(size or "").strip(),
                source=f"{path.name}, {origin}" if (origin or "").strip() else path.name,
            )
        )
    return spectra


def read_library_with_header(path: Path) -> list[Spectrum]:
    """Spectra of a library that keeps its values in a binary file and its description in a text header (.hdr).

    Parameters
    ----------
    path : Path
        The header, or the binary file beside it.

    Raises
    ------
    ValueError
        If there is no header, it describes an image, or it gives no wavelengths.
    """
    import spectral

    header = path if path.suffix.lower() == ".hdr" else path.with_suffix(".hdr")
    if not header.exists():
        raise ValueError(f"{path}: no text header beside it; wanted {header.name}")
    try:
        library = spectral.open_image(str(header))
    except Exception as error:  # noqa: BLE001 (the package raises bare exceptions of its own)
        raise ValueError(f"{header}: not readable as a spectral library ({error})") from None
    if not hasattr(library, "spectra"):
        raise ValueError(f"{header}: describes an image, not a spectral library; open it with open_cube")
    if not library.bands.centers:
        raise ValueError(f"{header}: gives no wavelengths; add a line 'wavelength = {{…}}'")
    told = {key.lower(): value for key, value in library.metadata.items()}
    unit = str(told.get("wavelength units", "")).lower()
    wavelengths = np.array(library.bands.centers, dtype=float)
    if (
        unit.startswith("micro")
        or unit in ("um", "µm")
        or (not unit.startswith("nano") and (wavelengths < 30).all())
    ):
        wavelengths = wavelengths * 1000
    values = np.array(library.spectra, dtype=float)
    if "data ignore value" in told:
        values[values == float(told["data ignore value"])] = np.nan
    values = values / float(told.get("reflectance scale factor", 1))
    names = library.names or [f"spectrum {number}" for number in range(1, len(values) + 1)]
    return [
        Spectrum(str(name).strip(), wavelengths, row, f"{header}, spectrum {number}", source=header.name)
        for number, (name, row) in enumerate(zip(names, values, strict=True), start=1)
    ]
