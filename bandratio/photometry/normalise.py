"""One geometry for every pixel: the labelled layer over :mod:`bandratio.photometry.correction`."""

from __future__ import annotations

import json
from collections.abc import Sequence
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import non_negative, suggestion
from ..bands import TOLERANCE_NM
from ..cube import is_lazy, require_cube
from .angles import Geometry, angle_plane, refuse_impossible, refuse_radians
from .correction import REASONS, SLACK_DEG, Correction
from .execution import at_once, lazily
from .hapke import Hapke
from .laws import LAWS, Law, law_of
from .phase import PhaseFunction
from .quantities import multiplied, per_bidirectional, require_quantity

__all__ = ["SPREAD", "masked_pixels", "normalise"]

#: The two ends between which particulate surfaces lie: single scattering (dark grains) and Lambert's (bright ones).
SPREAD = ("lommel_seeliger", "lambert")


def normalise(
    cube: xr.DataArray,
    *,
    incidence: ArrayLike | xr.DataArray,
    emission: ArrayLike | xr.DataArray,
    phase: ArrayLike | xr.DataArray,
    law: str | Law = "lunar_lambert",
    to: Geometry | Sequence[float] = (30, 0, 30),
    phase_function: PhaseFunction | None = None,
    slope_sigma: ArrayLike | xr.DataArray = 0.0,
    spread: Sequence[str | Law] | None = SPREAD,
    shadow: ArrayLike | xr.DataArray | None = None,
    least_mu0: float = 0.1,
    least_mu: float = 0.1,
    tolerance: float = TOLERANCE_NM,
) -> xr.DataArray:
    """Reflectances as they would be seen at one standard geometry.

    ``R(i0, e0, g0) = R · f(g0)·D(i0, e0, g0) / (f(g)·D(i, e, g))``, with D the law's disk function and f a phase function.
    Hapke's law finds each value's single-scattering albedo and shows it again at the standard geometry.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectance that says which quantity it is (coordinate `quantity`); the result keeps the quantity. A reflectance
        factor must have been made with the same `incidence`.
    incidence, emission, phase : float or array_like, shape of one band
        Angles at every pixel [deg], measured from the normal of the surface as it lies (`terrain_geometry` computes
        them). NaN is missing.
    law : str or Law
        ``lambert``, ``lommel_seeliger``, ``lunar_lambert``, ``minnaert``, ``akimov``, ``hapke``, or one with parameters:
        ``Minnaert(k={480: 0.6, …})``, ``LunarLambert(L=0.7)``, ``Hapke(b=0.3, c=0.4)``.
    to : (incidence, emission, phase)
        The standard geometry [deg].
    phase_function : PhaseFunction, optional
        `ExponentialPhase` or `TabulatedPhase`, per band where its values are. None: brightness is taken not to fall with
        phase beyond what the law holds, which is right only where all phase angles are alike, and never where laboratory
        thresholds are to be met from afar.
    slope_sigma : float or array_like, shape of one band
        Standard error of the surface's slope along any one direction [deg].
    spread : sequence of str or Law, optional
        Laws that bound what the surface may do: the range of their factors and the chosen law's, taken as rectangular,
        enters the sigma. None or empty: the law is taken as true.
    shadow : array_like of bool, shape of one band, optional
        True where a pixel lies in cast shadow.
    least_mu0, least_mu : float
        Cosines of incidence and emission below which a pixel is masked [1]; 0.1 is 84° (common practice, no source).
    tolerance : float
        Largest distance between a band and the wavelength of a law's value [nm].

    Returns
    -------
    DataArray
        The cube at the standard geometry, lazy where `cube` is, NaN where masked. Coordinates: `pixel_gain` [1], the
        relative standard uncertainty of the correction, common to all bands of a pixel and new in each pixel, which
        ``parameters`` takes into the sigmas (it cancels in pure ratios); `brightness_factor` [1], what each reflectance was
        multiplied by, along `wavelength` too only where the bands differ: the errors that ``Noise`` states for the cube as
        it came count by it at the standard geometry; `geometry_flag`, why a pixel is masked;
        `incidence`, `emission`, `phase` of the standard geometry [deg]. Attribute `normalisation` (JSON) says what was
        done.

    Raises
    ------
    ValueError, TypeError
        If the quantity is not known, angles are not in degrees or on another grid, they cannot belong together, or the
        cube is already normalised.

    Notes
    -----
    Hapke's law is not linear: its `brightness_factor` is the local derivative ∂R(i0, e0, g0)/∂R of each value, which makes
    `random` and `band_offset` right. What is a fraction of R is taken to stay that fraction, and photon noise to be
    shot²·R: for surfaces of reflectance below 0.15 both hold to a few percent of the sigma.

    Where the law has another parameter in each band, a slope error does not cancel wholly in ratios; the part common to
    the bands (their mean) is what `pixel_gain` holds. Between k = 0.60 and 0.65, what is left of a slope error of 1° at 45° incidence
    is 0.1 % of the ratio.

    References
    ----------
    Shkuratov et al. 2011, Planet. Space Sci. 59, 1326, doi:10.1016/j.pss.2011.06.011; each law's own source stands in its
    class.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube([[0.05, 0.1]], [700], quantity="radiance_factor")
    >>> flat = normalise(cube, incidence=[60, 0], emission=0, phase=[60, 0], law="lambert", to=(0, 0, 0))
    >>> flat.values.round(4)
    array([[0.1, 0.1]])
    """
    cube = require_cube(cube)
    if "normalisation" in cube.attrs:
        raise ValueError(
            f"the cube is already normalised ({cube.attrs['normalisation']}); start from the cube as it was measured"
        )
    chosen = _law(law)
    target = Geometry.of(to)
    held = require_quantity(cube, what="normalise")
    angles = {
        name: angle_plane(name, plane, cube)
        for name, plane in (("incidence", incidence), ("emission", emission), ("phase", phase))
    }
    refuse_radians(**angles)
    refuse_impossible(angles["incidence"], angles["emission"], angles["phase"], SLACK_DEG)
    if held == "zero_phase_albedo":
        _check_zero_phase(angles, phase_function)
    sigma_plane = _slope_sigma(slope_sigma, cube)
    shadow_plane = None if shadow is None else _shadow(shadow, cube)
    centres = cube["wavelength"].values
    correction = Correction(
        laws=tuple(chosen.for_bands(centres, tolerance)),
        phase_functions=None
        if phase_function is None
        else _phase_functions(phase_function, centres, tolerance, chosen),
        target=target,
        per_mu0=held in ("reflectance_factor", "brdf", "zero_phase_albedo"),
        per_reff=_per_reff(held),
        slope_sigma_deg=float(sigma_plane) if np.ndim(sigma_plane) == 0 else 1.0,
        spread=_spread(spread, chosen, centres, tolerance),
        least_mu0=_least("least_mu0", least_mu0),
        least_mu=_least("least_mu", least_mu),
    )
    if correction.phase_functions is not None:
        for function in correction.phase_functions:
            if not function.value(np.array(target.phase)) > 0:
                raise ValueError(
                    f"the phase function does not reach the standard geometry's phase of {target.phase:g}°; give one "
                    "that does, or another to=(incidence, emission, phase)"
                )
    per_pixel = None if np.ndim(sigma_plane) == 0 else sigma_plane
    planes = dict(angles)
    if shadow_plane is not None:
        planes["shadow"] = shadow_plane
    if per_pixel is not None:
        planes["slope_sigma"] = per_pixel
    lazy = is_lazy(cube) or any(is_lazy(plane) for plane in planes.values())
    values, flag, gain, factor = (lazily if lazy else at_once)(cube, planes, correction)
    return _labelled(
        cube,
        values,
        flag,
        gain,
        factor,
        correction,
        chosen,
        phase_function,
        slope_sigma=sigma_plane,
        spread=spread,
    )


def masked_pixels(labelled: xr.DataArray | xr.Dataset) -> dict[str, int]:
    """How many pixels were used, and how many masked for which reason, in a normalised cube or its maps.

    Parameters
    ----------
    labelled : DataArray or Dataset
        With the coordinate `geometry_flag`; a lazy one is streamed.

    Returns
    -------
    dict of str to int
        ``used`` first, then the reasons that occur.

    Raises
    ------
    ValueError
        If nothing was normalised here.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube([[0.05, 0.1]], [700], quantity="radiance_factor")
    >>> masked_pixels(normalise(cube, incidence=[60, 89], emission=0, phase=[60, 89]))
    {'used': 1, 'sun_too_low': 1}
    """
    if "geometry_flag" not in labelled.coords:
        raise ValueError(
            "nothing was normalised here: there is no coordinate geometry_flag; use br.normalise first"
        )
    data = labelled.coords["geometry_flag"].data
    if hasattr(data, "dask"):
        import dask.array as da

        counts = da.bincount(data.ravel().astype(np.int64), minlength=len(REASONS)).compute()
    else:
        counts = np.bincount(np.asarray(data).ravel(), minlength=len(REASONS))
    return {
        reason: int(count) for reason, count in zip(REASONS, counts, strict=True) if count or reason == "used"
    }


def _law(law: str | Law) -> Law:
    if isinstance(law, str) and law not in LAWS:
        if law == Hapke.name:
            return Hapke()
        raise ValueError(f"unknown photometric law {law!r}{suggestion(law, [*LAWS, Hapke.name])}")
    return law_of(law)


def _per_reff(quantity: str) -> float:
    """The quantity per REFF, or per I/F where it is not divided by μ0."""
    if quantity in ("reflectance_factor", "zero_phase_albedo", "radiance_factor"):
        return 1.0
    return float(per_bidirectional(quantity, 1.0)) / np.pi


def _least(name: str, cosine: float) -> float:
    value = non_negative(name, cosine)
    if not 0.01 <= value < 1:
        raise ValueError(
            f"{name} is a cosine from 0.01 to below 1, got {value:g}; nothing is divided by almost zero (0.1 is 84°)"
        )
    return value


def _phase_functions(
    phase_function: PhaseFunction, centres: NDArray, tolerance: float, law: Law
) -> tuple[PhaseFunction, ...]:
    if not isinstance(phase_function, PhaseFunction):
        raise TypeError(
            f"phase_function must be an ExponentialPhase or a TabulatedPhase, got {type(phase_function).__name__}"
        )
    if isinstance(law, Hapke):
        raise ValueError(  # noqa: TRY004  the type is right, the two do not go together
            "Hapke's law holds its own phase function: give b, c, B0 and h instead of phase_function"
        )
    return tuple(phase_function.for_bands(centres, tolerance))


def _check_zero_phase(angles: dict[str, xr.DataArray], phase_function: PhaseFunction | None) -> None:
    if phase_function is None:
        raise ValueError(
            "a zero-phase albedo reaches another geometry only with a phase function (opposition effect); give "
            "phase_function=…"
        )
    plane = angles["phase"]
    if not hasattr(plane.data, "dask") and float(np.nanmax(plane.values)) > 1:
        raise ValueError(
            f"a zero-phase albedo has a phase angle of 0, got up to {float(np.nanmax(plane.values)):g}°; give phase=0 "
            "and emission equal to incidence, or say what the quantity really is"
        )


def _slope_sigma(slope_sigma: Any, cube: xr.DataArray) -> Any:
    if np.ndim(slope_sigma) == 0 and not isinstance(slope_sigma, xr.DataArray):
        value = non_negative("slope_sigma", slope_sigma, "°")
        if value >= 45:
            raise ValueError(f"slope_sigma is a standard error in degrees, well below 45°, got {value:g}°")
        return value
    plane = angle_plane("slope_sigma", slope_sigma, cube)
    return float(plane) if plane.ndim == 0 else plane


def _shadow(shadow: Any, cube: xr.DataArray) -> xr.DataArray:
    labelled = shadow if isinstance(shadow, xr.DataArray) else None
    data = shadow.data if labelled is not None else shadow if hasattr(shadow, "dask") else np.asarray(shadow)
    if data.dtype.kind not in "bui":
        raise TypeError(f"shadow must be true or false for every pixel, got {data.dtype}")
    # the same checks of the grid as for an angle
    plane = labelled.astype(np.uint8) if labelled is not None else data.astype(np.uint8)
    return angle_plane("shadow", plane, cube)


def _spread(
    spread: Sequence[str | Law] | None, chosen: Law, centres: NDArray, tolerance: float
) -> tuple[Law, ...]:
    if isinstance(spread, str):
        raise TypeError(
            f"spread is a list of laws, got the single name {spread!r}; give spread=[{spread!r}, …]"
        )
    laws = [_law(law) for law in spread or ()]
    if any(isinstance(law, Hapke) for law in laws):
        raise ValueError("spread compares disk functions, and Hapke's law has none; leave it out of spread")
    if not laws:
        return ()
    # a law with a parameter per band is represented by its middle band: the spread is common to all bands
    middle = len(centres) // 2
    own = [] if isinstance(chosen, Hapke) else [chosen.for_bands(centres, tolerance)[middle]]
    together = tuple(dict.fromkeys(own + [law.for_bands(centres, tolerance)[middle] for law in laws]))
    return together if len(together) > 1 else ()


def _labelled(
    cube: xr.DataArray,
    values: Any,
    flag: Any,
    gain: Any,
    factor: Any,
    correction: Correction,
    law: Law,
    phase_function: PhaseFunction | None,
    *,
    slope_sigma: Any,
    spread: Sequence[str | Law] | None,
) -> xr.DataArray:
    dims = cube.dims[1:]
    target = correction.target
    told: dict[str, Any] = {
        "law": law.describe(),
        "to": [target.incidence, target.emission, target.phase],
        "phase_function": None if phase_function is None else phase_function.describe(),
        "slope_sigma_deg": slope_sigma if np.ndim(slope_sigma) == 0 else "map",
        "spread": [_law(other).name for other in spread or ()],
        "least_mu0": correction.least_mu0,
        "least_mu": correction.least_mu,
    }
    normalised = cube.copy(data=values)
    normalised.attrs = {**cube.attrs, "normalisation": json.dumps(told)}
    coords: dict[str, Any] = {
        "geometry_flag": (
            dims,
            flag,
            {
                "long_name": "why a pixel is masked by its geometry",
                "flag_values": np.arange(len(REASONS), dtype=np.int8),
                "flag_meanings": " ".join(REASONS),
            },
        )
    }
    for name, angle in zip(("incidence", "emission", "phase"), told["to"], strict=True):
        coords[name] = ((), angle, {"units": "degree", "long_name": f"{name} angle of the standard geometry"})
    bands = () if correction.bands_alike else ("wavelength",)
    coords["brightness_factor"] = multiplied(cube, xr.DataArray(factor, dims=(*bands, *dims)))
    if correction.has_sigma:
        coords["pixel_gain"] = (
            dims,
            gain,
            {
                "units": "1",
                "long_name": "relative standard uncertainty of the normalisation, common to the bands of a pixel",
            },
        )
    if str(cube.coords["quantity"].values) == "zero_phase_albedo":
        normalised = normalised.assign_coords(quantity="reflectance_factor")
    return normalised.drop_vars(["incidence", "emission", "phase"], errors="ignore").assign_coords(coords)
