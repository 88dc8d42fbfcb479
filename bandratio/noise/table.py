"""The parts of a noise from a table of figures, as a calibration report gives them."""

from __future__ import annotations

import csv
from pathlib import Path
from typing import Any

from .._checks import listed, suggestion
from .values import PER_BAND

__all__ = ["noise_parts"]


def noise_parts(path: Path) -> dict[str, Any]:
    """What `Noise` is to be given, by a CSV table with a column `wavelength` [nm] and one for each part.

    Raises
    ------
    ValueError
        With the file and line, where a column is unknown or a value is no number.
    """
    known = ("wavelength", *PER_BAND, "common_gain")
    try:
        lines = path.read_text(encoding="utf-8-sig").splitlines()
    except UnicodeDecodeError:
        raise ValueError(f"{path} is no text in UTF-8; save it as such") from None
    kept = [
        (number, line)
        for number, line in enumerate(lines, start=1)
        if line.strip() and not line.startswith("#")
    ]
    rows = list(csv.reader((line for _, line in kept), skipinitialspace=True))
    header = [name.strip() for name in rows[0]] if rows else []
    if "wavelength" not in header:
        raise ValueError(f"{path}: wanted a column wavelength [nm], got {listed(header)}")
    for name in header:
        if name not in known:
            raise ValueError(f"{path}: unknown column {name!r}{suggestion(name, known)}")
    if len(set(header)) != len(header):
        raise ValueError(f"{path}: a column stands twice in {listed(header)}")
    if len(rows) < 2:
        raise ValueError(f"{path}: no rows below the header; wanted one row per band")
    columns: dict[str, list[float]] = {name: [] for name in header}
    for (number, _), row in zip(kept[1:], rows[1:], strict=True):
        if len(row) != len(header):
            raise ValueError(f"{path}, line {number}: wanted {len(header)} values, got {len(row)}")
        for name, text in zip(header, row, strict=True):
            try:
                columns[name].append(float(text))
            except ValueError:
                raise ValueError(f"{path}, line {number}: {name} must be a number, got {text!r}") from None
    wavelength = columns.pop("wavelength")
    if len(set(wavelength)) != len(wavelength):
        raise ValueError(f"{path}: the same wavelength stands in two rows")
    common = set(columns.pop("common_gain", [0.0]))
    if len(common) > 1:
        raise ValueError(f"{path}: common_gain is one value for all bands, got {listed(sorted(common))}")
    parts = {name: dict(zip(wavelength, values, strict=True)) for name, values in columns.items()}
    return {**parts, "common_gain": common.pop()}
