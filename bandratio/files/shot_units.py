"""Units of lidar shots: lengths in m, angles in degrees, energies in J."""

from __future__ import annotations

import math

from .._checks import listed

__all__ = ["conversion", "one_energy_unit"]

_PREFIXES = {
    "": 1.0,
    "m": 1e-3,
    "µ": 1e-6,
    "μ": 1e-6,
    "u": 1e-6,
    "n": 1e-9,
    "p": 1e-12,
    "f": 1e-15,
    "a": 1e-18,
}
_DEGREES = ("degree", "degrees", "deg", "°", "degree_north", "degrees_north", "degree_east", "degrees_east")
_RADIANS = ("rad", "radian", "radians")
_FACTORS: dict[str, dict[str, float]] = {
    "m": {"m": 1, "metre": 1, "metres": 1, "meter": 1, "meters": 1, "km": 1e3, "cm": 1e-2, "mm": 1e-3},
    "degree": {**dict.fromkeys(_DEGREES, 1.0), **dict.fromkeys(_RADIANS, 180 / math.pi)},
    "energy": {f"{prefix}J": factor for prefix, factor in _PREFIXES.items()},
}
_COUNTS = ("count", "counts", "photon", "photons", "1", "dn", "digital number")


def conversion(name: str, stated: str, kind: str) -> tuple[float, str]:
    """Factor to the unit of a kind (m, degree, energy), and that unit; an unstated one is taken as it.

    Raises
    ------
    ValueError
        If the stated unit is none of that kind.

    Examples
    --------
    >>> conversion("range", "km", "m"), conversion("red", "counts", "energy")
    ((1000.0, 'm'), (1.0, 'count'))
    """
    text = stated.strip()
    if kind == "energy":
        if not text:
            return 1.0, ""
        if text.lower() in _COUNTS:
            return 1.0, "count"
    if not text:
        return 1.0, kind
    factor = _FACTORS[kind].get(text)
    if factor is None:
        known = [*_FACTORS[kind], *(_COUNTS if kind == "energy" else ())]
        raise ValueError(
            f"{name} is in {text!r}, which is no unit for it; wanted {listed(known)}; say units={{…}}"
        )
    return float(factor), "J" if kind == "energy" else kind


def one_energy_unit(*units: str) -> str:
    """The one unit of several energies.

    Raises
    ------
    ValueError
        If they are in different ones.
    """
    different = sorted(set(units))
    if len(different) > 1:
        texts = [unit or "no stated unit" for unit in different]
        raise ValueError(
            f"energies must be in one unit, got {listed(texts)}; say the file's with units={{'red': 'J', …}}"
        )
    return different[0] if different else ""
