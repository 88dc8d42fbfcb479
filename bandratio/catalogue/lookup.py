"""From a name to the band ratio behind it, and from what is wanted to what the bands allow."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import ArrayLike

from .._checks import suggestion
from ..bands import TOLERANCE_NM, BandNotFoundError, nearest_bands, wavelength_array
from ..ratio import BandRatio
from .definitions import DEFINITIONS, Pick

__all__ = ["available", "named_ratio", "names", "picker", "resolve"]


def picker(wavelengths: ArrayLike, tolerance: float = TOLERANCE_NM) -> Pick:
    """What definitions call for their bands: nominal wavelengths in, actual centres out [nm]."""
    centres = wavelength_array(wavelengths)

    def pick(*nominal: float) -> list[float]:
        return [float(centres[index]) for index in nearest_bands(centres, nominal, tolerance)]

    return pick


def names() -> list[str]:
    """Every name in the catalogue."""
    return list(DEFINITIONS)


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
    if name not in DEFINITIONS:
        raise ValueError(f"unknown parameter {name!r}{suggestion(str(name), DEFINITIONS)}")
    try:
        ratio = DEFINITIONS[name](picker(wavelengths, tolerance))
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
    for name in DEFINITIONS:
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
    if ratio.name not in DEFINITIONS:
        return True
    try:
        named = named_ratio(ratio.name, wavelengths, tolerance=tolerance)
    except BandNotFoundError:
        return False
    centres = wavelength_array(wavelengths)
    weights = ratio.weights_for(centres, tolerance), named.weights_for(centres, tolerance)
    offsets = [(r.numerator_offset, r.denominator_offset, r.scale) for r in (ratio, named)]
    return bool(np.array_equal(*weights)) and offsets[0] == offsets[1]
