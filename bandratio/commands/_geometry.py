"""Options that bring a scene to one geometry before it is mapped."""

from __future__ import annotations

import json
from collections.abc import Callable, Mapping
from typing import Any

import click
import xarray as xr

from ._options import numbers

__all__ = ["count_masked", "geometry_lines", "geometry_options", "normalised"]

_LAWS = ("lunar_lambert", "lommel_seeliger", "lambert", "minnaert", "akimov", "hapke")
_NEEDS_GEOMETRY = (
    "law",
    "to",
    "minnaert_k",
    "phase_function",
    "slope_sigma",
    "least_elevation",
    "no_spread",
    "as_quantity",
)


def geometry_options(command: Callable[..., Any]) -> Callable[..., Any]:
    """Put on where the geometry comes from, and how it is normalised."""
    for option in (
        click.option(
            "--as-quantity",
            metavar="QUANTITY",
            help="Convert to this reflectance quantity before mapping, e.g. reflectance_factor, which laboratory "
            "thresholds are in; needs the incidence of --geometry or --dem.",
        ),
        click.option(
            "--no-spread",
            is_flag=True,
            help="Take the law as true, without the spread between laws in the sigma.",
        ),
        click.option(
            "--least-elevation",
            type=float,
            metavar="DEG",
            help="Mask pixels where sun or viewer stand lower over the surface [deg]; 5.7 unless given.",
        ),
        click.option("--slope-sigma", type=float, metavar="DEG", help="Standard error of the slopes [deg]."),
        click.option(
            "--phase-function",
            metavar="C1[,C2…]",
            help="ln f(g) = C1·g + C2·g² + …, g in degrees, the same in all bands.",
        ),
        click.option("--minnaert-k", metavar="K[,K…]", help="Minnaert's k, one number or one per band."),
        click.option("--to", metavar="I,E,G", help="Standard geometry [deg]; 30,0,30 unless given."),
        click.option("--law", type=click.Choice(_LAWS), help="Photometric law; lunar_lambert unless given."),
        click.option(
            "--viewer", metavar="AZ,ELEV", help="Viewer with --dem [deg]; straight above unless given."
        ),
        click.option(
            "--sun", metavar="AZ,ELEV", help="Sun at the middle of --dem: azimuth, elevation [deg]."
        ),
        click.option("--dem", metavar="DEM", help="Elevation model [m] on the scene's grid; with --sun."),
        click.option(
            "--geometry",
            metavar="ANGLES",
            help="File with incidence, emission and phase [deg] of every pixel; normalises before mapping.",
        ),
    ):
        command = option(command)
    return command


def normalised(cube: xr.DataArray, given: Mapping[str, Any]) -> xr.DataArray:
    """The cube at the standard geometry, or as it is where no geometry was given.

    Raises
    ------
    ValueError
        If options do not go together, or the geometry does not fit the cube.
    """
    if given["geometry"] is None and given["dem"] is None:
        # an option of its own says nothing without a geometry
        lost = [f"--{name.replace('_', '-')}" for name in ("sun", "viewer", *_NEEDS_GEOMETRY) if given[name]]
        if lost:
            raise ValueError(f"{lost[0]} needs --geometry ANGLES, or --dem DEM with --sun AZ,ELEV")
        return cube
    from ..photometry import ExponentialPhase, Minnaert, normalise

    planes = _planes(cube, given)
    law: Any = given["law"] or "lunar_lambert"
    k = numbers(given["minnaert_k"], "--minnaert-k")
    if k is not None:
        if given["law"] not in (None, "minnaert"):
            raise ValueError(f"--minnaert-k goes with --law minnaert, got --law {given['law']}")
        law = Minnaert(k[0] if len(k) == 1 else k)
    coefficients = numbers(given["phase_function"], "--phase-function")
    options: dict[str, Any] = {str(name): plane for name, plane in planes.items()}
    if given["no_spread"]:
        options["spread"] = ()
    if given["least_elevation"] is not None:
        options["least_mu0"] = options["least_mu"] = _sine(given["least_elevation"])
    flat = normalise(
        cube,
        law=law,
        to=_three(given["to"]),
        phase_function=None if coefficients is None else ExponentialPhase(tuple(coefficients)),
        slope_sigma=given["slope_sigma"] or 0.0,
        **options,
    )
    if given["as_quantity"] is not None:
        from ..photometry import convert_quantity

        flat = convert_quantity(flat, given["as_quantity"])
    return flat.assign_attrs(geometry_input=str(planes.attrs.get("input", "")))


def count_masked(maps: xr.Dataset) -> None:
    """Write into the maps' attributes how many pixels their geometry masked, and why; one pass over the angles."""
    if "normalisation" in maps.attrs:
        from ..photometry import masked_pixels

        maps.attrs["masked_pixels"] = json.dumps(masked_pixels(maps))


def geometry_lines(maps: xr.Dataset) -> list[str]:
    """What the closing table says about the geometry; nothing where none was given."""
    if "normalisation" not in maps.attrs:
        return []
    from ..photometry import geometry_summary

    return geometry_summary(maps)


def _planes(cube: xr.DataArray, given: Mapping[str, Any]) -> xr.Dataset:
    from ..files import open_elevation, open_geometry
    from ..photometry import terrain_geometry

    if given["geometry"] is not None:
        if given["dem"] is not None or given["sun"] is not None or given["viewer"] is not None:
            raise ValueError("give either --geometry ANGLES, or --dem DEM with --sun AZ,ELEV, not both")
        angles: xr.Dataset = open_geometry(given["geometry"], like=cube)
        return angles
    if given["sun"] is None:
        raise ValueError("--dem needs --sun AZ,ELEV: where the sun stood, in degrees")
    dem = open_elevation(given["dem"])
    sun, viewer = (numbers(given[name], f"--{name}") for name in ("sun", "viewer"))
    assert sun is not None
    planes: xr.Dataset = terrain_geometry(dem, sun=sun, viewer=viewer, like=cube)
    return planes.assign_attrs(input=f"{dem.attrs['input']} sun {sun} viewer {viewer}")


def _three(text: str | None) -> tuple[float, ...]:
    angles = numbers(text, "--to")
    return (30.0, 0.0, 30.0) if angles is None else tuple(angles)


def _sine(elevation_deg: float) -> float:
    import math

    if not 0.6 <= elevation_deg < 90:
        raise ValueError(f"--least-elevation must lie from 0.6 to below 90°, got {elevation_deg:g}°")
    return math.sin(math.radians(elevation_deg))
