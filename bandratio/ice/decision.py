"""The decision about each point: p-values, bounds of the areal fraction, and the flag. Arrays only."""

from __future__ import annotations

from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from ..detection.hull import HullsByIncidence, bin_angles, hulls_by_incidence, ratio_half_plane
from ..detection.outside import Points, hull_p_values, outer_p_values
from .materials import Materials

__all__ = ["FLAG_MEANINGS", "Decision", "Judged"]

#: Flag words; a flag's value is its place in the list.
FLAG_MEANINGS = ("no_data", "ice_free", "opaque_like", "undecided", "unexplained", "ice_candidate")

#: An opaque is darker than this in the red, and its ratio lies in this range (common practice, no source; ilmenite
#: and magnetite of the USGS Spectral Library Version 7 have 0.82–0.95).
OPAQUE_RED = 0.1
OPAQUE_RATIO = (0.75, 1.15)


class Judged(NamedTuple):
    """What is said of each point, shape (point,) each."""

    ratio: NDArray[np.float32]
    outside_sigma: NDArray[np.float32]
    p_value: NDArray[np.float64]
    fraction_lower: NDArray[np.float32]
    fraction_upper: NDArray[np.float32]
    flag: NDArray[np.int8]


class _Bounding(NamedTuple):
    """Edges and ices as `bounds_loop` takes them."""

    starts: NDArray[np.int64]
    normals: NDArray[np.float64]
    offsets: NDArray[np.float64]
    ice_starts: NDArray[np.int64]
    raising: NDArray[np.float64]
    lowering: NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Decision:
    """The rules of one run: what ground and ice can be, and how sure one wants to be.

    Parameters
    ----------
    ground : Materials or float
        What the ice-free ground is made of; a number is its highest ratio red/infrared, the only thing known.
    ice : Materials
        What ice there may be; not used with a lone ratio.
    by_incidence : bool
        Whether the points are lidar shots at incidences of their own; else all are at the laboratory's geometry.
    least_fraction : float
        Ground is called ice-free where less than this areal fraction is possible.
    confidence : float
        Of the bounds and intervals.
    """

    ground: Materials | float
    ice: Materials
    by_incidence: bool
    least_fraction: float = 0.1
    confidence: float = 0.95
    hulls: HullsByIncidence = field(init=False)
    outer: HullsByIncidence | None = field(init=False, default=None)

    def __post_init__(self) -> None:
        if isinstance(self.ground, Materials):
            ground, ice = self.ground.albedos, self.ice.albedos
            hulls = hulls_by_incidence(ground, by_incidence=self.by_incidence)
            everything = np.vstack([ground, ice])
            object.__setattr__(self, "outer", hulls_by_incidence(everything, by_incidence=self.by_incidence))
        else:
            hulls = HullsByIncidence((ratio_half_plane(self.ground),), by_incidence=False)
        object.__setattr__(self, "hulls", hulls)

    @cached_property
    def _z(self) -> tuple[float, float]:
        """Sigmas of the one-sided and of the two-sided confidence."""
        from scipy.special import ndtri

        return float(ndtri(self.confidence)), float(ndtri((1 + self.confidence) / 2))

    @cached_property
    def _bounding(self) -> _Bounding:
        """Edges of each hull, and 1/(m·ice + c) of them for the ices as seen at the ends and middle of its bin."""
        angles: list[list[Any]] = [a.tolist() for a in bin_angles()] if self.by_incidence else [[None]]
        edges = [hull.bounding_edges() for hull in self.hulls.hulls]
        widest = max(map(len, edges))
        ice_starts, rows = [0], []
        for hull, kept, seen_at in zip(self.hulls.hulls, edges, angles, strict=True):
            excess = hull.excess(np.concatenate([self.ice.reflectance(angle) for angle in seen_at]))[:, kept]
            per = np.divide(1.0, excess, out=np.zeros_like(excess), where=np.abs(excess) > 1e-9)
            rows.append(np.pad(per, ((0, 0), (0, widest - per.shape[1]))))
            ice_starts.append(ice_starts[-1] + len(per))
        per_excess = np.concatenate(rows)
        return _Bounding(
            np.concatenate([[0], np.cumsum([len(kept) for kept in edges])]),
            np.concatenate([hull.normals[kept] for hull, kept in zip(self.hulls.hulls, edges, strict=True)]),
            np.concatenate([hull.offsets[kept] for hull, kept in zip(self.hulls.hulls, edges, strict=True)]),
            np.array(ice_starts),
            np.maximum(per_excess, 0.0),
            np.minimum(per_excess, 0.0),
        )

    def p_values(
        self, points: Points
    ) -> tuple[NDArray[np.float64], NDArray[np.float64], NDArray[np.float64]]:
        """Distance outside the ground, its p-value, and the p-value of being neither listed ground nor ice."""
        outside, p = hull_p_values(self.hulls, points, threads=1)
        if self.outer is None:
            return outside, p, np.where(np.isnan(p), np.nan, 1.0)
        return outside, p, outer_p_values(self.outer, points, threads=1)

    def bounds(self, points: Points) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Lower and upper bound of the areal fraction of ice, each at the one-sided confidence."""
        missing = np.where(np.isnan(points.red + points.infrared), np.nan, 0.0)
        if self.outer is None:
            return missing, missing + 1
        from ._decision_loop import bounds_loop

        hulls, edges = self.hulls.packed, self._bounding
        lower, upper = np.empty(len(points)), np.empty(len(points))
        bounds_loop(
            *points.measured(), points.dropout, self.hulls.bins(points.incidence_deg), self._z[0], edges.starts,
            edges.normals, edges.offsets, hulls.facing_starts, hulls.slopes, hulls.intercepts, hulls.knots,
            hulls.cells, hulls.cell_grid, edges.ice_starts, edges.raising, edges.lowering, lower, upper,
        )  # fmt: skip
        return lower, upper

    def opaque(self, points: Points) -> NDArray[np.bool_]:
        """Whether points are surely dark in the red, with a ratio that may be an opaque's (Fieller's interval)."""
        opaque = np.zeros(len(points), dtype=bool)
        if self.outer is not None:
            from ._decision_loop import opaque_loop

            opaque_loop(
                *points.measured(), points.dropout, *self._z, OPAQUE_RED, *OPAQUE_RATIO, opaque,
            )  # fmt: skip
        return opaque

    def judged(
        self,
        points: Points,
        outside: NDArray[np.float64],
        p: NDArray[np.float64],
        p_outer: NDArray[np.float64],
        cut_outer: float,
        cut: float,
    ) -> Judged:
        """Everything that is said of points, given their p-values and the greatest ones that are rejected."""
        lower, upper = self.bounds(points)
        unexplained = p_outer <= cut_outer
        filtered = np.where(unexplained, 1.0, p)
        rules = (np.isnan(p), unexplained, filtered <= cut, self.opaque(points), upper < self.least_fraction)
        words = ("no_data", "unexplained", "ice_candidate", "opaque_like", "ice_free")
        flag = np.select(
            rules, [FLAG_MEANINGS.index(word) for word in words], FLAG_MEANINGS.index("undecided")
        )
        with np.errstate(divide="ignore", invalid="ignore"):
            ratio = np.where(np.isnan(p), np.nan, points.red / np.maximum(points.infrared, 0.0))
        return Judged(
            ratio.astype(np.float32), outside.astype(np.float32), filtered, lower.astype(np.float32),
            upper.astype(np.float32), flag.astype(np.int8),
        )  # fmt: skip
