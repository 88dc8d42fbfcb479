"""Phase functions f(g): how brightness falls with the phase angle, for each band."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .._checks import listed
from ..bands import TOLERANCE_NM, values_per_band

__all__ = ["ExponentialPhase", "PhaseFunction", "TabulatedPhase"]


class PhaseFunction:
    """What every phase function can do: give f(g) of one band. Only its ratio between two angles matters."""

    def for_bands(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> list[PhaseFunction]:
        """The phase function of each of the given bands [nm]."""
        raise NotImplementedError

    def value(self, phase_deg: ArrayLike) -> NDArray:
        """f(g) of one band at phase angles [deg]; NaN where it is not defined."""
        raise NotImplementedError

    def describe(self) -> dict[str, Any]:
        """For attributes and reports."""
        raise NotImplementedError


@dataclass(frozen=True)
class ExponentialPhase(PhaseFunction):
    """ln f(g) = c1·g + c2·g² + …, with g in degrees: always positive.

    Parameters
    ----------
    coefficients : sequence of float, or mapping of wavelength to sequence
        c1, c2, … [1/deg, 1/deg², …]; one set for all bands or ``{nm: (c1, c2, …)}``.
    least_deg, most_deg : float
        Range of phase angles it was fitted on [deg]; outside it, pixels are masked.

    Raises
    ------
    ValueError
        If there are no coefficients, one is not finite, or the range is empty.

    References
    ----------
    The exponential of a polynomial in g is the usual empirical form for regolith, e.g. Takir et al. 2015, Icarus 252,
    393, doi:10.1016/j.icarus.2015.02.006 (from memory).

    Examples
    --------
    >>> f = ExponentialPhase((-0.02, 1e-4))
    >>> round(float(f.value(30)), 4)
    0.6005
    """

    coefficients: Any
    least_deg: float = 0.0
    most_deg: float = 180.0

    def __post_init__(self) -> None:
        sets = (
            list(self.coefficients.values())
            if isinstance(self.coefficients, Mapping)
            else [self.coefficients]
        )
        for numbers in sets or [()]:
            array = np.asarray(numbers, dtype=float)
            if array.ndim != 1 or array.size == 0 or not np.isfinite(array).all():
                raise ValueError(
                    f"a phase function needs finite coefficients (c1, c2, …) per degree, got {numbers!r}"
                )
        _check_range(self.least_deg, self.most_deg)

    def for_bands(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> list[PhaseFunction]:
        """The phase function of each of the given bands [nm]."""
        bands = np.asarray(centres, dtype=float)
        if not isinstance(self.coefficients, Mapping):
            return [self] * bands.size
        sets = list(self.coefficients.values())
        index = values_per_band(
            "the phase function",
            dict(zip(self.coefficients, range(len(sets)), strict=True)),
            bands,
            tolerance,
        )
        return [ExponentialPhase(tuple(sets[int(i)]), self.least_deg, self.most_deg) for i in index]

    def value(self, phase_deg: ArrayLike) -> NDArray:
        """f(g) at phase angles [deg]; NaN outside the range it was fitted on."""
        g = np.asarray(phase_deg)
        if g.dtype.kind != "f":
            g = g.astype(float)
        exponent = np.zeros_like(g)
        for coefficient in reversed(tuple(self.coefficients)):
            exponent = (exponent + g.dtype.type(coefficient)) * g
        value: NDArray = np.exp(exponent)
        if self.least_deg > 0 or self.most_deg < 180:
            value = np.where((g >= self.least_deg) & (g <= self.most_deg), value, np.nan)
        return value

    def describe(self) -> dict[str, Any]:
        """For attributes and reports."""
        told: Any = (
            {f"{nm:g}": list(c) for nm, c in self.coefficients.items()}
            if isinstance(self.coefficients, Mapping)
            else list(self.coefficients)
        )
        return {"form": "exponential", "coefficients": told, "range_deg": [self.least_deg, self.most_deg]}


@dataclass(frozen=True)
class TabulatedPhase(PhaseFunction):
    """A measured phase curve, linear between its points; pixels outside its range are masked.

    Parameters
    ----------
    phase_deg : sequence of float
        Phase angles, ascending [deg].
    values : sequence of float, or mapping of wavelength to sequence
        f at those angles, above zero, on any scale: one curve for all bands or ``{nm: curve}``.

    Raises
    ------
    ValueError
        If the angles do not ascend, or a value is missing or not positive.

    Examples
    --------
    >>> float(TabulatedPhase((0, 30, 60), (1.0, 0.6, 0.4)).value(45))
    0.5
    """

    phase_deg: Sequence[float]
    values: Any

    def __post_init__(self) -> None:
        angles = np.asarray(self.phase_deg, dtype=float)
        if angles.ndim != 1 or angles.size < 2 or not (np.diff(angles) > 0).all():
            raise ValueError(
                f"phase_deg must be two or more ascending angles in degrees, got {self.phase_deg!r}"
            )
        _check_range(float(angles[0]), float(angles[-1]))
        for curve in self.values.values() if isinstance(self.values, Mapping) else [self.values]:
            array = np.asarray(curve, dtype=float)
            if array.shape != angles.shape:
                raise ValueError(
                    f"a phase curve needs {angles.size} values, one for each angle, got {array.size}"
                )
            if not (np.isfinite(array) & (array > 0)).all():
                raise ValueError(f"a phase curve must be positive and finite, got {listed(array.tolist())}")

    def for_bands(self, centres: ArrayLike, tolerance: float = TOLERANCE_NM) -> list[PhaseFunction]:
        """The phase function of each of the given bands [nm]."""
        bands = np.asarray(centres, dtype=float)
        if not isinstance(self.values, Mapping):
            return [self] * bands.size
        curves = list(self.values.values())
        index = values_per_band(
            "the phase function", dict(zip(self.values, range(len(curves)), strict=True)), bands, tolerance
        )
        return [TabulatedPhase(self.phase_deg, tuple(curves[int(i)])) for i in index]

    def value(self, phase_deg: ArrayLike) -> NDArray:
        """f(g) at phase angles [deg]; NaN outside the table."""
        g = np.asarray(phase_deg)
        found = np.interp(g, self.phase_deg, self.values, left=np.nan, right=np.nan)
        return np.asarray(found, dtype=g.dtype if g.dtype.kind == "f" else float)

    def describe(self) -> dict[str, Any]:
        """For attributes and reports."""
        told: Any = (
            {f"{nm:g}": list(map(float, c)) for nm, c in self.values.items()}
            if isinstance(self.values, Mapping)
            else list(map(float, self.values))
        )
        return {"form": "table", "phase_deg": list(map(float, self.phase_deg)), "values": told}


def _check_range(least: float, most: float) -> None:
    if not 0 <= least < most <= 180:
        raise ValueError(
            f"a phase function's range must lie within 0 and 180°, the lower end first, got {least:g} to {most:g}°"
        )
