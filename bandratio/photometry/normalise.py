"""One geometry for every pixel: the labelled layer over :mod:`bandratio.photometry.correction`."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike

from ..bands import TOLERANCE_NM
from .angles import Geometry
from .correction import REASONS
from .execution import at_once, lazily
from .laws import Law
from .phase import PhaseFunction
from .plan import SPREAD, plan_normalisation

__all__ = ["masked_pixels", "normalise"]


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
    shot²·R: for reflectances below 0.15 the former holds to 9 % and the latter's sigma to 5 %, checked up to incidence 72°.

    Where the law has another parameter in each band, a slope error does not cancel wholly in ratios; the part common to
    the bands (their mean) is what `pixel_gain` holds. Between k = 0.60 and 0.65, what is left of a slope error of 1° at
    45° incidence is 0.1 % of the ratio.

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
    made = plan_normalisation(
        cube,
        incidence=incidence,
        emission=emission,
        phase=phase,
        law=law,
        to=to,
        phase_function=phase_function,
        slope_sigma=slope_sigma,
        spread=spread,
        shadow=shadow,
        least_mu0=least_mu0,
        least_mu=least_mu,
        tolerance=tolerance,
    )
    values, flag, gain, factor = (lazily if made.lazy else at_once)(made.cube, made.planes, made.correction)
    return made.labelled(values, flag, gain, factor)


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
