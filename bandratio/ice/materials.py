"""Which materials the ground and the ice may be made of, at the wavelengths of two lasers."""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, TypeAlias

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import suggestion
from ..detection.hull import LABORATORY_GEOMETRY
from ..mixing import ice_albedo, reflectance_from_albedo, single_scattering_albedo, white_reflectance
from ..spectra import band_average, chosen_samples, reference_spectra

__all__ = [
    "FROST_UM",
    "GROUND_LISTS",
    "MaterialChoice",
    "Materials",
    "ice_free_ground",
    "ice_materials",
]

MaterialChoice: TypeAlias = (
    str | Sequence[str] | Mapping[str, Sequence[float]] | ArrayLike | xr.DataArray | None
)

#: Grain sizes of the frosts that are always among the ices [µm].
FROST_UM = (5.0, 10.0, 25.0, 50.0, 100.0, 200.0, 500.0)

#: Ground lists by name: regolith of the region and the rocks and opaques it is made of (common practice, no source).
#: Coarse pyroxene is in none of them: alone it has a ratio of 1.8, and hides ice; add it where it may crop out.
GROUND_LISTS: dict[str, tuple[str, ...]] = {
    "mare": (
        "Moon mare",
        "Soil 62231",
        "basalt",
        "Augite NMNH120049",
        "Pigeonite HS199.3B",
        "Ilmenite HS231.2B",
        "Ilmenite HS231.3B",
    ),
    "highland": ("Moon highland", "Soil 62231", "plagioclase", "Ilmenite HS231.2B", "Ilmenite HS231.3B"),
}

#: An ideal white, red and infrared: no list of rocks holds the brightest one.
_WHITE = "ideal white"
_FROST = re.compile(r"frost\s+([0-9.]+)\s*(?:µm|μm|um|micron|microns)")


@dataclass(frozen=True, eq=False)
class Materials:
    """Named materials and their single-scattering albedos.

    Parameters
    ----------
    names : tuple of str
        One a material.
    albedos : ndarray, shape (material, 2)
        Single-scattering albedo in the red and the infrared.
    title : str
        What the list is called, for reports.
    """

    names: tuple[str, ...]
    albedos: NDArray[np.float64]
    title: str

    def reflectance(self, incidence_deg: float | None = None) -> NDArray[np.float64]:
        """Reflectance factors, shape (material, 2): in the laboratory, or as a lidar sees them at an incidence."""
        incidence, emission = LABORATORY_GEOMETRY if incidence_deg is None else (incidence_deg, incidence_deg)
        return reflectance_from_albedo(self.albedos, incidence, emission)

    @property
    def summary(self) -> str:
        """Title and names in one line."""
        listed = ", ".join(self.names)
        return self.title if listed == self.title else f"{self.title} ({len(self.names)}): {listed}"


def ice_free_ground(choice: MaterialChoice, wavelengths: tuple[float, float]) -> Materials:
    """Materials that the ice-free ground may be made of.

    Parameters
    ----------
    choice : None, str, list of str, mapping, array_like or DataArray
        None: any rock, that is every ice-free material of the reference table and an ideal white. Names: ground
        lists (`GROUND_LISTS`), groups, samples or specimens of the table. Albedos at the laboratory's geometry: an
        array of shape (material, 2) with red and infrared, or a mapping from names to such pairs. A library of
        spectra (sample, wavelength) [nm].
    wavelengths : tuple of float
        Red and infrared [nm].

    Returns
    -------
    Materials

    Raises
    ------
    ValueError
        If a name is unknown (the nearest are suggested), is one of ice, or an albedo cannot be.

    Examples
    --------
    >>> ice_free_ground(["Soil 62231", "Ilmenite HS231.3B"], (640, 1535)).reflectance().round(4).tolist()
    [[0.1598, 0.2691], [0.0553, 0.0599]]
    """
    if choice is None:
        table = _at_lasers(reference_spectra([*wavelengths]), ~_ice(reference_spectra()))
        names, albedos = _from_table(table)
        return Materials((*names, _WHITE), np.vstack([albedos, _inverted([[1.0, 1.0]])]), "any rock")
    return _chosen(choice, wavelengths, "ice_free")


def ice_materials(choice: MaterialChoice, wavelengths: tuple[float, float]) -> Materials:
    """Ices that may lie on the ground.

    Parameters
    ----------
    choice : None, str, list of str, mapping, array_like or DataArray
        None: the snows of the reference table and frost of 5 to 500 µm. Names: samples of the table, ``snow`` (all
        of them), ``frost`` (all grain sizes), or ``frost 50 µm`` for any grain size. Albedos and libraries as for
        `ice_free_ground`.
    wavelengths : tuple of float
        Red and infrared [nm].

    Returns
    -------
    Materials

    Notes
    -----
    Frost follows from the optical constants of ice at 266 K (Warren & Brandt 2008); at the temperatures of shadowed
    floors the absorption near 1.5 µm is deeper and narrower.

    Examples
    --------
    >>> ice_materials("frost 50 µm", (640, 1535)).reflectance().round(3).tolist()
    [[1.011, 0.254]]
    """
    if choice is None:
        return _chosen(["snow", "frost"], wavelengths, "ice", title="snow, slush and frost of 5–500 µm")
    return _chosen(choice, wavelengths, "ice")


def _chosen(choice: Any, wavelengths: tuple[float, float], argument: str, title: str = "") -> Materials:
    if isinstance(choice, xr.DataArray) and "wavelength" in choice.dims:
        names, albedos = _from_table(_at_lasers(band_average(choice, [*wavelengths])))
        return Materials(names, albedos, title or f"own library of {len(names)} spectra")
    if isinstance(choice, Mapping):
        return Materials(
            tuple(map(str, choice)), _inverted(list(choice.values()), argument), title or "own albedos"
        )
    words = [choice] if isinstance(choice, str) else choice
    if isinstance(words, Iterable) and not isinstance(words, np.ndarray):
        words = list(words)
        if words and all(isinstance(word, str) for word in words):
            return _named(words, wavelengths, argument, title)
    albedos = _inverted(choice, argument)
    return Materials(
        tuple(f"material {i + 1}" for i in range(len(albedos))),
        albedos,
        title or "own albedos",
    )


def _named(words: list[str], wavelengths: tuple[float, float], argument: str, title: str) -> Materials:
    table = reference_spectra([*wavelengths])
    ice = _ice(table)
    names: list[str] = []
    albedos: list[NDArray[np.float64]] = []
    for word in words:
        found_names, found = _by_name(word, table, ice, wavelengths, argument)
        names += found_names
        albedos.append(found)
    first = [i for i, name in enumerate(names) if name not in names[:i]]
    return Materials(
        tuple(names[i] for i in first), np.concatenate(albedos)[first], title or ", ".join(words)
    )


def _by_name(
    word: str, table: xr.DataArray, ice: NDArray[np.bool_], wavelengths: tuple[float, float], argument: str
) -> tuple[tuple[str, ...], NDArray[np.float64]]:
    plain = word.strip().lower()
    if argument == "ice":
        sizes = FROST_UM if plain == "frost" else _frost_size(plain)
        if sizes:
            return tuple(f"frost {size:g} µm" for size in sizes), ice_albedo(
                np.array(wavelengths), np.array(sizes)[:, None]
            )
        if plain == "snow":
            return _from_table(_at_lasers(table, ice))
    samples = GROUND_LISTS.get(plain, (word,)) if argument == "ice_free" else (word,)
    try:
        chosen = chosen_samples(table, samples)
    except ValueError:
        known = [*map(str, table["sample"].values), *map(str, np.unique(table["group"].values))]
        known = (
            [*GROUND_LISTS, *known] if argument == "ice_free" else ["snow", "frost", "frost 50 µm", *known]
        )
        raise ValueError(f"{argument} names no known material: {word!r}{suggestion(word, known)}") from None
    if argument == "ice_free" and (chosen & ice).any():
        raise ValueError(f"{word!r} is ice, and cannot be ice-free ground; name it in ice=…")
    if argument == "ice" and (chosen & ~ice).any():
        raise ValueError(f"{word!r} is no ice in the reference table; give its albedos if it is")
    return _from_table(_at_lasers(table, chosen))


def _frost_size(plain: str) -> tuple[float, ...]:
    match = _FROST.fullmatch(plain)
    return (float(match[1]),) if match else ()


def _ice(table: xr.DataArray) -> NDArray[np.bool_]:
    return np.asarray(table["group"].values == "ice")


def _at_lasers(spectra: xr.DataArray, chosen: NDArray[np.bool_] | None = None) -> xr.DataArray:
    """The chosen samples that have a value at both wavelengths."""
    wanted = spectra if chosen is None else spectra[chosen]
    wanted = wanted.transpose("sample", "wavelength")
    known = wanted[np.isfinite(wanted.values).all(axis=1)]
    if known.sizes["sample"] == 0:
        raise ValueError(
            f"none of {', '.join(map(str, wanted['sample'].values[:4]))} has a value at both "
            f"{' and '.join(f'{nm:g}' for nm in wanted['wavelength'].values)} nm"
        )
    return known


def _from_table(table: xr.DataArray) -> tuple[tuple[str, ...], NDArray[np.float64]]:
    # telescopic means were seen at 3° either way, not at the laboratory's 30° and 0°
    if "geometry" in table.coords:
        near_zero = np.array([str(geometry).startswith("phase") for geometry in table["geometry"].values])
    else:
        near_zero = np.zeros(table.sizes["sample"], dtype=bool)
    incidence, emission = np.where(near_zero, 3.0, 30.0), np.where(near_zero, 3.0, 0.0)
    albedos = single_scattering_albedo(table.values, incidence[:, None], emission[:, None])
    return tuple(map(str, table["sample"].values)), albedos


def _inverted(reflectances: Any, argument: str = "ice_free") -> NDArray[np.float64]:
    try:
        array = np.asarray(reflectances, dtype=float)
    except (TypeError, ValueError):
        raise TypeError(
            f"{argument} must be names, albedos (material, 2) or spectra, got {reflectances!r}"
        ) from None
    if array.ndim != 2 or array.shape[1] != 2 or len(array) == 0:
        raise ValueError(
            f"{argument} as albedos must have shape (material, 2), red and infrared of each, got {array.shape}"
        )
    white = float(white_reflectance(*LABORATORY_GEOMETRY))
    if not ((array > 0) & (array <= white)).all():
        raise ValueError(
            f"{argument} as albedos must be above 0 and at most {white:.3f} (grains that absorb nothing), got "
            f"{array.min():g} to {array.max():g}; give reflectance factors as fractions"
        )
    return single_scattering_albedo(array, *LABORATORY_GEOMETRY)
