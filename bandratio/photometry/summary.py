"""What a normalisation did, in words, for closing tables and reports."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any

import xarray as xr

from .._checks import listed
from .normalise import masked_pixels

__all__ = ["geometry_summary"]

_READABLE = {
    "lambert": "Lambert",
    "lommel_seeliger": "Lommel–Seeliger",
    "lunar_lambert": "lunar-Lambert",
    "minnaert": "Minnaert",
    "akimov": "Akimov",
    "hapke": "Hapke",
}


def geometry_summary(
    labelled: xr.DataArray | xr.Dataset, masked: Mapping[str, int] | None = None
) -> list[str]:
    """Sentences: which law, which standard geometry, what the sigma holds, how many pixels were masked and why.

    Parameters
    ----------
    labelled : DataArray or Dataset
        A normalised cube or its maps.
    masked : mapping of str to int, optional
        Result of `masked_pixels`; None: what the attribute of that name says, which maps from the command line have, or
        counted where the flags are in memory.

    Returns
    -------
    list of str
        One sentence for a cube that was not normalised: that it was not.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube([[0.05, 0.1]], [700], quantity="radiance_factor")
    >>> flat = br.normalise(cube, incidence=[60, 89], emission=0, phase=[60, 89], spread=None)
    >>> for line in geometry_summary(flat, br.masked_pixels(flat)):
    ...     print(line)
    geometry: normalised to incidence 30°, emission 0°, phase 30° by the lunar-Lambert law (L McEwen 1996), no phase
    function
    masked: 1 of 2 pixels (1 sun too low)
    """
    if "normalisation" not in labelled.attrs:
        return ["geometry: as observed, not normalised"]
    told = json.loads(labelled.attrs["normalisation"])
    incidence, emission, phase = told["to"]
    law = dict(told["law"])
    name = str(law.pop("name"))
    parameters = ", ".join(f"{key} {_plain(value)}" for key, value in law.items())
    function = "with a phase function" if told["phase_function"] else "no phase function"
    if name == "hapke":
        function = "its own phase function"
    by = f"{_READABLE.get(name, name)} law{f' ({parameters})' if parameters else ''}"
    at = f"incidence {incidence:g}°, emission {emission:g}°, phase {phase:g}°"
    lines = [f"geometry: normalised to {at} by the {by}, {function}"]
    parts = []
    if told["slope_sigma_deg"]:
        sigma = told["slope_sigma_deg"]
        parts.append(
            f"a slope error of {sigma:.2g}°" if isinstance(sigma, float | int) else "a map of slope errors"
        )
    if told["spread"]:
        parts.append(f"the spread to {listed(_READABLE.get(law, law) for law in told['spread'])}")
    if parts:
        lines.append(
            f"sigma holds {' and '.join(parts)}, common to the bands of a pixel: it cancels in pure ratios"
        )
    if masked is None and "masked_pixels" in labelled.attrs:
        masked = json.loads(labelled.attrs["masked_pixels"])
    elif (
        masked is None
        and "geometry_flag" in labelled.coords
        and labelled.coords["geometry_flag"].chunks is None
    ):
        masked = masked_pixels(labelled)
    if masked is not None:
        total, used = sum(masked.values()), masked.get("used", 0)
        reasons = listed(
            f"{count} {reason.replace('_', ' ')}" for reason, count in masked.items() if reason != "used"
        )
        lines.append(f"masked: {total - used} of {total} pixels{f' ({reasons})' if total > used else ''}")
    return lines


def _plain(value: Any) -> str:
    if isinstance(value, dict):
        return " ".join(f"{key} nm {number:g}" for key, number in value.items())
    return f"{value:g}" if isinstance(value, float | int) else str(value)
