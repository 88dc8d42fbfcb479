"""A library of laboratory spectra, from whatever open format it is kept in, on one labelled grid."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from pathlib import Path

import numpy as np
import xarray as xr

from .._checks import listed
from .databases import read_database, read_library_with_header
from .spectrum import Spectrum
from .tables import read_table
from .texts import Channels, find_channels, form_of, read_ecostress, read_relab, read_usgs

__all__ = ["on_one_grid", "open_library"]

_TEXT = (".txt", ".asc", ".tab")
_DATABASE = (".db", ".sqlite", ".sqlite3")
_WITH_HEADER = (".hdr", ".sli", ".slb")
#: Channels nearer than this are one channel written with different rounding [nm].
_SAME_CHANNEL_NM = 1e-3


def open_library(path: str | Path, *, quantity: str | None = None) -> xr.DataArray:
    r"""Open laboratory spectra.

    Parameters
    ----------
    path : path
        A file, or a folder whose files are searched, of any of these forms:

        - USGS Spectral Library version 7, plain text, with its wavelength files in the folder or up to two above;
        - ECOSTRESS and RELAB plain text;
        - SQLite databases that the `spectral` package makes of those three;
        - spectral libraries with a text header (.hdr);
        - CSV in three shapes, told apart by the header: a column ``wavelength_nm`` (or ``wavelength_um``) and one
          column per sample; columns ``sample, wavelength_nm, reflectance``; one row per sample with a column per
          band such as ``r480``. Columns ``specimen, group, record, grain_size, geometry,
          source, quantity`` are kept.
    quantity : str, optional
        Which reflectance quantity the spectra hold, where their files do not say (see ``cube.QUANTITIES``).

    Returns
    -------
    DataArray, shape (sample, wavelength)
        Reflectance as a fraction, on the union of all samples' channels [nm]: NaN where a sample has no channel, a
        missing mark or a negative value; nothing is interpolated. Coordinates ``sample``, ``specimen`` (several
        measurements of one rock share it), ``group``, ``record``, ``grain_size``, ``geometry``, ``source``;
        ``quantity`` where all agree; ``standard_deviation`` where published.

    Raises
    ------
    FileNotFoundError
        If there is nothing at `path`.
    ValueError
        With the file and line, if a file is of no known form, or a value cannot be read or believed.

    Notes
    -----
    In the USGS library the specimen is taken from the name: ``PYX02.a`` and ``PYX02.h`` are two grain sizes of PYX02.
    Where that is not how your samples are named, assign the coordinate yourself:
    ``spectra.assign_coords(specimen=("sample", [...]))``.

    References
    ----------
    Kokaly et al. 2017, USGS Spectral Library Version 7, USGS Data Series 1035, doi:10.3133/ds1035.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = Path(folder) / "two.csv"
    ...     _ = path.write_text("wavelength_nm,slag,ash\n500,0.1,0.2\n600,0.12,0.3\n")
    ...     open_library(path).sizes
    Frozen({'sample': 2, 'wavelength': 2})
    """
    path = Path(path)
    if not path.exists():
        raise FileNotFoundError(f"{path}: no such file or folder of spectra")
    spectra = list(_from_folder(path) if path.is_dir() else _from_file(path))
    if not spectra:
        raise ValueError(
            f"{path}: no reflectance spectrum found; wanted USGS, ECOSTRESS or RELAB text, an SQLite database, a library "
            "with a text header (.hdr), or CSV"
        )
    return on_one_grid(spectra, quantity=quantity, name=str(path))


def _from_folder(folder: Path) -> Iterator[Spectrum]:
    files = sorted(file for file in folder.rglob("*") if file.is_file())
    channels = find_channels([*(f for f in files if f.suffix.lower() == ".txt"), *_above(folder)])
    headers = {file.with_suffix("") for file in files if file.suffix.lower() == ".hdr"}
    for file in files:
        suffix = file.suffix.lower()
        if (
            suffix == ".csv"
            or suffix in _DATABASE
            or suffix == ".hdr"
            or (suffix in _WITH_HEADER and file.with_suffix("") not in headers)
        ):
            yield from _from_file(file)
        elif suffix in _TEXT and "errorbar" not in file.name.lower():
            yield from _from_text(file, channels)


def _above(folder: Path) -> list[Path]:
    """Text files of the two folders above, where the USGS library keeps its wavelength files."""
    return [
        file
        for parent in list(folder.resolve().parents)[:2]
        for file in sorted(parent.glob("*avelength*.txt"))
    ]


def _from_file(path: Path) -> Sequence[Spectrum]:
    suffix = path.suffix.lower()
    if suffix in _WITH_HEADER:
        return read_library_with_header(path)
    if suffix in _DATABASE:
        return read_database(path)
    if suffix == ".csv":
        return read_table(path)
    form = form_of(path)
    if form == "usgs channels":
        raise ValueError(
            f"{path}: holds channel positions, not a spectrum; open the folder or a spectrum's file"
        )
    if not form:
        raise ValueError(
            f"{path}: a file of no known form; wanted USGS, ECOSTRESS or RELAB text, an SQLite database, a library with "
            "a text header (.hdr), or CSV"
        )
    beside = sorted(path.parent.glob("*.txt")) if form == "usgs" else []
    spectra = list(_from_text(path, find_channels([*beside, *_above(path.parent)] if beside else [])))
    if not spectra:
        raise ValueError(f"{path}: holds no reflectance; transmittance and radiance are not read")
    return spectra


def _from_text(path: Path, channels: list[Channels]) -> Iterator[Spectrum]:
    form = form_of(path)
    spectrum = None
    if form == "usgs":
        spectrum = read_usgs(path, channels)
    elif form == "ecostress":
        spectrum = read_ecostress(path)
    elif form == "relab":
        spectrum = read_relab(path)
    if spectrum is not None:
        yield spectrum


def on_one_grid(spectra: Sequence[Spectrum], *, quantity: str | None = None, name: str = "") -> xr.DataArray:
    """Put spectra with channels of their own side by side; NaN where one has no channel.

    Parameters
    ----------
    spectra : sequence of Spectrum
        One or more.
    quantity : str, optional
        Which reflectance quantity they hold, where they do not say.
    name : str
        What to call them in messages.

    Returns
    -------
    DataArray, shape (sample, wavelength)

    Raises
    ------
    ValueError
        If they say another quantity than the given one.
    """
    every = np.sort(np.concatenate([spectrum.wavelengths for spectrum in spectra]))
    grid = every[np.concatenate([[True], np.diff(every) > _SAME_CHANNEL_NM])]
    values = np.full((len(spectra), grid.size), np.nan)
    deviations = np.full_like(values, np.nan)
    for row, spectrum in enumerate(spectra):
        place = np.searchsorted(grid, spectrum.wavelengths + _SAME_CHANNEL_NM / 2, side="right") - 1
        values[row, place] = spectrum.reflectance
        if spectrum.deviation is not None:
            deviations[row, place] = spectrum.deviation
    texts = [spectrum.texts() for spectrum in spectra]
    library = xr.DataArray(
        values,
        dims=("sample", "wavelength"),
        coords={
            "sample": _unique([spectrum.name for spectrum in spectra], [text["record"] for text in texts]),
            "wavelength": ("wavelength", grid, {"units": "nm", "standard_name": "radiation_wavelength"}),
            **{key: ("sample", np.array([text[key] for text in texts], dtype=object)) for key in texts[0]},
        },
        name="reflectance",
        attrs={"long_name": "reflectance", "units": "1"},
    )
    if np.isfinite(deviations).any():
        library = library.assign_coords(standard_deviation=(("sample", "wavelength"), deviations))
    stated = {spectrum.quantity for spectrum in spectra} - {""}
    if quantity is not None and stated - {quantity}:
        raise ValueError(
            f"{name}: the files say {listed(sorted(stated))}, and quantity={quantity!r} was given"
        )
    known = quantity or (stated.pop() if len(stated) == 1 and all(s.quantity for s in spectra) else None)
    return library if known is None else library.assign_coords(quantity=known)


def _unique(names: list[str], records: list[str]) -> np.ndarray:
    """Sample names as an index: where two are alike the record, else a number, tells them apart."""
    counts = Counter(names)
    told = [f"{n} [{r}]" if counts[n] > 1 and r else n for n, r in zip(names, records, strict=True)]
    seen: Counter[str] = Counter()
    unique = []
    for name in told:
        seen[name] += 1
        unique.append(name if seen[name] == 1 else f"{name} ({seen[name]})")
    return np.array(unique, dtype=object)
