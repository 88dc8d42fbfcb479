"""How little ice can be seen: the least areal fraction that stands out of the ice-free hull."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from ..detection.hull import HullsByIncidence
from ..detection.outside import Points, hull_p_values
from .materials import Materials

__all__ = ["VISIBLE_SIGMA", "Sight", "least_areal_fraction", "reference_ground"]

#: Distance outside the hull at which a shot counts as seen [sigma] (common practice, no source).
VISIBLE_SIGMA = 3.5


class Sight(NamedTuple):
    """The least areal fraction of ice that can be seen, and on what it rests."""

    fraction: float
    ground: str
    ice: str

    @property
    def sentence(self) -> str:
        """What a report says."""
        if np.isnan(self.fraction):
            return f"no amount of {self.ice} on {self.ground} stands {VISIBLE_SIGMA:g} sigma out of this ground list"
        return (
            f"{100 * self.fraction:.2g} % of the area ({self.ice} on {self.ground}, {VISIBLE_SIGMA:g} sigma out of the "
            "ground list)"
        )


def least_areal_fraction(
    hulls: HullsByIncidence,
    ground: ArrayLike,
    ice: ArrayLike,
    sigma_red: float,
    sigma_infrared: float,
    *,
    relative_red: float = 0.0,
    relative_infrared: float = 0.0,
    gain_sigma: float = 0.0,
    incidence_deg: float = np.nan,
    outside_sigma: float = VISIBLE_SIGMA,
) -> NDArray[np.float64]:
    """Least areal fraction of ice that lies a number of sigmas outside the ice-free hull.

    Parameters
    ----------
    hulls : HullsByIncidence
        What ice-free ground can be.
    ground, ice : array_like, shape (…, 2)
        Red and infrared albedo of the ground and of the ice, at the incidence of the shot.
    sigma_red, sigma_infrared, relative_red, relative_infrared, gain_sigma : float
        Errors as for `ice_flags`.
    incidence_deg : float
        Incidence [degree], where the hulls depend on it.
    outside_sigma : float
        Distance that counts as seen [sigma].

    Returns
    -------
    ndarray, broadcast shape of `ground` and `ice` without the last dimension
        NaN where no fraction is seen.

    Examples
    --------
    >>> from bandratio.detection.hull import hulls_by_incidence, materials_as_albedo
    >>> soil, ilmenite = (0.15981, 0.26907), (0.0553, 0.0599)
    >>> hulls = hulls_by_incidence(materials_as_albedo([soil, ilmenite]), by_incidence=False)
    >>> least_areal_fraction(hulls, soil, (0.58, 0.0065), 0.002, 0.002, relative_red=0.03,
    ...                      relative_infrared=0.03).round(3).tolist()
    0.046
    """
    ground, ice = np.broadcast_arrays(np.asarray(ground, dtype=float), np.asarray(ice, dtype=float))
    fraction = np.linspace(0, 1, 1001)
    mixed = ground[..., None, :] + fraction[:, None] * (ice - ground)[..., None, :]
    points = Points.of(
        mixed[..., 0], mixed[..., 1], sigma_red, sigma_infrared, relative_red=relative_red,
        relative_infrared=relative_infrared, gain_sigma=gain_sigma, incidence_deg=incidence_deg,
    )  # fmt: skip
    distance = hull_p_values(hulls, points, threads=1)[0].reshape(mixed.shape[:-1])
    seen = distance >= outside_sigma
    first = np.argmax(seen, axis=-1)
    # the crossing within the step, on a straight line
    before = np.take_along_axis(distance, np.maximum(first - 1, 0)[..., None], axis=-1)[..., 0]
    after = np.take_along_axis(distance, first[..., None], axis=-1)[..., 0]
    with np.errstate(invalid="ignore", divide="ignore"):
        within = np.where(first > 0, (outside_sigma - before) / (after - before), 1.0)
    least = (first - 1 + within) * fraction[1]
    return np.where(seen.any(axis=-1), np.where(first == 0, 0.0, least), np.nan)


def reference_ground(ground: Materials) -> int:
    """Index of the material that the sight is told for: mature soil where it is listed, else a middling one."""
    if "Soil 62231" in ground.names:
        return ground.names.index("Soil 62231")
    rocks = [i for i, name in enumerate(ground.names) if name != "ideal white"]
    order = sorted(rocks, key=lambda i: float(ground.albedos[i, 0]))
    return order[(len(order) - 1) // 2]
