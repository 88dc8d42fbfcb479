"""The definitions: small functions from a cube's actual band centres to a band ratio.

Reflectance is `R`; the subscript is the nominal wavelength in nm. Each definition picks the bands it needs,
which hands it their actual centres, and writes the formula down with them.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace

from ..bands import BandNotFoundError
from ..ratio import BandRatio

__all__ = ["DEFINITIONS", "FlankDepth", "Pick", "defines", "flank_depth", "gradient_ratio", "shoulder_of"]

#: Nominal wavelengths in, actual centres [nm] out; raises BandNotFoundError where one is missing.
Pick = Callable[..., Sequence[float]]

#: Every named parameter's definition.
DEFINITIONS: dict[str, Callable[[Pick], BandRatio]] = {}

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
    if name in DEFINITIONS:
        raise ValueError(f"the name {name!r} is taken; choose another")

    def enter(definition: Callable[[Pick], BandRatio]) -> Callable[[Pick], BandRatio]:
        DEFINITIONS[name] = definition
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


@dataclass(frozen=True)
class FlankDepth(BandRatio):
    """A band depth that remembers its nominal `shoulder` [nm]: depths from different ones must not be compared."""

    shoulder: float | None = None


def shoulder_of(ratio: BandRatio) -> float | None:
    """Nominal shoulder of a depth [nm]; None for parameters that have none."""
    return getattr(ratio, "shoulder", None)


def flank_depth(pick: Pick, nominal_shoulder: float) -> FlankDepth:
    """``1 − R830/R_shoulder``, for a shoulder at 750 or 700 nm."""
    shoulder, flank = pick(nominal_shoulder, 830)
    return FlankDepth(
        {shoulder: 1, flank: -1},
        {shoulder: 1},
        long_name=f"depth of the 1 µm flank at 830 nm, shoulder at {nominal_shoulder:g} nm",
        source="common practice, no source",
        shoulder=float(nominal_shoulder),
    )


@defines("mafic_depth")
def _mafic_depth(pick: Pick) -> BandRatio:
    # 830 nm sits on the flank of the 1 µm absorption: augite and basalt are missed, see mafic_depth()
    pick(830)
    for nominal_shoulder in (750, 700):
        try:
            pick(nominal_shoulder)
        except BandNotFoundError:
            continue
        return flank_depth(pick, nominal_shoulder)
    raise BandNotFoundError(
        "no band for the shoulder: it is taken at 750 nm, or at 700 nm where there is none"
    )


@defines("mafic_depth_continuum")
def _mafic_depth_continuum(pick: Pick) -> BandRatio:
    """Ranks mafic samples above plagioclase less well than `mafic_depth` (82 against 89 % of laboratory pairs)."""
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
    """Falls with maturity and rises with titanium in mature mare soils; the input of the titanium oxide map."""
    source = "Lucey, Blewett & Jolliff 2000, JGR 105(E8), 20297, doi:10.1029/1999JE001117"
    return _plain_ratio(pick, 415, 750, "ultraviolet to near-infrared ratio", source)


@defines("r950_r750")
def _r950_r750(pick: Pick) -> BandRatio:
    """Falls with the depth of the 1 µm absorption and rises with maturity; the input of the iron oxide map."""
    source = "Lucey, Blewett & Jolliff 2000, JGR 105(E8), 20297, doi:10.1029/1999JE001117"
    return _plain_ratio(pick, 950, 750, "mafic absorption ratio", source)


@defines("r750_r415")
def _r750_r415(pick: Pick) -> BandRatio:
    """The inverse of ``r415_r750``, as colour composites use it: redder, more mature ground is higher."""
    source = "Pieters et al. 1994, Science 266, 1844 (from memory)"
    return _plain_ratio(pick, 750, 415, "near-infrared to ultraviolet ratio", source)


@defines("r750_r1000")
def _r750_r1000(pick: Pick) -> BandRatio:
    """Rises with the depth of the 1 µm absorption, as colour composites use it; falls with maturity."""
    source = "Pieters et al. 1994, Science 266, 1844 (from memory)"
    return _plain_ratio(pick, 750, 1000, "shoulder to 1 µm absorption ratio", source)
