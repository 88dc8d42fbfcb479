"""Options that several commands share: bands, noise, and how lists of numbers are typed."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

import click

from ..noise import Noise

if TYPE_CHECKING:
    import xarray as xr

__all__ = ["band_options", "cube_from", "names_from", "noise_from", "noise_options", "numbers"]


def numbers(text: str | None, what: str) -> list[float] | None:
    """Comma-separated numbers, None where nothing was typed.

    Raises
    ------
    ValueError
        If one of them is no number.
    """
    if text is None:
        return None
    try:
        return [float(word) for word in text.split(",")]
    except ValueError:
        raise ValueError(
            f"{what} wants numbers with commas between, such as 480,600,700, got {text!r}"
        ) from None


def band_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Put on what a scene's file may leave out: wavelengths, widths, quantity, scale and nodata."""
    for option in (
        click.option(
            "--variable", help="Variable of a Zarr store or netCDF file, where several could be meant."
        ),
        click.option("--nodata", type=float, help="Value that means missing, where the file does not say."),
        click.option("--scale", type=float, help="Factor from stored numbers to reflectance."),
        click.option("--quantity", help="Reflectance quantity, e.g. reflectance_factor or radiance_factor."),
        click.option("--fwhm", metavar="NM,NM,…", help="Band widths (full width at half maximum) [nm]."),
        click.option("--wavelengths", metavar="NM,NM,…", help="Band centres [nm], where the file has none."),
    ):
        command = option(command)
    return command


def cube_from(scene: str, given: Mapping[str, Any]) -> xr.DataArray:
    """The scene's cube, opened lazily by the options of `band_options`."""
    from ..files import open_cube

    cube: xr.DataArray = open_cube(
        scene,
        numbers(given["wavelengths"], "--wavelengths"),
        fwhm=numbers(given["fwhm"], "--fwhm"),
        quantity=given["quantity"],
        scale=given["scale"],
        nodata=given["nodata"],
        variable=given.get("variable"),
    )
    return cube


def names_from(text: str | None) -> list[str] | None:
    """Comma-separated names, None where nothing was typed.

    Raises
    ------
    ValueError
        If no name is left.
    """
    if text is None:
        return None
    found = [word.strip() for word in text.split(",") if word.strip()]
    if not found:
        raise ValueError(
            f"--names wants names with commas between, such as red_slope,mafic_depth, got {text!r}"
        )
    return found


_NOISE = {
    "random": "Noise that is new in each pixel, NEΔρ [reflectance].",
    "shot": "Photon noise: its sigma at a reflectance of 1 [reflectance].",
    "relative": "Noise new in each pixel, as a fraction of the value. Not a calibration's relative accuracy.",
    "band_gain": "Gain error of each band, shared by all pixels: relative (band-to-band) accuracy, a fraction.",
    "band_offset": "Additive error of each band, shared by all pixels [reflectance].",
}


def noise_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Put on the parts of the error model, each one number or one value a band."""
    command = click.option(
        "--common-gain", type=float, help="One gain error of all bands: absolute accuracy, a fraction."
    )(command)
    for part, text in reversed(_NOISE.items()):
        command = click.option(f"--{part.replace('_', '-')}", metavar="X[,X…]", help=text)(command)
    return click.option(
        "--noise", metavar="FILE.csv", help="Table of all parts, one row a band; instead of those below."
    )(command)


def noise_from(given: Mapping[str, Any]) -> Noise | None:
    """The noise that the options of `noise_options` describe, None where none was given.

    Raises
    ------
    ValueError
        If a table and single parts are both given, or a value is bad.
    """
    parts = {part: numbers(given[part], f"--{part.replace('_', '-')}") for part in _NOISE}
    values: dict[str, Any] = {
        part: value[0] if len(value) == 1 else value for part, value in parts.items() if value is not None
    }
    if given["common_gain"] is not None:
        values["common_gain"] = given["common_gain"]
    if given["noise"] is not None:
        if values:
            raise ValueError("give either --noise FILE.csv or single parts such as --random, not both")
        return Noise.from_csv(given["noise"])
    return Noise(**values) if values else None
