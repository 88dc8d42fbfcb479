"""A law's parameter and a phase function from the scene itself, by robust regression with intervals."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import one_of, open_fraction
from ..cube import require_cube
from .angles import angle_plane, refuse_radians
from .laws import Law, LunarLambert, Minnaert, Plane
from .phase import ExponentialPhase
from .quantities import require_quantity

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["PhotometricFit", "fit_photometry"]

#: Tuning constant of Huber's estimator in units of the residuals' scale: 95 % efficiency for Gaussian errors
#: (Huber 1981, Robust Statistics, doi:10.1002/0471725250).
_HUBER = 1.345
_LEAST_PIXELS = 500
_BLOCKS_A_SIDE = 8
_FITTED = ("minnaert", "lunar_lambert")


@dataclass(frozen=True)
class PhotometricFit:
    """What `fit_photometry` found, band by band.

    Parameters
    ----------
    law_name : str
        ``minnaert`` or ``lunar_lambert``.
    wavelengths : ndarray, shape (band,)
        [nm].
    estimates : ndarray, shape (band, 1 + order)
        k or L [1], then the phase coefficients c1, c2, … [1/deg^n].
    lower, upper : ndarray, shape of `estimates`
        Ends of the intervals.
    scatter : ndarray, shape (band,)
        Robust relative scatter of the pixels about the fit [1]: mostly the ground's own variety.
    pixels : int
        How many pixels were used.
    phase_range : (float, float)
        Smallest and largest phase angle used [deg].
    confidence : float
        Of the intervals.
    """

    law_name: str
    wavelengths: NDArray[np.float64]
    estimates: NDArray[np.float64]
    lower: NDArray[np.float64]
    upper: NDArray[np.float64]
    scatter: NDArray[np.float64]
    pixels: int
    phase_range: tuple[float, float]
    confidence: float

    @property
    def law(self) -> Law:
        """The law with the fitted parameter in each band, as `normalise` takes it."""
        found = dict(zip(self.wavelengths.tolist(), self.estimates[:, 0].tolist(), strict=True))
        return Minnaert(found) if self.law_name == "minnaert" else LunarLambert(found)

    @property
    def phase_function(self) -> ExponentialPhase | None:
        """The fitted phase function of each band; None where none was asked for."""
        if self.estimates.shape[1] == 1:
            return None
        rows = zip(self.wavelengths.tolist(), self.estimates[:, 1:].tolist(), strict=True)
        least, most = self.phase_range
        return ExponentialPhase(
            {nm: tuple(row) for nm, row in rows}, max(0.0, math.floor(least)), min(180.0, math.ceil(most))
        )

    def table(self) -> pd.DataFrame:
        """One row a band: each parameter with the ends of its interval, and the scatter."""
        import pandas as pd

        names = ["k" if self.law_name == "minnaert" else "L"]
        names += [f"c{power}" for power in range(1, self.estimates.shape[1])]
        columns: dict[str, Any] = {"wavelength": self.wavelengths}
        for place, name in enumerate(names):
            columns[name] = self.estimates[:, place]
            columns[f"{name}_lower"] = self.lower[:, place]
            columns[f"{name}_upper"] = self.upper[:, place]
        return pd.DataFrame({**columns, "scatter": self.scatter}).set_index("wavelength")


def fit_photometry(
    cube: xr.DataArray,
    *,
    incidence: ArrayLike | xr.DataArray,
    emission: ArrayLike | xr.DataArray,
    phase: ArrayLike | xr.DataArray,
    law: str = "minnaert",
    order: int = 0,
    shadow: ArrayLike | xr.DataArray | None = None,
    least_cosine: float = 0.2,
    confidence: float = 0.95,
    most_pixels: int = 100_000,
) -> PhotometricFit:
    """Minnaert's k or the lunar-Lambert L, and where asked a phase function, from a scene of one kind of ground.

    Fits ``ln(I/F) = a + ln D(i, e, g; k or L) + c1·g + c2·g² + …`` to each band by Huber's estimator, which deposits of
    another brightness hardly move. The ground's brightness must not go with its slope.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectance that says which quantity it is.
    incidence, emission, phase : float or array_like, shape of one band
        Angles [deg], as for `normalise`.
    law : {"minnaert", "lunar_lambert"}
        Whose parameter is fitted.
    order : int
        How many phase coefficients are fitted with it, 0 to 3.
    shadow : array_like of bool, shape of one band, optional
        True where a pixel lies in cast shadow.
    least_cosine : float
        Pixels with μ0 or μ below it are left out [1].
    confidence : float
        Of the intervals.
    most_pixels : int
        Larger scenes are thinned evenly to about this many pixels.

    Returns
    -------
    PhotometricFit
        Its `law` and `phase_function` are what `normalise` takes. The intervals rest on blocks of the scene (8 × 8), within
        which pixels may resemble their neighbours as they like (sandwich estimate clustered by block, Student's t).

    Raises
    ------
    ValueError, TypeError
        If the geometry varies too little to tell the parameters, with the reason; if fewer than 500 pixels are usable; if the
        quantity is not known or angles are bad.

    References
    ----------
    Huber 1981, Robust Statistics, doi:10.1002/0471725250; clustered covariance: Liang & Zeger 1986, Biometrika 73, 13,
    doi:10.1093/biomet/73.1.13.

    Examples
    --------
    >>> import bandratio as br
    >>> rng = np.random.default_rng(1)
    >>> i, e = rng.uniform(0, 70, (2, 40, 40))
    >>> mu0, mu = np.cos(np.deg2rad([i, e]))
    >>> image = 0.1 * mu0**0.6 * mu ** (0.6 - 1) * np.exp(rng.normal(0, 0.02, i.shape))
    >>> cube = br.as_cube(image[None], [700], quantity="radiance_factor")
    >>> found = fit_photometry(cube, incidence=i, emission=e, phase=i + e)
    >>> round(float(found.estimates[0, 0]), 2)
    0.6
    """
    cube = require_cube(cube)
    one_of("law", law, _FITTED)
    if order not in (0, 1, 2, 3):
        raise ValueError(f"order is how many phase coefficients are fitted, 0 to 3, got {order!r}")
    level = open_fraction("confidence", confidence)
    if not 0.01 <= least_cosine < 1:
        raise ValueError(f"least_cosine must lie from 0.01 to below 1, got {least_cosine:g}")
    if "normalisation" in cube.attrs:
        raise ValueError("the cube is already normalised; fit the cube as it was measured")
    held = require_quantity(
        cube,
        "radiance_factor",
        "reflectance_factor",
        "bidirectional_reflectance",
        "brdf",
        what="fit_photometry",
    )
    angles = {
        name: angle_plane(name, plane, cube)
        for name, plane in (("incidence", incidence), ("emission", emission), ("phase", phase))
    }
    refuse_radians(**angles)
    if shadow is not None:
        dark = shadow if isinstance(shadow, xr.DataArray) else np.asarray(shadow)
        angles["shadow"] = angle_plane("shadow", dark.astype(np.uint8), cube)
    R, planes, block = _thinned(cube, angles, most_pixels)
    mu0, mu = (np.cos(np.deg2rad(planes[name])) for name in ("incidence", "emission"))
    if held in ("reflectance_factor", "brdf"):
        R = R * mu0  # what is left is a constant factor, which goes into a
    usable = (mu0 >= least_cosine) & (mu >= least_cosine) & np.isfinite(planes["phase"])
    usable &= np.isfinite(R).all(axis=0) & (R > 0).all(axis=0)
    if "shadow" in planes:
        usable &= planes["shadow"] == 0
    if usable.sum() < _LEAST_PIXELS:
        raise ValueError(
            f"only {int(usable.sum())} pixels are lit, seen and complete; a fit wants {_LEAST_PIXELS} or more"
        )
    mu0, mu, g, block = mu0[usable], mu[usable], planes["phase"][usable].astype(float), block[usable]
    _refuse_little_variety(law, mu0, mu, g, order)
    found = [_fit_band(np.log(row[usable]), law, mu0, mu, g, order, block, level) for row in R]
    values, half, scatter = (np.array(part) for part in zip(*found, strict=True))
    return PhotometricFit(
        law,
        cube["wavelength"].to_numpy().astype(float),
        values,
        values - half,
        values + half,
        scatter,
        int(usable.sum()),
        (float(g.min()), float(g.max())),
        level,
    )


def _thinned(
    cube: xr.DataArray, planes: dict[str, xr.DataArray], most: int
) -> tuple[NDArray, dict[str, NDArray], NDArray]:
    """Reflectances (band, pixel), planes (pixel,) and block of every pixel, of every n-th pixel along each side."""
    dims = cube.dims[1:]
    if not dims:
        raise ValueError("one spectrum has one geometry; a fit wants many pixels")
    pixels = math.prod(cube.sizes[dim] for dim in dims)
    step = max(1, math.ceil((pixels / most) ** (1 / len(dims))))
    thin = {dim: slice(None, None, step) for dim in dims}
    values = cube.isel(thin).to_numpy().astype(float)
    shape = values.shape[1:]
    flat = {
        name: np.broadcast_to(
            plane.isel({dim: thin[dim] for dim in plane.dims}).to_numpy().astype(float), shape
        ).reshape(-1)
        for name, plane in planes.items()
    }
    sides = _BLOCKS_A_SIDE if len(dims) > 1 else _BLOCKS_A_SIDE**2
    labels = [np.minimum(np.arange(size) * sides // size, sides - 1) for size in shape]
    block = np.zeros(shape, dtype=np.int64)
    for axis, label in enumerate(labels):
        block = block * sides + label.reshape([-1 if k == axis else 1 for k in range(len(shape))])
    return values.reshape(values.shape[0], -1), flat, block.reshape(-1)


def _log_disk(law: str, parameter: float, mu0: Plane, mu: Plane) -> Plane:
    if law == "minnaert":
        return parameter * np.log(mu0 * mu) - np.log(mu)
    return np.log(np.maximum(mu0 * (2 * parameter / (mu0 + mu) + 1 - parameter), 1e-12))


def _by_parameter(law: str, parameter: float, mu0: Plane, mu: Plane) -> Plane:
    """∂ln D/∂k or ∂ln D/∂L."""
    if law == "minnaert":
        return np.log(mu0 * mu)
    seeliger = 2 / (mu0 + mu)
    return (seeliger - 1) / np.maximum(parameter * seeliger + 1 - parameter, 1e-6)


def _refuse_little_variety(law: str, mu0: NDArray, mu: NDArray, g: NDArray, order: int) -> None:
    """Refuse a geometry from which the parameters cannot be told, before any reflectance is looked at."""
    name = "k" if law == "minnaert" else "L"
    column = _by_parameter(law, 0.6, mu0, mu)
    span = float(np.subtract(*np.quantile(column, [0.95, 0.05])))
    incidence, emission = (np.degrees(np.arccos(np.quantile(mu_, [0.95, 0.05]))) for mu_ in (mu0, mu))
    if span < 0.1:
        raise ValueError(
            f"the geometry varies too little to tell {name}: nine tenths of the pixels have incidence {incidence[0]:.1f} "
            f"to {incidence[1]:.1f}° and emission {emission[0]:.1f} to {emission[1]:.1f}°, over which ln D changes by "
            f"{span:.2g} per unit of {name} (0.1 is wanted); take a scene with more relief, or a published {name}"
        )
    if order == 0:
        return
    low, high = np.quantile(g, [0.05, 0.95])
    if high - low < 5:
        raise ValueError(
            f"phase varies too little for a phase function: {low:.1f} to {high:.1f}° (5° is wanted); fit with order=0, or "
            "join images at several phase angles along y"
        )
    others = np.stack([np.ones_like(g), *((g / 90) ** power for power in range(1, order + 1))], axis=1)
    residual = column - others @ np.linalg.lstsq(others, column, rcond=None)[0]
    told_apart = float(residual.var() / column.var())
    if told_apart < 0.02:
        raise ValueError(
            f"{name} and the phase function cannot be told apart: slope and phase vary together ({1 - told_apart:.1%} of "
            "how ln D varies with it follows the phase angle, as on level ground seen from above); fit with order=0, or "
            "join images at several phase angles along y"
        )


def _fit_band(
    log_R: NDArray,
    law: str,
    mu0: NDArray,
    mu: NDArray,
    g: NDArray,
    order: int,
    block: NDArray,
    confidence: float,
) -> tuple[NDArray, NDArray, float]:
    """Parameters, half-widths of their intervals, robust scatter."""
    from scipy.optimize import least_squares
    from scipy.stats import median_abs_deviation, t

    # phase in units of 90°, so that all parameters are of order one
    powers = np.stack([(g / 90) ** power for power in range(order + 1)], axis=1)

    def residuals(theta: NDArray) -> Plane:
        return log_R - _log_disk(law, float(theta[0]), mu0, mu) - powers @ theta[1:]

    def jacobian(theta: NDArray) -> NDArray:
        return -np.column_stack([_by_parameter(law, float(theta[0]), mu0, mu), powers])

    theta = np.array([0.6, float(np.median(log_R - _log_disk(law, 0.6, mu0, mu))), *[0.0] * order])
    scale = max(float(median_abs_deviation(residuals(theta), scale="normal")), 1e-9)
    for _ in range(3):
        theta = least_squares(residuals, theta, jacobian, loss="huber", f_scale=_HUBER * scale).x
        scale = max(float(median_abs_deviation(residuals(theta), scale="normal")), 1e-9)
    r, J = residuals(theta), jacobian(theta)
    psi = np.clip(r, -_HUBER * scale, _HUBER * scale)
    inside = np.abs(r) < _HUBER * scale
    bread = np.linalg.inv(J[inside].T @ J[inside])
    labels, place = np.unique(block, return_inverse=True)
    scores = np.stack([np.bincount(place, column * psi, labels.size) for column in J.T], axis=1)
    covariance = bread @ (scores.T @ scores) @ bread * labels.size / (labels.size - 1)
    half = np.sqrt(np.diag(covariance)) * t.ppf((1 + confidence) / 2, labels.size - 1)
    # the level a is of no use to the normalisation
    unit = np.array([1.0, *(90.0**-power for power in range(1, order + 1))])
    kept = [0, *range(2, order + 2)]
    return theta[kept] * unit, half[kept] * unit, scale
