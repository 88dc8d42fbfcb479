"""The noise and single numbers of attributes, said in words."""

from __future__ import annotations

import json
from typing import Any

__all__ = ["noise_words", "readable_attribute"]

#: Parts that are fractions are told in per cent, the others in reflectance.
_FRACTIONS = ("relative", "band_gain", "common_gain")


def noise_words(described: Any) -> str:
    """What ``Noise.describe`` gives, as a reader would say it; any other text as it is.

    Examples
    --------
    >>> noise_words('{"random": 0.0002, "band_gain": {"600": 0.002, "700": 0.002}, "common_gain": 0.02}')
    'random 0.0002, band gain 0.2 % at 600 and 700 nm, common gain 2 %'
    """
    try:
        parts = json.loads(str(described))
    except ValueError:
        return str(described)
    if not isinstance(parts, dict):
        return str(described)
    if not parts:
        return "none"
    return ", ".join(_part(str(name), value) for name, value in parts.items())


def _part(name: str, value: Any) -> str:
    words = name.replace("_", " ")
    if name == "shared_within":
        return "gains and offsets shared within labels"
    if isinstance(value, dict):
        return f"{words} {_of_bands(name, value)}"
    if isinstance(value, list):
        return f"{words} {', '.join(_number(name, each) for each in value)} (one for each band)"
    if value == "map":
        return f"{words} as a map"
    return f"{words} {_number(name, value)}"


def _of_bands(name: str, value: dict[str, Any]) -> str:
    bands_of: dict[str, list[str]] = {}
    for band, number in value.items():
        bands_of.setdefault(_number(name, number), []).append(band)
    return ", ".join(
        f"{number} at {' and '.join(filter(None, [', '.join(bands[:-1]), bands[-1]]))} nm"
        for number, bands in bands_of.items()
    )


def _number(name: str, value: Any) -> str:
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return str(value)
    return f"{100 * value:.3g} %" if name in _FRACTIONS else f"{value:.3g}"


def readable_attribute(key: str, value: Any) -> str:
    """An attribute of a file as the page shows it.

    Examples
    --------
    >>> readable_attribute("largest_p_value", 0.00010649085892484893)
    '0.00011'
    >>> readable_attribute("noise_of_the_cube", "pixel_gain and brightness_factor of the cube enter the sigmas")
    "the cube's pixel gain and brightness factor enter the sigmas"
    """
    if key.endswith("p_value") and isinstance(value, float):
        return f"{value:.2g}"
    if isinstance(value, float):
        return f"{value:.6g}"
    text = noise_words(value) if key == "noise" else str(value)
    ending = " of the cube enter the sigmas"
    if key == "noise_of_the_cube" and text.endswith(ending):
        carried = text.removesuffix(ending)
        verb = "enter" if " and " in carried else "enters"
        return f"the cube's {carried.replace('_', ' ')} {verb} the sigmas"
    return text
