"""Spectra in CSV files: one column a sample, one row a sample, or one row a value."""

from __future__ import annotations

import csv
import re
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from .._checks import listed
from .spectrum import Spectrum

__all__ = ["read_columns", "read_table", "to_number"]

_TO_NM = {"": 1.0, "nm": 1.0, "um": 1000.0}
_WAVELENGTH = re.compile(
    r"^(?:wave(?:length)?s?|lambda|λ)[\s_]*[\[(]?\s*(nm|nanomet(?:er|re)s?|um|[µμ]m|microns?|micromet(?:er|re)s?)?[\])]?$",
    re.IGNORECASE,
)
_BAND = re.compile(r"^r?_?(\d+(?:\.\d*)?)\s*_?(nm|um|[µμ]m)?$", re.IGNORECASE)
_DEVIATION = re.compile(
    r"(?:^|[\s_])(standard[\s_]deviation|std|stdev|sd|sigma|uncertainty|error)s?$", re.IGNORECASE
)
_PERCENT = re.compile(r"%|percent", re.IGNORECASE)
_NAME_COLUMNS = ("sample", "name", "specimen")
_TEXT_COLUMNS = ("specimen", "group", "record", "grain_size", "geometry", "source", "quantity")


def _unit(text: str | None) -> str:
    text = (text or "").lower()
    return "" if not text else "nm" if text.startswith(("nm", "nano")) else "um"


def to_number(text: str, where: str) -> float:
    """A table's cell as a number; NaN where it is blank or says so."""
    text = text.strip()
    if text.lower() in ("", "nan", "na", "n/a", "-", "--"):
        return float("nan")
    try:
        return float(text)
    except ValueError:
        raise ValueError(f"{where}: wanted a number, got {text!r}") from None


def _rows(path: Path) -> tuple[list[str], list[tuple[int, list[str]]]]:
    """Header, and (line number, cells) of each row; comments and blank lines left out."""
    with path.open(newline="", encoding="utf-8-sig") as stream:
        numbered = [
            (n, line) for n, line in enumerate(stream, 1) if line.strip() and not line.startswith("#")
        ]
    if len(numbered) < 2:
        raise ValueError(f"{path}: wanted a header and rows of values, got {len(numbered)} lines")
    delimiter = max(",;\t", key=numbered[0][1].count)
    parsed = list(csv.reader((line for _, line in numbered), delimiter=delimiter, skipinitialspace=True))
    header = [cell.strip() for cell in parsed[0]]
    rows = [(n, cells) for (n, _), cells in zip(numbered[1:], parsed[1:], strict=True)]
    for number, cells in rows:
        if len(cells) != len(header):
            raise ValueError(
                f"{path}, line {number}: wanted {len(header)} values as in the header, got {len(cells)}"
            )
    double = next((name for name in header if name and header.count(name) > 1), None)
    if double is not None:
        raise ValueError(f"{path}: two columns are called {double!r}; give each a name of its own")
    return header, rows


def _numbers(path: Path, rows: list[tuple[int, list[str]]], column: int, name: str) -> NDArray[np.float64]:
    return np.array([to_number(cells[column], f"{path}, line {n}, column {name!r}") for n, cells in rows])


def _wavelength_column(
    path: Path, header: list[str], rows: list[tuple[int, list[str]]]
) -> tuple[int, NDArray]:
    column, match = next((i, m) for i, name in enumerate(header) if (m := _WAVELENGTH.match(name)))
    values = _numbers(path, rows, column, header[column]) * _TO_NM[_unit(match[1])]
    if np.isnan(values).any():
        raise ValueError(
            f"{path}, line {rows[int(np.argmax(np.isnan(values)))][0]}: the wavelength is missing"
        )
    if (values < 30).all():
        raise ValueError(
            f"{path}: the wavelengths look like µm ({values[0]:g} …), and the column {header[column]!r} does not say "
            "so; call it wavelength_um"
        )
    return column, values


def read_columns(path: Path) -> tuple[list[str], list[NDArray[np.float64]]]:
    """Columns of numbers with the wavelength [nm] first, for response curves.

    Raises
    ------
    ValueError
        With the file and line, where a cell is no number or no column is the wavelength.
    """
    header, rows = _rows(path)
    if not any(_WAVELENGTH.match(name) for name in header):
        raise ValueError(f"{path}: wanted a column wavelength_nm, got {listed(header)}")
    column, wavelengths = _wavelength_column(path, header, rows)
    others = [i for i in range(len(header)) if i != column]
    return (
        [header[column], *(header[i] for i in others)],
        [wavelengths, *(_numbers(path, rows, i, header[i]) for i in others)],
    )


def read_table(path: Path) -> list[Spectrum]:
    """Spectra of a CSV file in any of its three shapes, told apart by the header.

    Raises
    ------
    ValueError
        With the file and line, where the header is of no known shape or a value is no number.
    """
    header, rows = _rows(path)
    lowered = [name.lower() for name in header]
    has_wavelength = any(_WAVELENGTH.match(name) for name in header)
    if has_wavelength and any(name in lowered for name in _NAME_COLUMNS):
        return _one_row_a_value(path, header, lowered, rows)
    if has_wavelength:
        return _one_column_a_sample(path, header, rows)
    bands = {i: match for i, name in enumerate(header) if (match := _BAND.match(name))}
    if len(bands) >= 2:
        return _one_row_a_sample(path, header, lowered, rows, bands)
    raise ValueError(
        f"{path}: the header is of no known shape: {listed(header)}; wanted a column wavelength_nm and one column per "
        "sample, columns sample, wavelength_nm and reflectance, or a column per band such as r480, r600"
    )


def _one_column_a_sample(path: Path, header: list[str], rows: list[tuple[int, list[str]]]) -> list[Spectrum]:
    column, wavelengths = _wavelength_column(path, header, rows)
    spectra: list[Spectrum] = []
    for i, name in enumerate(header):
        if i == column or not name:
            continue
        values = _numbers(path, rows, i, name) * (0.01 if _PERCENT.search(name) else 1.0)
        if _DEVIATION.search(name) and spectra:
            turned = wavelengths[0] > wavelengths[-1]
            spectra[-1].deviation = values[::-1] if turned else values
            continue
        title = path.stem if re.match(r"^reflectance\b", name, re.IGNORECASE) else name
        spectra.append(Spectrum(title, wavelengths, values, str(path), source=path.name))
    if not spectra:
        raise ValueError(f"{path}: no column of reflectances beside the wavelength; got {listed(header)}")
    return spectra


def _one_row_a_value(
    path: Path, header: list[str], lowered: list[str], rows: list[tuple[int, list[str]]]
) -> list[Spectrum]:
    _, wavelengths = _wavelength_column(path, header, rows)
    name_column = next(lowered.index(name) for name in _NAME_COLUMNS if name in lowered)
    value_column = next((i for i, name in enumerate(lowered) if name.startswith("reflectance")), None)
    if value_column is None:
        raise ValueError(f"{path}: wanted a column reflectance, got {listed(header)}")
    scale = 0.01 if _PERCENT.search(header[value_column]) else 1.0
    values = _numbers(path, rows, value_column, header[value_column]) * scale
    names = [cells[name_column].strip() for _, cells in rows]
    spectra = []
    for name in dict.fromkeys(names):
        own = np.flatnonzero([other == name for other in names])
        own = own[np.argsort(wavelengths[own], kind="stable")]
        where = f"{path}, line {rows[own[0]][0]}"
        spectra.append(
            Spectrum(
                name or "unnamed",
                wavelengths[own],
                values[own],
                where,
                **_texts(path, lowered, rows[own[0]][1]),
            )
        )
    return spectra


def _one_row_a_sample(
    path: Path,
    header: list[str],
    lowered: list[str],
    rows: list[tuple[int, list[str]]],
    bands: dict[int, re.Match[str]],
) -> list[Spectrum]:
    wavelengths = np.array([float(match[1]) * _TO_NM[_unit(match[2])] for match in bands.values()])
    order = np.argsort(wavelengths, kind="stable")
    name_column = next((lowered.index(name) for name in _NAME_COLUMNS if name in lowered), None)
    spectra = []
    for number, cells in rows:
        where = f"{path}, line {number}"
        values = np.array([to_number(cells[i], f"{where}, column {header[i]!r}") for i in bands])
        name = cells[name_column].strip() if name_column is not None else f"row {number}"
        texts = _texts(path, lowered, cells)
        spectra.append(Spectrum(name, wavelengths[order], values[order], where, **texts))
    return spectra


def _texts(path: Path, lowered: list[str], cells: list[str]) -> dict[str, Any]:
    found = {name: cells[lowered.index(name)].strip() for name in _TEXT_COLUMNS if name in lowered}
    return {"source": path.name} | found
