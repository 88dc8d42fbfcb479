"""Spectra in the plain-text files that laboratories publish: USGS version 7, ECOSTRESS, RELAB."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from .._checks import listed
from .spectrum import Spectrum

__all__ = ["Channels", "find_channels", "first_line", "form_of", "read_ecostress", "read_relab", "read_usgs"]

_RECORD = re.compile(r"^\s*(?P<library>\S+)\s+Record=\s*(?P<record>\d+)\s*:\s*(?P<title>.*?)\s*$")
_REFLECTANCE_KINDS = ("AREF", "RREF")
_USGS_SOURCE = "Kokaly et al. 2017, USGS Spectral Library Version 7, doi:10.3133/ds1035"
_ECOSTRESS_SOURCE = "ECOSTRESS spectral library, Meerdink et al. 2019, doi:10.1016/j.rse.2019.05.015"
_RELAB_SOURCE = "RELAB archive, Brown University"


@dataclass(frozen=True)
class Channels:
    """Channel positions of a spectrometer, from a USGS wavelength file [nm]."""

    title: str
    wavelengths: NDArray[np.float64]
    library: str = ""


def first_line(path: Path) -> str:
    """First line of a text file, blank where there is none."""
    with path.open(encoding="iso-8859-1") as stream:
        return stream.readline().rstrip("\n")


def form_of(path: Path) -> str:
    """Which form a text file has: ``usgs``, ``usgs channels``, ``ecostress``, ``relab`` or ``""``."""
    line = first_line(path)
    match = _RECORD.match(line)
    if match:
        is_channels = re.match(r"wave(length)?s\b", match["title"], re.IGNORECASE)
        return "usgs channels" if is_channels else "usgs"
    if re.match(r"^\s*name\s*:", line, re.IGNORECASE):
        return "ecostress"
    return "relab" if re.fullmatch(r"\s*\d+\s*", line) else ""


def _values_after_header(path: Path) -> tuple[str, NDArray[np.float64]]:
    lines = path.read_text(encoding="iso-8859-1").splitlines()
    values = []
    for number, line in enumerate(lines[1:], start=2):
        if not line.strip():
            continue
        try:
            values.append(float(line))
        except ValueError:
            raise ValueError(f"{path}, line {number}: wanted one number, got {line.strip()!r}") from None
    if not values:
        raise ValueError(f"{path}: no values below the header line")
    return lines[0], np.array(values)


def find_channels(files: Iterable[Path]) -> list[Channels]:
    """Channel positions of every wavelength file among `files`."""
    found = []
    for path in files:
        if form_of(path) == "usgs channels":
            header, values = _values_after_header(path)
            match = _RECORD.match(header)
            assert match is not None
            unit = 1.0 if re.search(r"\bnm\b|nanomet", match["title"]) else 1000.0
            found.append(Channels(match["title"], values * unit, match["library"]))
    return found


def read_usgs(path: Path, channels: list[Channels]) -> Spectrum | None:
    """One spectrum of the USGS library, version 7.

    Parameters
    ----------
    path : Path
        Header line with the record number, then one value per channel; values below zero mean missing.
    channels : list of Channels
        What the wavelength files beside it say.

    Returns
    -------
    Spectrum or None
        None where the file holds no reflectance (transmittance, radiance). The specimen is the name's second word up
        to its first point, so that the grain sizes of one rock (GDS70.a, GDS70.c) are one specimen.

    Raises
    ------
    ValueError
        With the file and line; also where no wavelength file has as many channels of that spectrometer.
    """
    header, values = _values_after_header(path)
    match = _RECORD.match(header)
    words = match["title"].split() if match else []
    if match is None or len(words) < 3:
        raise ValueError(
            f"{path}, line 1: wanted 'library Record=number: name spectrometer kind', got {header!r}"
        )
    *name, spectrometer, kind = words
    if kind not in _REFLECTANCE_KINDS:
        return None
    family = re.match(r"[A-Z0-9]{3}", spectrometer.upper())
    fitting = [
        each
        for each in channels
        if each.wavelengths.size == values.size and family and family[0] in each.title.upper()
    ]
    if not fitting:
        have = listed(f"{each.title} ({each.wavelengths.size})" for each in channels)
        raise ValueError(
            f"{path}: no wavelength file for the {values.size} channels of {spectrometer}; found {have}; put the "
            "library's wavelength file beside it"
        )
    same_library = [each for each in fitting if each.library == match["library"]] or fitting
    if any(not np.array_equal(each.wavelengths, same_library[0].wavelengths) for each in same_library):
        raise ValueError(
            f"{path}: several wavelength files have {values.size} channels of {spectrometer}: "
            f"{listed(each.title for each in same_library)}; leave the right one in the folder"
        )
    return Spectrum(
        " ".join(name).replace("_", " "),
        same_library[0].wavelengths,
        values,
        str(path),
        specimen=name[1].split(".")[0] if len(name) > 1 else name[0],
        group=re.split(r"[_\s]", name[0])[0].lower(),
        record=match["record"],
        source=_USGS_SOURCE,
        quantity="reflectance_factor",
    )


def _pairs(path: Path, lines: list[tuple[int, str]]) -> NDArray[np.float64]:
    pairs = []
    for number, line in lines:
        words = line.replace(",", " ").split()
        try:
            pairs.append((float(words[0]), float(words[1])))
        except (IndexError, ValueError):
            raise ValueError(f"{path}, line {number}: wanted two numbers, got {line.strip()!r}") from None
    if not pairs:
        raise ValueError(f"{path}: no pairs of wavelength and reflectance")
    return np.array(pairs)


def read_ecostress(path: Path) -> Spectrum | None:
    """One spectrum of the ECOSTRESS library: ``Key: value`` lines, then pairs of wavelength and reflectance.

    Returns
    -------
    Spectrum or None
        None where the file holds no reflectance.

    Raises
    ------
    ValueError
        With the file and line.
    """
    lines = list(enumerate(path.read_text(encoding="iso-8859-1").splitlines(), start=1))
    told: dict[str, str] = {}
    start = len(lines)
    for index, (_, line) in enumerate(lines):
        key, colon, value = line.partition(":")
        if colon:
            told.setdefault(key.strip().lower(), value.strip())
        elif re.match(r"^\s*[-+.\d]+\S*\s+[-+.\d]", line):
            start = index
            break
    if not re.match("reflect", told.get("y units", "reflectance"), re.IGNORECASE):
        return None
    pairs = _pairs(path, [(n, line) for n, line in lines[start:] if line.strip()])
    x_units = told.get("x units", "")
    if re.search(r"wavenumber|cm-1|cm\^-1", x_units, re.IGNORECASE):
        pairs[:, 0] = 1e7 / pairs[:, 0]
    elif not re.search(r"nm|nanomet", x_units, re.IGNORECASE):
        pairs[:, 0] *= 1000
    scale = 0.01 if re.search("percent|%", told.get("y units", ""), re.IGNORECASE) else 1.0
    is_bidirectional = "bidirectional" in told.get("measurement", "").lower()
    return Spectrum(
        told.get("name", path.stem),
        pairs[:, 0],
        pairs[:, 1] * scale,
        str(path),
        specimen=told.get("sample no.", ""),
        group=told.get("class", "").lower(),
        record=told.get("sample no.", ""),
        grain_size=told.get("particle size", ""),
        source=_ECOSTRESS_SOURCE,
        quantity="reflectance_factor" if is_bidirectional else "",
    )


def read_relab(path: Path) -> Spectrum:
    """One spectrum of the RELAB archive: a count, that many lines of [nm] and reflectance, then text.

    Raises
    ------
    ValueError
        With the file and line.
    """
    lines = list(enumerate(path.read_text(encoding="iso-8859-1").splitlines(), start=1))
    count = int(lines[0][1])
    if len(lines) < count + 1:
        raise ValueError(f"{path}, line 1: {count} values are announced, and {len(lines) - 1} lines follow")
    pairs = _pairs(path, lines[1 : count + 1])
    text = [line.strip() for _, line in lines[count + 1 :]]
    record = text[3] if len(text) > 3 else path.stem
    sample = text[5] if len(text) > 5 else path.stem
    name = " ".join(line for line in text[6:8] if line and not line.startswith(("Source", "Date")))
    return Spectrum(
        name or sample or path.stem,
        pairs[:, 0],
        pairs[:, 1],
        str(path),
        specimen=sample,
        record=record,
        source=_RELAB_SOURCE,
        quantity="reflectance_factor",
    )
