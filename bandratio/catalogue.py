"""The named parameters: small functions from a cube's actual band centres to a band ratio.

Reflectance is `R`; the subscript is the nominal wavelength in nm. Each definition picks the bands it needs,
which hands it their actual centres, and writes the formula down with them.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from ._checks import suggestion
from .bands import TOLERANCE_NM, BandNotFoundError, nearest_bands, wavelength_array
from .cube import require_cube
from .ratio import BandRatio

__all__ = [
    "available",
    "defines",
    "gradient_ratio",
    "mafic_depth",
    "named_ratio",
    "names",
    "red_slope",
    "reflectance_700",
    "resolve",
    "shoulder_of",
    "uv_vis_slope",
]

#: Nominal wavelengths in, actual centres [nm] out; raises BandNotFoundError where one is missing.
Pick = Callable[..., Sequence[float]]

_DEFINITIONS: dict[str, Callable[[Pick], BandRatio]] = {}

_GRADIENT_SOURCE = (
    "A'Hearn et al. 1984, AJ 89, 579; Jewitt & Meech 1986, ApJ 310, 937; Luu & Jewitt 1990, AJ 99, 1985"
)


def defines(name: str) -> Callable[[Callable[[Pick], BandRatio]], Callable[[Pick], BandRatio]]:
    """Enter a definition into the catalogue under `name`.

    The decorated function takes `pick`, calls ``pick(480, 600)`` for the actual centres of the bands that it
    needs [nm], and returns a `BandRatio`.

    Raises
    ------
    ValueError
        If the name is taken.
    """
    if name in _DEFINITIONS:
        raise ValueError(f"the name {name!r} is taken; choose another")

    def enter(definition: Callable[[Pick], BandRatio]) -> Callable[[Pick], BandRatio]:
        _DEFINITIONS[name] = definition
        return definition

    return enter


def gradient_ratio(shorter: float, longer: float) -> BandRatio:
    """Normalised reflectivity gradient between two band centres [% per 100 nm].

    ``S' = 2 (R2 − R1) / ((λ2 − λ1)(R1 + R2))``, the symmetric form.

    Parameters
    ----------
    shorter, longer : float
        λ1 and λ2 [nm].

    References
    ----------
    A'Hearn et al. 1984, AJ 89, 579; Jewitt & Meech 1986, ApJ 310, 937; Luu & Jewitt 1990, AJ 99, 1985.

    Examples
    --------
    >>> gradient_ratio(600, 700).definition
    '200·(−R600 + R700)/(R600 + R700)'
    """
    if not longer > shorter:
        raise ValueError(
            f"a gradient runs from a shorter to a longer wavelength, got {shorter:g} → {longer:g} nm"
        )
    percent, per_100_nm = 100, 100
    return BandRatio(
        {shorter: -1, longer: 1},
        {shorter: 1, longer: 1},
        scale=2 * percent * per_100_nm / (longer - shorter),
        units="% per 100 nm",
        source=_GRADIENT_SOURCE,
    )


@defines("uv_vis_slope")
def _uv_vis_slope(pick: Pick) -> BandRatio:
    blue, orange = pick(480, 600)
    return replace(gradient_ratio(blue, orange), long_name="spectral slope 480 to 600 nm")


@defines("red_slope")
def _red_slope(pick: Pick) -> BandRatio:
    orange, red = pick(600, 700)
    return replace(gradient_ratio(orange, red), long_name="spectral slope 600 to 700 nm")


@defines("reflectance_700")
def _reflectance_700(pick: Pick) -> BandRatio:
    (red,) = pick(700)
    return BandRatio({red: 1}, long_name="reflectance at 700 nm", source="the measured quantity itself")


def _mafic_depth_from(pick: Pick, nominal_shoulder: float) -> BandRatio:
    # the flank first: where it is missing, the shoulder is not what to tell about
    flank, shoulder = pick(830, nominal_shoulder)
    return BandRatio(
        {shoulder: 1, flank: -1},
        {shoulder: 1},
        long_name=f"depth of the 1 µm flank at 830 nm, shoulder at {nominal_shoulder:g} nm",
        source="common practice, no source",
    )


@defines("mafic_depth")
def _mafic_depth(pick: Pick) -> BandRatio:
    try:
        return _mafic_depth_from(pick, 750)
    except BandNotFoundError:
        return _mafic_depth_from(pick, 700)


@defines("mafic_depth_continuum")
def _mafic_depth_continuum(pick: Pick) -> BandRatio:
    orange, shoulder, flank = pick(600, 750, 830)
    # R_c = R750 + (R750 − R600)·k, a straight continuum through 600 and 750 nm, extrapolated
    k = (flank - shoulder) / (shoulder - orange)
    return BandRatio(
        {shoulder: 1 + k, orange: -k, flank: -1},
        {shoulder: 1 + k, orange: -k},
        long_name="depth at 830 nm below a continuum through 600 and 750 nm",
        source="common practice, no source",
    )


def _plain_ratio(pick: Pick, above: float, below: float, long_name: str, source: str) -> BandRatio:
    first, second = pick(above, below)
    return BandRatio({first: 1}, {second: 1}, long_name=long_name, source=source)


@defines("r415_r750")
def _r415_r750(pick: Pick) -> BandRatio:
    source = "Lucey, Blewett & Jolliff 2000, JGR 105(E8), 20297, doi:10.1029/1999JE001117"
    return _plain_ratio(pick, 415, 750, "ultraviolet to near-infrared ratio", source)


@defines("r950_r750")
def _r950_r750(pick: Pick) -> BandRatio:
    source = "Lucey, Blewett & Jolliff 2000, JGR 105(E8), 20297, doi:10.1029/1999JE001117"
    return _plain_ratio(pick, 950, 750, "mafic absorption ratio", source)


@defines("r750_r415")
def _r750_r415(pick: Pick) -> BandRatio:
    source = "Pieters et al. 1994, Science 266, 1844 (from memory)"
    return _plain_ratio(pick, 750, 415, "near-infrared to ultraviolet ratio", source)


@defines("r750_r1000")
def _r750_r1000(pick: Pick) -> BandRatio:
    source = "Pieters et al. 1994, Science 266, 1844 (from memory)"
    return _plain_ratio(pick, 750, 1000, "shoulder to 1 µm absorption ratio", source)


def names() -> list[str]:
    """Every name in the catalogue."""
    return list(_DEFINITIONS)


def named_ratio(name: str, wavelengths: ArrayLike, *, tolerance: float = TOLERANCE_NM) -> BandRatio:
    """The band ratio behind a name, for these band centres.

    Parameters
    ----------
    name : str
        A name of the catalogue, such as ``red_slope``.
    wavelengths : array_like, shape (band,)
        Actual band centres [nm].
    tolerance : float
        Largest distance between a nominal wavelength and a centre [nm].

    Returns
    -------
    BandRatio
        Its weights stand at the actual centres.

    Raises
    ------
    ValueError
        If the name is unknown or a band that it needs is missing.

    Examples
    --------
    >>> import bandratio as br
    >>> br.named_ratio("mafic_depth", [480, 600, 700, 830]).definition
    '(R700 − R830)/R700'
    """
    if name not in _DEFINITIONS:
        raise ValueError(f"unknown parameter {name!r}{suggestion(str(name), _DEFINITIONS)}")
    centres = wavelength_array(wavelengths)

    def pick(*nominal: float) -> list[float]:
        return [float(centres[index]) for index in nearest_bands(centres, nominal, tolerance)]

    try:
        ratio = _DEFINITIONS[name](pick)
    except BandNotFoundError as error:
        raise BandNotFoundError(f"{name}: {error}") from None
    return replace(ratio, name=name)


def available(
    wavelengths: ArrayLike, *, tolerance: float = TOLERANCE_NM
) -> tuple[dict[str, BandRatio], dict[str, str]]:
    """Every parameter that these bands allow, and why the others are left out.

    Returns
    -------
    ratios : dict of str to BandRatio
    left_out : dict of str to str
        Name and reason.
    """
    ratios, left_out = {}, {}
    for name in _DEFINITIONS:
        try:
            ratios[name] = named_ratio(name, wavelengths, tolerance=tolerance)
        except BandNotFoundError as error:
            left_out[name] = str(error).removeprefix(f"{name}: ").split(";")[0]
    return ratios, left_out


def resolve(
    wanted: Sequence[str | BandRatio] | Mapping[str, BandRatio] | str | BandRatio | None,
    wavelengths: ArrayLike,
    *,
    tolerance: float = TOLERANCE_NM,
) -> tuple[dict[str, BandRatio], dict[str, str]]:
    """Name and band ratio of each wanted parameter, and what is left out and why.

    Parameters
    ----------
    wanted : None, or sequence of str and BandRatio, or mapping of str to BandRatio
        None means everything that the bands allow; else a missing band is an error.
    wavelengths : array_like, shape (band,)
        Actual band centres [nm].
    tolerance : float
        Largest distance between a wanted wavelength and a centre [nm].

    Raises
    ------
    ValueError, TypeError
        If a name is unknown or given twice, or a band is missing.
    """
    if wanted is None:
        return available(wavelengths, tolerance=tolerance)
    if isinstance(wanted, (str, BandRatio)):
        wanted = [wanted]
    items = wanted.items() if isinstance(wanted, Mapping) else [(None, entry) for entry in wanted]
    ratios: dict[str, BandRatio] = {}
    for given, entry in items:
        if isinstance(entry, BandRatio):
            entry.weights_for(wavelength_array(wavelengths), tolerance)
            ratio = entry if given is None else replace(entry, name=given)
        elif isinstance(entry, str):
            ratio = replace(named_ratio(entry, wavelengths, tolerance=tolerance), name=given or entry)
        else:
            raise TypeError(f"names holds {entry!r}; wanted names of the catalogue or BandRatio objects")
        if ratio.name in ratios:
            raise ValueError(f"two parameters are called {ratio.name!r}; give one of them another name=…")
        if not _agrees_with_catalogue(ratio, wavelengths, tolerance):
            raise ValueError(
                f"{ratio.name!r} is the name of a parameter of the catalogue, and this ratio is another; give it a "
                "name of its own"
            )
        ratios[ratio.name] = ratio
    if not ratios:
        raise ValueError(
            f"names is empty; give some, or None for all that the bands allow: {', '.join(names())}"
        )
    taken = [f"{name}{part}" for name in ratios for part in ("_sigma", "_sigma_random", "_sigma_shared")]
    for name in taken:
        if name in ratios:
            raise ValueError(
                f"the name {name!r} is taken by the uncertainty of another parameter; choose another"
            )
    return ratios, {}


def _agrees_with_catalogue(ratio: BandRatio, wavelengths: ArrayLike, tolerance: float) -> bool:
    if ratio.name not in _DEFINITIONS:
        return True
    try:
        named = named_ratio(ratio.name, wavelengths, tolerance=tolerance)
    except BandNotFoundError:
        return False
    centres = wavelength_array(wavelengths)
    weights = ratio.weights_for(centres, tolerance), named.weights_for(centres, tolerance)
    offsets = [(r.numerator_offset, r.denominator_offset, r.scale) for r in (ratio, named)]
    return bool(np.array_equal(*weights)) and offsets[0] == offsets[1]


def shoulder_of(ratio: BandRatio) -> float | None:
    """Nominal shoulder of a `mafic_depth` [nm], 750 or 700; None for other parameters."""
    if ratio.name != "mafic_depth" or not ratio.denominator or len(ratio.denominator) != 1:
        return None
    (centre,) = ratio.denominator
    return min((750.0, 700.0), key=lambda nominal: abs(nominal - centre))


def _by_name(cube: xr.DataArray, name: str, tolerance: float) -> xr.DataArray:
    cube = require_cube(cube)
    return _valued(cube, named_ratio(name, cube["wavelength"].values, tolerance=tolerance), tolerance)


def _valued(cube: xr.DataArray, ratio: BandRatio, tolerance: float) -> xr.DataArray:
    attributes = {
        "long_name": ratio.long_name,
        "units": ratio.units,
        "definition": ratio.definition,
        "source": ratio.source,
    }
    shoulder = shoulder_of(ratio)
    if shoulder is not None:
        attributes["shoulder"] = shoulder  # type: ignore[assignment]
    return ratio.value(cube, tolerance=tolerance).assign_attrs(attributes)


def uv_vis_slope(cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
    """Normalised reflectivity gradient 480→600 nm [% per 100 nm].

    It depends on maturity, grain size and the content of opaques such as ilmenite (common practice, no source).

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If a band is missing.

    References
    ----------
    A'Hearn et al. 1984, AJ 89, 579; Jewitt & Meech 1986, ApJ 310, 937; Luu & Jewitt 1990, AJ 99, 1985.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.12562, 0.15204], [480, 600])
    >>> round(float(br.uv_vis_slope(soil)), 2)
    15.86
    """
    return _by_name(cube, "uv_vis_slope", tolerance)


def red_slope(cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
    """Normalised reflectivity gradient 600→700 nm [% per 100 nm].

    Attenuated together with a high reflectance it marks candidate pyroclastic deposits of one family only:
    many deposits are dark, not bright (glass-rich and black-bead kinds), for which there is a rule of its own.

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If a band is missing.

    References
    ----------
    A'Hearn et al. 1984, AJ 89, 579; Jewitt & Meech 1986, ApJ 310, 937; Luu & Jewitt 1990, AJ 99, 1985.

    Examples
    --------
    >>> import bandratio as br
    >>> soil = br.as_cube([0.15204, 0.17002], [600, 700])
    >>> round(float(br.red_slope(soil)), 2)
    11.17
    """
    return _by_name(cube, "red_slope", tolerance)


def reflectance_700(cube: xr.DataArray, *, tolerance: float = TOLERANCE_NM) -> xr.DataArray:
    """Reflectance at 700 nm [1].

    A higher value means less titanium and iron oxide, for mature soils of like grain size (common practice, no
    source).

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    tolerance : float
        Largest distance between the nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If the band is missing.
    """
    return _by_name(cube, "reflectance_700", tolerance)


def mafic_depth(
    cube: xr.DataArray, *, shoulder: float | None = None, tolerance: float = TOLERANCE_NM
) -> xr.DataArray:
    """Depth of the 1 µm absorption's flank, ``1 − R830/R_shoulder`` [1].

    830 nm sits on the flank, so the depth depends on where the absorption is centred. Of the laboratory samples
    (USGS splib07a), olivine and low-calcium pyroxene stand clear of plagioclase (0.08–0.65 against at most
    0.02); augite and basalt are missed (−0.08 to 0.02).

    Parameters
    ----------
    cube : DataArray
        Reflectance with a `wavelength` dimension [nm].
    shoulder : float, optional
        750 or 700 [nm]; None takes the 750 nm band, or the 700 nm band where there is none. Depths from
        different shoulders must not be compared; the attribute `shoulder` says which it was.
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].

    Returns
    -------
    DataArray, dimensions of `cube` without `wavelength`

    Raises
    ------
    ValueError
        If a band is missing, or `shoulder` is neither 750 nor 700.

    References
    ----------
    Common practice, no source.
    """
    if shoulder is None:
        return _by_name(cube, "mafic_depth", tolerance)
    if shoulder not in (750, 700):
        raise ValueError(f"shoulder must be 750 or 700 nm, got {shoulder}")
    cube = require_cube(cube)
    centres = cube["wavelength"].values

    def pick(*nominal: float) -> list[float]:
        return [float(centres[index]) for index in nearest_bands(centres, nominal, tolerance)]

    ratio = replace(_mafic_depth_from(pick, shoulder), name="mafic_depth")
    return _valued(cube, ratio, tolerance)
