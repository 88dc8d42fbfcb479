"""How well one parameter tells two groups of labelled spectra apart, and how well that is known."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np

__all__ = ["Separation"]


@dataclass(frozen=True)
class Separation:
    """What a threshold from labelled spectra rests on.

    Parameters
    ----------
    direction : {"above", "below"}
        Side of the threshold on which the wanted group lies.
    area : float
        Area under the ROC curve: the probability that a wanted specimen lies further on the wanted side than an
        unwanted one (0.5: told apart no better than by a coin).
    area_interval : (float, float)
        95 % interval of the area: the bootstrap over specimens, widened to the one that holds for few specimens and
        for separated groups (Newcombe 2006).
    value_interval : (float, float)
        95 % bootstrap interval over specimens of the threshold's value.
    detection_rate, false_alarm_rate : float
        Share of the wanted, and of the unwanted, on the wanted side of the threshold.
    n_wanted, n_unwanted : int
        Numbers of specimens (several grain sizes of one rock are one specimen).
    curve : ndarray, shape (2, point)
        The ROC curve: false alarm rates, detection rates.
    findings : tuple of str
        What a user must know before relying on it, in plain sentences; empty where nothing is wrong.
    """

    direction: str
    area: float
    area_interval: tuple[float, float]
    value_interval: tuple[float, float]
    detection_rate: float
    false_alarm_rate: float
    n_wanted: int
    n_unwanted: int
    curve: np.ndarray = field(repr=False, compare=False)
    findings: tuple[str, ...] = ()

    def describe(self) -> dict[str, Any]:
        """Tell what the separation is, without the curve, in a mapping that JSON can hold."""
        return {
            name: list(value) if isinstance(value, tuple) else value
            for name, value in vars(self).items()
            if name != "curve"
        }

    @classmethod
    def from_description(cls, told: Mapping[str, Any]) -> Separation:
        """Make the separation that :meth:`describe` told of, with an empty curve."""
        values: dict[str, Any] = {
            name: tuple(value) if isinstance(value, list) else value for name, value in told.items()
        }
        return cls(**values, curve=np.empty((2, 0)))
