"""A threshold of one parameter: where it lies, how well it is known, and what it may be held against."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any, Literal

from .._checks import non_negative, one_of

if TYPE_CHECKING:
    import xarray as xr

    from .separation import Separation

__all__ = ["ORIGINS", "Threshold", "as_threshold"]

#: Where a threshold may come from.
ORIGINS = ("laboratory", "scene", "absolute")
#: How far two shoulders may lie apart and still be the same one [nm]: the tolerance of a band's centre.
_SAME_SHOULDER_NM = 15.0


@dataclass(frozen=True)
class Threshold:
    """A value of a parameter that separates wanted from unwanted, with its own standard uncertainty.

    Parameters
    ----------
    value : float
        The threshold, in the parameter's unit.
    sigma : float
        Its standard uncertainty, in the same unit; 0 for a number that is true by definition.
    origin : {"absolute", "laboratory", "scene"}
        ``laboratory``: from labelled spectra. It carries a reflectance quantity, and is refused where the maps hold
        another or an unknown one. ``scene``: from the same scene's own values, so that a gain that the whole scene
        shares cancels. ``absolute``: a number that somebody gives.
    parameter : str
        Name of the parameter, ``""`` for any.
    shoulder : float, optional
        Shoulder band that the parameter was computed with [nm], where it has a choice of shoulders.
    quantity : str, optional
        Reflectance quantity that it holds for (one of ``cube.QUANTITIES``), or ``"any"``.
    separation : Separation, optional
        What it rests on, where it comes from labelled spectra: ROC curve, area, intervals, numbers of specimens.

    Raises
    ------
    ValueError
        If the value is not finite, sigma is negative, or the origin or the shoulder is not one.

    Examples
    --------
    >>> threshold = Threshold(9.0, sigma=0.5, origin="laboratory", parameter="red_slope",
    ...                       quantity="reflectance_factor")
    >>> threshold.check_alike("red_slope", quantity="radiance_factor")
    Traceback (most recent call last):
    ValueError: the laboratory threshold of red_slope holds for reflectance_factor, and the maps hold radiance_factor;
    convert the cube (convert_quantity, normalise), or say that they are alike with
    threshold.for_quantity('radiance_factor')
    >>> threshold.for_quantity("radiance_factor").check_alike("red_slope", quantity="radiance_factor")
    """

    value: float
    sigma: float = 0.0
    origin: Literal["laboratory", "scene", "absolute"] = "absolute"
    parameter: str = ""
    shoulder: float | None = None
    quantity: str | None = None
    separation: Separation | None = field(default=None, compare=False, repr=False)

    def __post_init__(self) -> None:
        try:
            value = float(self.value)
        except (TypeError, ValueError):
            raise TypeError(f"a threshold's value must be a number, got {self.value!r}") from None
        if not abs(value) < float("inf"):
            raise ValueError(f"a threshold's value must be finite, got {value}")
        object.__setattr__(self, "value", value)
        object.__setattr__(self, "sigma", non_negative("a threshold's sigma", self.sigma))
        one_of("a threshold's origin", self.origin, ORIGINS)
        if not isinstance(self.parameter, str):
            raise TypeError(f"a threshold's parameter must be a name, got {self.parameter!r}")
        if self.shoulder is not None:
            shoulder = float(self.shoulder)
            if not 30 <= shoulder < float("inf"):
                raise ValueError(f"a threshold's shoulder must be a wavelength in nm, got {self.shoulder!r}")
            object.__setattr__(self, "shoulder", shoulder)

    def for_quantity(self, quantity: str) -> Threshold:
        """Declare that the threshold holds for another reflectance quantity too: your word that they are alike.

        Parameters
        ----------
        quantity : str
            The quantity of the maps, or ``"any"``.
        """
        return replace(self, quantity=quantity)

    def check_alike(
        self, parameter: str = "", *, quantity: str | None = None, shoulder: float | None = None
    ) -> None:
        """Refuse a parameter, a quantity or a shoulder that this threshold does not hold for.

        Parameters
        ----------
        parameter : str
            Name of the parameter that it is to be held against.
        quantity : str, optional
            Reflectance quantity of the maps; None where they do not say.
        shoulder : float, optional
            Shoulder band of the maps' parameter [nm]; None where it has none.

        Raises
        ------
        ValueError
            If one is unlike, or a laboratory threshold meets maps of unknown quantity.
        """
        title = f"the {self.origin} threshold of {self.parameter or 'any parameter'}"
        if self.parameter and parameter and self.parameter != parameter:
            raise ValueError(f"{title} was given for {parameter}; give one that was made for {parameter}")
        if self.shoulder is not None and shoulder is not None:
            if abs(self.shoulder - shoulder) > _SAME_SHOULDER_NM:
                raise ValueError(
                    f"{title} was made with a shoulder at {self.shoulder:g} nm, and the maps have theirs at "
                    f"{shoulder:g} nm; the two differ from material to material: make the threshold at the cube's "
                    "own bands"
                )
        elif self.origin == "laboratory" and self.shoulder is not None:
            raise ValueError(
                f"{title} was made with a shoulder at {self.shoulder:g} nm, and the maps do not say where theirs "
                "is; give it as the parameter's attribute 'shoulder'"
            )
        elif self.origin == "laboratory" and shoulder is not None:
            raise ValueError(
                f"{title} does not say which shoulder it was made with, and the maps have theirs at {shoulder:g} nm; "
                "give Threshold(…, shoulder=…)"
            )
        self._check_quantity(title, quantity)

    def _check_quantity(self, title: str, quantity: str | None) -> None:
        if self.quantity == "any" or (self.quantity is None and self.origin != "laboratory"):
            return
        if self.quantity is None:
            raise ValueError(
                f"{title} does not say which reflectance quantity it holds for; give Threshold(…, quantity=…), "
                "usually 'reflectance_factor' in a laboratory"
            )
        if quantity is None:
            if self.origin == "laboratory":
                raise ValueError(
                    f"{title} holds for {self.quantity}, and the maps do not say which quantity they hold; give "
                    "quantity=… where the cube is opened, or say that they are alike with "
                    "threshold.for_quantity('any')"
                )
            return
        if quantity != self.quantity:
            raise ValueError(
                f"{title} holds for {self.quantity}, and the maps hold {quantity}; convert the cube "
                "(convert_quantity, normalise), or say that they are alike with "
                f"threshold.for_quantity({quantity!r})"
            )

    def check_map(self, values: xr.DataArray) -> None:
        """Refuse a map that this threshold does not hold for, judged by its name, quantity and shoulder.

        Parameters
        ----------
        values : DataArray
            One parameter of a Dataset of maps, with its coordinate ``quantity`` and attribute ``shoulder``.

        Raises
        ------
        ValueError
            As :meth:`check_alike`.
        """
        quantity = values.coords["quantity"].item() if "quantity" in values.coords else None
        shoulder = values.attrs.get("shoulder")
        self.check_alike(
            str(values.name or ""),
            quantity=None if quantity is None else str(quantity),
            shoulder=None if shoulder is None else float(shoulder),
        )

    def describe(self) -> dict[str, Any]:
        """Tell what the threshold is in a mapping that JSON can hold (the record in a result's attributes)."""
        told: dict[str, Any] = {
            "parameter": self.parameter,
            "value": self.value,
            "sigma": self.sigma,
            "origin": self.origin,
            "shoulder": self.shoulder,
            "quantity": self.quantity,
        }
        if self.separation is not None:
            told["separation"] = self.separation.describe()
        return told

    def check_direction(self, direction: Literal["above", "below"]) -> None:
        """Refuse to be used on the side where the unwanted lie, where that is known from labelled spectra.

        Parameters
        ----------
        direction : {"above", "below"}
            Where values count as wanted.

        Raises
        ------
        ValueError
            If the wanted lay on the other side.
        """
        if self.separation is not None and self.separation.direction != direction:
            raise ValueError(
                f"the {self.origin} threshold of {self.parameter} was made for wanted values "
                f"{self.separation.direction} it, and values {direction} it are asked for; make one with wanted and "
                "unwanted exchanged, or give the number alone"
            )

    @classmethod
    def from_description(cls, told: Mapping[str, Any]) -> Threshold:
        """Make the threshold that :meth:`describe` told of; its separation is without the curve."""
        known = ("value", "sigma", "origin", "parameter", "shoulder", "quantity")
        if "value" not in told:
            raise ValueError(f"a threshold's description needs value, got {', '.join(told)}")
        rests_on = told.get("separation")
        return cls(
            **{name: told[name] for name in known if name in told},
            separation=None if rests_on is None else _separation_of(rests_on),
        )


def _separation_of(told: Mapping[str, Any]) -> Separation:
    from .separation import Separation

    return Separation.from_description(told)


def as_threshold(value: float | Threshold, parameter: str = "") -> Threshold:
    """Take a plain number for an absolute threshold without uncertainty, and a `Threshold` as it is.

    Parameters
    ----------
    value : float or Threshold
        What the user gave.
    parameter : str
        The parameter that it is meant for.

    Raises
    ------
    TypeError
        If it is neither.

    Examples
    --------
    >>> as_threshold(0.12, "reflectance_700")
    Threshold(value=0.12, sigma=0.0, origin='absolute', parameter='reflectance_700', shoulder=None, quantity=None)
    """
    if isinstance(value, Threshold):
        return value
    if isinstance(value, (bool, str)) or not hasattr(value, "__float__"):
        raise TypeError(
            f"a threshold of {parameter or 'a parameter'} must be a number or a Threshold, got {value!r}"
        )
    return Threshold(float(value), parameter=parameter)
