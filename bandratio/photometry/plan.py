"""A normalisation with everything checked and spelled out for one cube, before any value is touched."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import ArrayLike, NDArray

from .._checks import non_negative, suggestion
from ..bands import TOLERANCE_NM
from ..cube import is_lazy, require_cube
from .angles import Geometry, angle_plane, refuse_impossible, refuse_radians
from .correction import REASONS, SLACK_DEG, Correction
from .hapke import Hapke
from .laws import LAWS, Law, law_of
from .phase import PhaseFunction
from .quantities import multiplied, per_bidirectional, require_quantity

__all__ = ["SPREAD", "Plan", "plan_normalisation"]

#: The two ends between which particulate surfaces lie: single scattering (dark grains) and Lambert's (bright ones).
SPREAD = ("lommel_seeliger", "lambert")


@dataclass(frozen=True, eq=False)
class Plan:
    """What `normalise` is to do with one cube.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        The cube.
    planes : mapping of str to DataArray
        ``incidence``, ``emission``, ``phase`` [deg], and where there are any ``shadow`` and ``slope_sigma`` [deg].
    correction : Correction
        The arithmetic.
    description : str
        What the attribute `normalisation` says (JSON).
    """

    cube: xr.DataArray
    planes: Mapping[str, xr.DataArray]
    correction: Correction
    description: str

    @property
    def lazy(self) -> bool:
        """True where the cube or a plane is still to be computed."""
        return is_lazy(self.cube) or any(is_lazy(plane) for plane in self.planes.values())

    @property
    def linear(self) -> bool:
        """True where each value is multiplied by a factor that does not depend on it."""
        return not any(isinstance(law, Hapke) for law in self.correction.laws)

    def labelled(self, values: Any, flag: Any, gain: Any = None, factor: Any = None) -> xr.DataArray:
        """The cube with other values and the coordinates of the standard geometry.

        Without `gain` and `factor`, what they hold has been used already and is left out.
        """
        dims = self.cube.dims[1:]
        target = self.correction.target
        angles = (target.incidence, target.emission, target.phase)
        normalised = self.cube.copy(data=values)
        normalised.attrs = {**self.cube.attrs, "normalisation": self.description}
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
        for name, angle in zip(("incidence", "emission", "phase"), angles, strict=True):
            coords[name] = (
                (),
                angle,
                {"units": "degree", "long_name": f"{name} angle of the standard geometry"},
            )
        if factor is not None:
            bands = () if self.correction.bands_alike else ("wavelength",)
            coords["brightness_factor"] = multiplied(self.cube, xr.DataArray(factor, dims=(*bands, *dims)))
        if gain is not None and self.correction.has_sigma:
            if "pixel_gain" in self.cube.coords:
                # an error that the cube brought is another one
                gain = np.hypot(gain, self.cube.coords["pixel_gain"].transpose(*dims).data)
            coords["pixel_gain"] = (
                dims,
                gain,
                {
                    "units": "1",
                    "long_name": "relative standard uncertainty of the normalisation, common to the bands of a pixel",
                },
            )
        if str(self.cube.coords["quantity"].values) == "zero_phase_albedo":
            normalised = normalised.assign_coords(quantity="reflectance_factor")
        return normalised.drop_vars(["incidence", "emission", "phase"], errors="ignore").assign_coords(coords)


def plan_normalisation(
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
) -> Plan:
    """Check the arguments of `normalise` and spell them out for the cube.

    Raises
    ------
    ValueError, TypeError
        As `normalise` says.
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
    planes = dict(angles)
    if shadow_plane is not None:
        planes["shadow"] = shadow_plane
    if np.ndim(sigma_plane) > 0:
        planes["slope_sigma"] = sigma_plane
    told: dict[str, Any] = {
        "law": chosen.describe(),
        "to": [target.incidence, target.emission, target.phase],
        "phase_function": None if phase_function is None else phase_function.describe(),
        "slope_sigma_deg": sigma_plane if np.ndim(sigma_plane) == 0 else "map",
        "spread": [_law(other).name for other in spread or ()],
        "least_mu0": correction.least_mu0,
        "least_mu": correction.least_mu,
    }
    return Plan(cube, planes, correction, json.dumps(told))


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
