"""Incidence, emission, phase and cast shadow from an elevation model, in any map projection on a sphere."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed, non_negative, positive

__all__ = ["slope_sigma_from_height", "terrain_geometry"]


def terrain_geometry(
    dem: xr.DataArray,
    *,
    sun: Sequence[float],
    viewer: Sequence[float] | None = None,
    like: xr.DataArray | None = None,
    radius: float | None = None,
    cast_shadow: bool = True,
) -> xr.Dataset:
    """Angles and cast shadow at every pixel of an elevation model.

    Parameters
    ----------
    dem : DataArray, dimensions (y, x)
        Heights above the sphere or the plane [m], on a regular grid with coordinates `y` and `x`. With a map projection
        (``dem.rio.crs``) positions are taken on its sphere, whatever the projection; a geographic grid has `x` and `y`
        in degrees. Without one the ground is a plane, `x` east and `y` north [m]. NaN is missing.
    sun : (azimuth, elevation)
        Where the sun stands at the middle of the model: azimuth clockwise from north, elevation above the horizon
        [deg]. It is taken as infinitely far, so that over a sphere it stands differently at every pixel.
    viewer : (azimuth, elevation), optional
        The same for the viewer, as infinitely far. None: every pixel is seen from straight above (the line scanner's
        and the mosaic's case).
    like : DataArray, optional
        Cube or band whose grid the model must have; checked.
    radius : float, optional
        Radius of the sphere [m]. None: that of the map projection.
    cast_shadow : bool
        Also find which pixels the terrain keeps from the sun.

    Returns
    -------
    Dataset over (y, x), float32
        ``incidence``, ``emission``, ``phase`` [deg] from the normal of the terrain, as `normalise` takes them, ``shadow``
        (bool): ``normalise(cube, **terrain_geometry(…))``. Where the sun is behind the slope itself, incidence is above 90°. A pixel with a missing neighbour has no
        slope: NaN. The outermost rows and columns take one-sided slopes.

    Raises
    ------
    ValueError, TypeError
        If the model has no regular grid, lies on another grid than `like`, the sun or viewer is below the horizon, or
        angles are no degrees.

    Notes
    -----
    The model must fit in memory. Terrain outside it casts no shadow here; the sun is a point, so there is no penumbra. The
    normal of a pixel is that of the plane through its four neighbours.

    References
    ----------
    Horn 1981, Proc. IEEE 69, 14, doi:10.1109/PROC.1981.11918 (reflectance from elevation models).

    Examples
    --------
    >>> east = np.arange(5.0)
    >>> dem = xr.DataArray(np.tan(np.deg2rad(20)) * -east * np.ones((5, 1)), {"y": east[::-1], "x": east}, ("y", "x"))
    >>> planes = terrain_geometry(dem, sun=(90, 50))  # a slope of 20° toward the sun, which stands 40° from the zenith
    >>> [round(float(planes[name][2, 2]), 3) for name in ("incidence", "emission", "phase")]
    [20.0, 20.0, 40.0]
    """
    dem = _checked_dem(dem, like)
    toward_sun = _direction("sun", sun)
    toward_viewer = None if viewer is None else _direction("viewer", viewer)
    ground = _ground(dem, radius)
    s = ground.to_body(toward_sun)
    normal = ground.normals()
    mu0 = np.einsum("kyx,k->yx", normal, s)
    if toward_viewer is None:
        v: NDArray = ground.up
        mu = (normal * v).sum(0)
        cos_phase = np.einsum("kyx,k->yx", v, s)
    else:
        v = ground.to_body(toward_viewer)
        mu = np.einsum("kyx,k->yx", normal, v)
        cos_phase = np.full(mu0.shape, float(v @ s))
    angles = {
        name: np.degrees(np.arccos(np.clip(cosine, -1, 1))).astype(np.float32)
        for name, cosine in (("incidence", mu0), ("emission", mu), ("phase", cos_phase))
    }
    words = {
        "incidence": "angle between the terrain's normal and the sun",
        "emission": "angle between the terrain's normal and the viewer",
        "phase": "angle between sun and viewer",
    }
    planes: dict[str, Any] = {
        name: (("y", "x"), plane, {"units": "degree", "long_name": words[name]})
        for name, plane in angles.items()
    }
    if cast_shadow:
        planes["shadow"] = (
            ("y", "x"),
            ground.shadow(s),
            {"long_name": "kept from the sun by terrain of the elevation model"},
        )
    told = {"sun_azimuth_elevation": [float(angle) for angle in sun]}
    if viewer is not None:
        told["viewer_azimuth_elevation"] = [float(angle) for angle in viewer]
    coords = {name: c for name, c in dem.coords.items() if set(c.dims) <= {"y", "x"}}
    return xr.Dataset(planes, coords, told)


def slope_sigma_from_height(height_sigma: float, spacing: float) -> float:
    """Standard error of a slope from that of the heights, along either axis.

    The slope of a pixel is the difference of two neighbours' heights over twice the spacing, so for heights whose errors
    are independent its error is height_sigma/(√2·spacing). Neighbours of real models share much of their error, which
    makes this an upper bound.

    Parameters
    ----------
    height_sigma : float
        Standard error of a height [m].
    spacing : float
        Distance of neighbouring pixels [m].

    Returns
    -------
    float
        [deg], as `normalise` takes it.

    Examples
    --------
    >>> round(slope_sigma_from_height(1.0, 20.0), 2)
    2.02
    """
    error = non_negative("height_sigma", height_sigma, "m") / (np.sqrt(2) * positive("spacing", spacing, "m"))
    return float(np.degrees(np.arctan(error)))


def _direction(name: str, angles: Sequence[float]) -> NDArray:
    """Unit vector east, north, up."""
    if isinstance(angles, str) or np.ndim(angles) != 1 or len(angles) != 2:
        raise ValueError(f"{name} is two angles in degrees, (azimuth, elevation), got {angles!r}")
    try:
        azimuth, elevation = (float(angle) for angle in angles)
    except (TypeError, ValueError):
        raise TypeError(f"{name} is two angles in degrees, (azimuth, elevation), got {angles!r}") from None
    if not (np.isfinite(azimuth) and -360 <= azimuth <= 360):
        raise ValueError(f"{name}'s azimuth is clockwise from north, 0 to 360°, got {azimuth:g}°")
    if not 0 < elevation <= 90:
        below = "is below the horizon" if -90 <= elevation <= 0 else "is no elevation"
        raise ValueError(
            f"{name}'s elevation must lie above 0 and up to 90°, got {elevation:g}°, which {below}"
        )
    if (
        name == "sun"
        and elevation <= np.pi / 2
        and 0 <= azimuth <= 2 * np.pi
        and (azimuth % 1 or elevation % 1)
    ):
        raise ValueError(
            f"sun=({azimuth:g}, {elevation:g}) looks like radians; give azimuth and elevation in degrees (where "
            "they are truly so small, give the azimuth less 360)"
        )
    a, e = np.deg2rad(azimuth), np.deg2rad(elevation)
    return np.array([np.sin(a) * np.cos(e), np.cos(a) * np.cos(e), np.sin(e)])


def _checked_dem(dem: xr.DataArray, like: xr.DataArray | None) -> xr.DataArray:
    if not isinstance(dem, xr.DataArray):
        raise TypeError(f"dem must be a DataArray of heights in m over y and x, got {type(dem).__name__}")
    dem = dem.squeeze([dim for dim in dem.dims if dim not in ("y", "x") and dem.sizes[dim] == 1], drop=True)
    if set(dem.dims) != {"y", "x"}:
        raise ValueError(f"dem must have the dimensions y and x, got {listed(dem.dims)}")
    dem = dem.transpose("y", "x")
    if dem.dtype.kind not in "fiu":
        raise TypeError(f"dem must hold heights in m, got {dem.dtype}")
    if min(dem.shape) < 3:
        raise ValueError(f"dem must have at least 3 × 3 pixels for a slope, got {dem.shape}")
    for dim in ("y", "x"):
        if dim not in dem.coords:
            raise ValueError(
                f"dem has no coordinate {dim}; the positions of its pixels are needed for a slope"
            )
        steps = np.diff(dem[dim].values.astype(float))
        if not np.allclose(steps, steps[0], rtol=1e-3) or steps[0] == 0:
            raise ValueError(
                f"dem is not on a regular grid: its {dim} steps by {steps.min():g} to {steps.max():g}"
            )
    if like is not None:
        from .angles import angle_plane

        band = like.isel(wavelength=0) if "wavelength" in like.dims else like
        # the same grid check as for angles; heights are no angles, so a plane of zeros stands for them
        angle_plane("dem", xr.zeros_like(dem, dtype=np.float32), band.expand_dims("wavelength"))
    values = dem.astype(float)
    if not np.isfinite(values.values).any():
        raise ValueError("dem holds no finite height")
    return values


@dataclass(frozen=True)
class _Ground:
    """Positions of the pixels in a frame fixed to the body, and what is up there.

    Parameters
    ----------
    height : ndarray, shape (y, x)
        [m].
    base, up : ndarray, shape (3, y, x)
        Position on the smooth body [m], and the unit vector up from there.
    frame : ndarray, shape (3, 3)
        Unit vectors east, north and up at the middle pixel, as rows.
    radius : float
        Of the body [m]; infinite for a plane.
    """

    height: NDArray
    base: NDArray
    up: NDArray
    frame: NDArray
    radius: float

    def to_body(self, local: NDArray) -> NDArray:
        """A direction east, north, up at the middle pixel, in the body's frame."""
        direction: NDArray = local @ self.frame
        return direction

    def normals(self) -> NDArray:
        """Outward unit normals, shape (3, y, x)."""
        position = self.base + self.height * self.up
        down_rows = np.gradient(position, axis=1)
        along_columns = np.gradient(position, axis=2)
        normal = np.cross(along_columns, down_rows, axis=0)
        normal *= np.where((normal * self.up).sum(0) < 0, -1, 1)
        result: NDArray = normal / np.sqrt((normal**2).sum(0))
        return result

    def shadow(self, s: NDArray) -> NDArray:
        """True where terrain stands between a pixel and the sun at direction `s`."""
        from .shadow_loop import shadowed

        along = np.einsum("kyx,k->yx", self.up, s)
        # horizontal unit vector toward the sun, then how the grid moves along it
        toward = s[:, None, None] - along * self.up
        length = np.sqrt((toward**2).sum(0))
        toward /= np.maximum(length, 1e-12)
        by_row, by_column = np.gradient(self.base, axis=1), np.gradient(self.base, axis=2)
        r2, c2, rc = (
            (a * b).sum(0) for a, b in ((by_row, by_row), (by_column, by_column), (by_row, by_column))
        )
        r, c = ((a * toward).sum(0) for a in (by_row, by_column))
        det = r2 * c2 - rc**2
        step_row, step_column = (r * c2 - c * rc) / det, (c * r2 - r * rc) / det
        size = np.maximum(np.hypot(step_row, step_column), 1e-300)
        # distance from the axis through the body's centre along the sun (on a plane: from the plane that holds the sun)
        if np.isfinite(self.radius):
            reach = (self.radius + self.height) * length
            ceiling = (self.radius + np.nanmax(self.height)) * length
            ceiling[along <= 0] = np.inf
        else:
            far: NDArray = np.einsum("kyx,kyx->yx", self.base, toward)
            reach = self.height * length - far * along
            ceiling = np.nanmax(self.height) * length - far * along
        dark: NDArray = shadowed(reach, ceiling, step_row / size, step_column / size, length < 1e-9)
        return dark


def _ground(dem: xr.DataArray, radius: float | None) -> _Ground:
    height = dem.values
    x, y = np.meshgrid(dem["x"].values.astype(float), dem["y"].values.astype(float))
    crs = _projection(dem)
    if crs is None:
        if radius is not None:
            raise ValueError(
                "dem has no map projection, so that its place on a sphere of the given radius is unknown"
            )
        up = np.broadcast_to(np.array([0.0, 0.0, 1.0])[:, None, None], (3, *height.shape))
        return _Ground(height, np.stack([x, y, np.zeros_like(x)]), up, np.eye(3), np.inf)
    longitude, latitude, own_radius = _on_the_sphere(crs, x, y)
    R = own_radius if radius is None else positive("radius", radius, "m")
    up = np.stack(
        [np.cos(latitude) * np.cos(longitude), np.cos(latitude) * np.sin(longitude), np.sin(latitude)]
    )
    middle = tuple(size // 2 for size in height.shape)
    above = up[:, *middle]
    east = np.array([-np.sin(longitude[middle]), np.cos(longitude[middle]), 0.0])
    return _Ground(height, R * up, up, np.stack([east, np.cross(above, east), above]), R)


def _projection(dem: xr.DataArray) -> Any:
    import rioxarray  # noqa: F401  the accessor

    return dem.rio.crs


def _on_the_sphere(crs: Any, x: NDArray, y: NDArray) -> tuple[NDArray, NDArray, float]:
    """Longitude and latitude [radian], and the radius [m] of the projection's sphere."""
    import pyproj

    projection = pyproj.CRS.from_user_input(crs.to_wkt())
    body = projection.ellipsoid
    if body is None:
        raise ValueError("dem's map projection names no sphere; set it with dem.rio.write_crs(…)")
    if body.semi_minor_metre < 0.9 * body.semi_major_metre:
        raise ValueError(
            "dem's map projection is on a body that is far from a sphere, which is not provided for"
        )
    geographic = projection.geodetic_crs
    turn = pyproj.Transformer.from_crs(projection, geographic, always_xy=True)
    longitude, latitude = turn.transform(x, y)
    if not (np.isfinite(longitude).all() and np.isfinite(latitude).all()):
        raise ValueError("dem has pixels outside its map projection; crop it first")
    return (
        np.deg2rad(longitude),
        np.deg2rad(latitude),
        float((2 * body.semi_major_metre + body.semi_minor_metre) / 3),
    )
