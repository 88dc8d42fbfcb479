"""Band centres and widths from what a raster says about its bands, in nm or µm, wherever it says it."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass

__all__ = ["BandMetadata", "band_metadata", "numbers_of", "to_nm", "wavelength_in_text"]

_NUMBER = r"[-+]?(?:\d+\.?\d*|\.\d+)(?:[eE][-+]?\d+)?"
_UNITS = {
    1.0: ("nm", "nanometer", "nanometers", "nanometre", "nanometres"),
    1000.0: ("um", "µm", "μm", "micron", "microns", "micrometer", "micrometers", "micrometre", "micrometres"),
}
_IN_TEXT = re.compile(
    rf"({_NUMBER})\s*({'|'.join(sorted((u for units in _UNITS.values() for u in units), key=len, reverse=True))})\b",
    re.IGNORECASE,
)
_CENTRE_KEYS = ("wavelength", "central_wavelength", "center_wavelength", "centre_wavelength", "wavelength_nm")
_WIDTH_KEYS = ("fwhm", "fwhm_nm", "bandwidth")
_UNIT_KEYS = ("wavelength_units", "wavelength_unit")


@dataclass(frozen=True)
class BandMetadata:
    """Band centres and widths [nm], each None where the file does not say; one entry for each band."""

    centres: tuple[float, ...] | None
    widths: tuple[float, ...] | None


def numbers_of(text: str) -> list[float]:
    """Numbers in a list written as text, such as ``{480, 600}``; empty where anything else is in it."""
    inner = text.strip().strip("{}[]()")
    pieces = [piece for piece in re.split(r"[,;\s]+", inner) if piece]
    if not all(re.fullmatch(_NUMBER, piece) for piece in pieces):
        return []
    return [float(piece) for piece in pieces]


def _factor(unit: str | None) -> float | None:
    """What turns the unit into nm: 1 or 1000; 0 where it is no length; None where nothing is said."""
    word = (unit or "").strip().lower()
    if word in ("", "unknown", "index"):
        return None
    return next((factor for factor, words in _UNITS.items() if word in words), 0.0)


def to_nm(values: Sequence[float], unit: str | None = None) -> tuple[float, ...] | None:
    """Wavelengths in nm; where no unit is given, numbers that are all below 30 are taken for µm.

    Returns None where the unit is none of nm and µm, or a number is not positive.

    Examples
    --------
    >>> to_nm([0.48, 0.6])
    (480.0, 600.0)
    """
    factor = _factor(unit)
    if factor is None:
        factor = 1000.0 if values and max(values) < 30 else 1.0
    if factor == 0 or not values or min(values) <= 0:
        return None
    # 0.601 µm is 601 nm, not 600.9999999999999
    return tuple(float(f"{value * factor:.12g}") for value in values)


def wavelength_in_text(text: str | None) -> float | None:
    """Wavelength [nm] written in a band's description with its unit, or as nothing but a number.

    Examples
    --------
    >>> wavelength_in_text("Band 2 (0.6 Micrometers)"), wavelength_in_text("R700 nm"), wavelength_in_text("Band 1")
    (600.0, 700.0, None)
    """
    if not text:
        return None
    found = _IN_TEXT.search(text)
    if found:
        converted = to_nm([float(found[1])], found[2])
        return converted[0] if converted else None
    alone = numbers_of(text)
    # a bare small integer is a band's number
    if len(alone) == 1 and (alone[0] >= 100 or (alone[0] < 30 and alone[0] % 1)):
        return (to_nm(alone) or (None,))[0]
    return None


def band_metadata(
    of_file: Iterable[Mapping[str, str]],
    of_bands: Sequence[Sequence[Mapping[str, str]]],
    descriptions: Sequence[str | None],
) -> BandMetadata:
    """Centres and widths of the bands from a raster's tags.

    Parameters
    ----------
    of_file : iterable of mapping
        Tags of the whole file, one mapping for each namespace.
    of_bands : sequence of sequence of mapping
        The same for each band.
    descriptions : sequence of str or None
        The bands' descriptions.
    """
    namespaces = [_lowered(tags) for tags in of_file]
    each = [[_lowered(tags) for tags in tags_of_band] for tags_of_band in of_bands]
    # the file's own list is more exact than what is derived from it for each band
    centres, unit = _listed(namespaces, _CENTRE_KEYS, None, len(descriptions))
    if centres is None:
        found = [_band_value(tags, _CENTRE_KEYS, "central_wavelength_um", None) for tags in each]
        centres, unit = _of_each([value for value, _ in found]), next((u for _, u in found if u), None)
    if centres is None:
        centres = _of_each([wavelength_in_text(text) for text in descriptions])
        unit = "nm"
    # widths are in the unit of the centres unless they have their own
    widths, _ = _listed(namespaces, _WIDTH_KEYS, unit, len(descriptions))
    if widths is None:
        widths = _of_each([_band_value(tags, _WIDTH_KEYS, "fwhm_um", unit)[0] for tags in each])
    return BandMetadata(centres, widths)


def _lowered(tags: Mapping[str, str]) -> dict[str, str]:
    return {key.lower().replace(" ", "_"): value for key, value in tags.items()}


def _first(tags: Mapping[str, str], keys: Iterable[str]) -> str | None:
    return next((tags[key] for key in keys if key in tags), None)


def _with_unit(values: Sequence[float], unit: str | None) -> tuple[tuple[float, ...] | None, str | None]:
    """The values in nm, and the unit that they were in."""
    factor = _factor(unit)
    if factor is None:
        unit = "µm" if max(values) < 30 else "nm"
    return to_nm(values, unit), unit


def _listed(
    namespaces: Sequence[Mapping[str, str]], keys: Iterable[str], unit: str | None, bands: int
) -> tuple[tuple[float, ...] | None, str | None]:
    for tags in namespaces:
        for key in keys:
            values = numbers_of(tags.get(key, tags.get(f"{key}s", "")))
            if len(values) == bands:
                given = "nm" if key.endswith("_nm") else _first(tags, _UNIT_KEYS)
                return _with_unit(values, given if _factor(given) is not None else unit)
    return None, None


def _band_value(
    namespaces: Sequence[Mapping[str, str]], keys: Iterable[str], micrometre_key: str, unit: str | None
) -> tuple[float | None, str | None]:
    for tags in namespaces:
        for key in keys:
            values = numbers_of(tags.get(key, ""))
            if len(values) == 1:
                given = "nm" if key.endswith("_nm") else _first(tags, _UNIT_KEYS)
                converted, used = _with_unit(values, given if _factor(given) is not None else unit)
                return (converted[0] if converted else None), used
            found = wavelength_in_text(tags.get(key))
            if found is not None:
                return found, "nm"
        values = numbers_of(tags.get(micrometre_key, ""))
        if len(values) == 1 and values[0] > 0:
            return (to_nm(values, "µm") or (None,))[0], None
    return None, None


def _of_each(values: Sequence[float | None]) -> tuple[float, ...] | None:
    found = tuple(value for value in values if value is not None)
    return found if values and len(found) == len(values) else None
