"""What ice-free ground can look like in the plane of red and infrared albedo: a convex hull, and its edges.

Ground mixes within the beam in two ways. Side by side (areal), its albedo lies on the straight line between the
materials; grain by grain (intimate), the straight line is one of single-scattering albedos, which bulges out of
the chord on the side where ice pulls. The hull holds both, and the origin: shade and partly filled beams.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass, field
from functools import cached_property, lru_cache
from typing import NamedTuple

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .._checks import positive
from ..mixing import reflectance_from_albedo, single_scattering_albedo

__all__ = [
    "LABORATORY_GEOMETRY",
    "Hull",
    "HullsByIncidence",
    "PackedHulls",
    "bin_angles",
    "convex_hull",
    "hulls_by_incidence",
    "materials_as_albedo",
    "mixture_hull",
    "ratio_half_plane",
]

#: Incidence and emission of laboratory reflectances [degree].
LABORATORY_GEOMETRY = (30.0, 0.0)
#: Intervals at which a pair's intimate mixtures are sampled; 64 leave 0.001 sigma.
INTERVALS = 64
#: Width of the bins of incidence [degree], and the steepest one a hull is built for.
BIN_DEG = 2.5
STEEPEST_DEG = 80.0
#: Cells of red by which the facing edge above a point is found; so many that hardly one holds a corner.
CELLS = 2048
#: Points nearer to each other than this are one point: far below any measurement, far above rounding.
_ONE_POINT = 1e-9


@dataclass(frozen=True, eq=False)
class Hull:
    """A convex set in the plane (red albedo, infrared albedo).

    Parameters
    ----------
    vertices : ndarray, shape (vertex, 2)
        Corners, counter-clockwise; none for a half-plane.
    normals : ndarray, shape (edge, 2)
        Outward unit normals m.
    offsets : ndarray, shape (edge,)
        c: inside is m·y + c ≤ 0 for every edge.

    Attributes
    ----------
    slopes, intercepts : ndarray, shape (facing edge,)
        The edges that face ice (red part of the normal above zero, infrared part below) as
        infrared = slope·red + intercept, by rising slope.
    knots : ndarray, shape (facing edge − 1,)
        Red albedo of the corner between one facing edge and the next.
    """

    vertices: NDArray[np.float64]
    normals: NDArray[np.float64]
    offsets: NDArray[np.float64]
    slopes: NDArray[np.float64] = field(init=False)
    intercepts: NDArray[np.float64] = field(init=False)
    knots: NDArray[np.float64] = field(init=False)

    def __post_init__(self) -> None:
        facing = np.flatnonzero((self.normals[:, 0] > 0) & (self.normals[:, 1] < 0))
        slopes = self.normals[facing, 0] / -self.normals[facing, 1]
        order = facing[np.argsort(slopes)]
        slopes = self.normals[order, 0] / -self.normals[order, 1]
        intercepts = self.offsets[order] / -self.normals[order, 1]
        # counter-clockwise, edge e starts at vertex e: the corner between two facing edges starts the second
        knots = self.vertices[order[1:], 0] if len(self.vertices) else np.empty(0)
        for name, value in (("slopes", slopes), ("intercepts", intercepts), ("knots", knots)):
            object.__setattr__(self, name, np.ascontiguousarray(value))

    def excess(self, points: ArrayLike) -> NDArray[np.float64]:
        """How far outside each edge's line points lie (negative: inside), shape (point, edge)."""
        return np.asarray(points, dtype=float) @ self.normals.T + self.offsets

    def chains(self) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
        """Corners below and above, from the least red to the greatest; of a half-plane none."""
        if not len(self.vertices):
            return self.vertices, self.vertices
        red, infrared = self.vertices.T
        left, right = np.lexsort((infrared, red))[0], np.lexsort((infrared, -red))[0]
        around = np.roll(self.vertices, -left, axis=0)  # counter-clockwise: first below, from left to right
        turn = (right - left) % len(red)
        return around[: turn + 1], np.vstack([around[turn:], around[:1]])[::-1]

    def bounding_edges(self, angle: float = 0.01, length: float = 0.01) -> NDArray[np.int64]:
        """Indices of edges that bound nearly the same set, within `angle`·`length`/4 of it, and contain it all.

        A smooth curve is sampled more finely than bounds of a fraction need: runs of edges whose normals turn by
        less than `angle` [radian] over less than `length` are spoken for by their ends.
        """
        count = len(self.offsets)
        if count <= 4:
            return np.arange(count)
        sides = np.hypot(*(np.roll(self.vertices, -1, axis=0) - self.vertices).T)
        directions = np.unwrap(np.arctan2(self.normals[:, 1], self.normals[:, 0]))
        kept, run = [0], 0.0
        for edge in range(1, count):
            following = directions[edge + 1] if edge + 1 < count else np.inf
            if following - directions[kept[-1]] > angle or run + sides[edge] > length:
                kept.append(edge)
                run = 0.0
            else:
                run += sides[edge]
        return np.array(kept)

    def contains(self, points: ArrayLike, tolerance: float = 1e-9) -> NDArray[np.bool_]:
        """Whether points of shape (point, 2) lie inside."""
        return np.asarray((self.excess(points) <= tolerance).all(axis=-1))


def convex_hull(points: ArrayLike) -> Hull:
    """Convex hull of points in the plane, however degenerate: many, two, collinear or repeated.

    Parameters
    ----------
    points : array_like, shape (point, 2)

    Returns
    -------
    Hull
        Of points on one line: the segment between the outermost, with an edge on either side.

    Raises
    ------
    ValueError
        If fewer than two different points are given or one is not finite.

    Examples
    --------
    >>> convex_hull([[0, 0], [2, 0], [0, 2], [1, 1], [0.5, 0.5]]).vertices.tolist()
    [[0.0, 0.0], [2.0, 0.0], [0.0, 2.0]]
    """
    from scipy.spatial import ConvexHull

    cloud = np.asarray(points, dtype=float)
    # no albedo is told from zero at this size, and an edge's slope may overflow
    cloud = np.where(np.abs(cloud) < 1e-100, 0.0, cloud)
    if cloud.ndim != 2 or cloud.shape[1] != 2:
        raise ValueError(f"points of a hull must have shape (point, 2), got {cloud.shape}")
    if not np.isfinite(cloud).all():
        raise ValueError("points of a hull must be finite")
    far = cloud - cloud[:1]
    longest = far[np.argmax((far**2).sum(axis=1))] if len(far) else np.zeros(2)
    if np.hypot(*longest) < 2 * _ONE_POINT:
        raise ValueError("a hull needs at least two different points")
    off_line = far @ np.array([-longest[1], longest[0]]) / np.hypot(*longest)
    if np.max(np.abs(off_line)) < 4 * _ONE_POINT:  # what rounding leaves of a line
        along = far @ longest
        corners = cloud[[np.argmin(along), np.argmax(along)]]
    else:
        # first the few corners of the many points, then those of them that are different points
        few = cloud[ConvexHull(cloud).vertices]
        few = np.unique(np.round(few / _ONE_POINT), axis=0) * _ONE_POINT
        corners = few[ConvexHull(few).vertices]
        corners = np.roll(corners, -np.lexsort((corners[:, 0], corners[:, 1]))[0], axis=0)
    sides = np.roll(corners, -1, axis=0) - corners
    normals = np.column_stack([sides[:, 1], -sides[:, 0]]) / np.hypot(*sides.T)[:, None]
    return Hull(corners, normals, -(normals * corners).sum(axis=1))


def ratio_half_plane(ratio: float) -> Hull:
    """The half-plane red ≤ ratio·infrared: what is known where only one ice-free ratio is.

    Examples
    --------
    >>> ratio_half_plane(0.8).slopes.round(6).tolist()
    [1.25]
    """
    ratio = positive("ice_free_ratio", ratio)
    normal = np.array([[1.0, -ratio]]) / np.hypot(1.0, ratio)
    return Hull(np.empty((0, 2)), normal, np.zeros(1))


def mixture_hull(
    albedos: ArrayLike,
    geometries: ArrayLike = (LABORATORY_GEOMETRY,),
    *,
    intimate: bool = True,
    intervals: int = INTERVALS,
) -> Hull:
    """Everything that materials can look like when they mix: their hull, with the origin.

    Parameters
    ----------
    albedos : array_like, shape (material, 2)
        Single-scattering albedo of each material in the red and the infrared.
    geometries : array_like, shape (geometry, 2)
        Incidence and emission [degree]; of several, the hull of all together.
    intimate : bool
        Leave False only to see how wrong the hull of areal mixtures is: true ground sticks out of it.
    intervals : int
        Intervals at which the mixtures of every pair are sampled.

    Returns
    -------
    Hull

    Raises
    ------
    ValueError
        If an albedo is not above 0, at most 1, or there is no material.

    Notes
    -----
    Pairs suffice for any number of materials: mixtures of three or more lie inside the hull of the pairs'.

    Examples
    --------
    >>> soil_and_ilmenite = single_scattering_albedo([[0.15981, 0.26907], [0.0553, 0.0599]])
    >>> chord = mixture_hull(soil_and_ilmenite, intimate=False)
    >>> point = [[0.117, 0.168]]
    >>> mixture_hull(soil_and_ilmenite).contains(point).tolist(), chord.contains(point).tolist()
    ([True], [False])
    """
    w = np.asarray(albedos, dtype=float)
    if w.ndim != 2 or w.shape[1] != 2 or len(w) == 0:
        raise ValueError(f"albedos must have shape (material, 2): red and infrared, got {w.shape}")
    if not ((w > 0) & (w <= 1)).all():
        raise ValueError("single-scattering albedos must be above 0 and at most 1")
    if intervals < 1:
        raise ValueError(f"intervals must be 1 or more, got {intervals}")
    if intimate:
        first, second = np.triu_indices(len(w), k=1)
        # closer together at both ends, where the curve of a dark and a bright material bends most
        share = (np.sin(np.linspace(0, np.pi / 2, intervals + 1)[1:-1]) ** 2)[:, None, None]
        w = np.concatenate([w, (share * w[first] + (1 - share) * w[second]).reshape(-1, 2)])
    seen = [np.zeros((1, 2))]
    seen += [
        reflectance_from_albedo(w, incidence, emission) for incidence, emission in np.asarray(geometries)
    ]
    return convex_hull(np.concatenate(seen))


class PackedHulls(NamedTuple):
    """Edges of several hulls in one array each, as the compiled loops read them; hull h has starts[h]:starts[h + 1]."""

    starts: NDArray[np.int64]
    normals: NDArray[np.float64]
    offsets: NDArray[np.float64]
    corners: NDArray[np.float64]  # (hull, 2): greatest red, greatest infrared
    lower_starts: NDArray[np.int64]  # the corners below and above, by rising red: the hull as two functions
    lower_chain: NDArray[np.float64]
    upper_starts: NDArray[np.int64]
    upper_chain: NDArray[np.float64]
    facing_starts: NDArray[np.int64]
    slopes: NDArray[np.float64]
    intercepts: NDArray[np.float64]
    knots: NDArray[np.float64]
    cells: NDArray[np.int32]  # (hull, CELLS): the facing edge above the left end of each cell of red
    cell_grid: NDArray[np.float64]  # (hull, 2): red where the cells begin, cells in a unit of red


def _cell_grid(knots: NDArray[np.float64]) -> tuple[float, float]:
    """Where the cells that find a facing edge at once begin, and how many there are in a unit of red."""
    if len(knots) < 2:
        return 0.0, 0.0
    return float(knots[0]), CELLS / max(float(knots[-1] - knots[0]), 1e-12)


def _starts(lengths: Iterable[int]) -> NDArray[np.int64]:
    return np.concatenate([[0], np.cumsum(list(lengths))]).astype(np.int64)


@dataclass(frozen=True, eq=False)
class HullsByIncidence:
    """Hulls of the same materials for bins of incidence, the last one for unknown incidence.

    Parameters
    ----------
    hulls : tuple of Hull
        One a bin; a single one at a fixed geometry or for a half-plane.
    by_incidence : bool
        Whether the hull depends on a shot's incidence.
    """

    hulls: tuple[Hull, ...]
    by_incidence: bool

    @cached_property
    def packed(self) -> PackedHulls:
        """The edges of all hulls, one after another."""
        chains = [hull.chains() for hull in self.hulls]
        facing_starts = _starts(len(hull.slopes) for hull in self.hulls)
        grid = np.array([_cell_grid(hull.knots) for hull in self.hulls])
        left_ends = grid[:, :1] + np.arange(CELLS) / np.maximum(grid[:, 1:], 1e-300)
        return PackedHulls(
            starts=_starts(len(hull.offsets) for hull in self.hulls),
            normals=np.concatenate([hull.normals for hull in self.hulls]),
            offsets=np.concatenate([hull.offsets for hull in self.hulls]),
            corners=np.array([hull.vertices.max(axis=0, initial=0.0) for hull in self.hulls]),
            lower_starts=_starts(len(lower) for lower, _ in chains),
            lower_chain=np.concatenate([lower for lower, _ in chains]),
            upper_starts=_starts(len(upper) for _, upper in chains),
            upper_chain=np.concatenate([upper for _, upper in chains]),
            facing_starts=facing_starts,
            cells=np.array(
                [
                    first + np.searchsorted(hull.knots, ends)
                    for hull, first, ends in zip(self.hulls, facing_starts, left_ends, strict=False)
                ],
                dtype=np.int32,
            ),
            cell_grid=grid,
            slopes=np.concatenate([hull.slopes for hull in self.hulls]),
            intercepts=np.concatenate([hull.intercepts for hull in self.hulls]),
            # one knot fewer than edges: filled up, so that one index serves both
            knots=np.concatenate(
                [np.append(hull.knots, [np.inf][: hull.slopes.size]) for hull in self.hulls]
            ),
        )

    def bins(self, incidence_deg: NDArray[np.float64]) -> NDArray[np.int32]:
        """Index of the hull for each incidence [degree]; NaN is unknown.

        Raises
        ------
        ValueError
            If an incidence is negative or steeper than a hull is built for.
        """
        if not self.by_incidence:
            return np.zeros(incidence_deg.shape, dtype=np.int32)
        wrong = (incidence_deg < 0) | (incidence_deg > STEEPEST_DEG)
        if wrong.any():
            raise ValueError(
                f"incidence_deg must lie between 0 and {STEEPEST_DEG:g} degrees, got {incidence_deg[wrong][0]:g}; "
                "leave steeper shots out (NaN in red)"
            )
        index = np.minimum(incidence_deg / BIN_DEG, len(self.hulls) - 2)
        return np.where(np.isnan(index), len(self.hulls) - 1, index).astype(np.int32)


def bin_angles() -> list[NDArray[np.float64]]:
    """Incidences that each bin's hull is built from [degree]: its ends and its middle.

    The last entry is for unknown incidence and covers the whole range.
    """
    edges = np.arange(0, STEEPEST_DEG + BIN_DEG / 2, BIN_DEG)
    return [*(np.array([low, low + BIN_DEG / 2, low + BIN_DEG]) for low in edges[:-1]), edges]


def hulls_by_incidence(
    albedos: ArrayLike, *, by_incidence: bool, intervals: int = INTERVALS
) -> HullsByIncidence:
    """Hulls of materials as a lidar sees them, for bins of a few degrees of incidence.

    The ratio of two wavelengths is free of incidence only on a Lambert surface: mature soil goes from 0.59 at 0° to
    0.65 at 60°, and a hull built at one geometry would flag it at the other. Each bin's hull covers the whole bin.

    Parameters
    ----------
    albedos : array_like, shape (material, 2)
        Single-scattering albedos.
    by_incidence : bool
        False: one hull at the laboratory's geometry.
    intervals : int
        See `mixture_hull`.

    Returns
    -------
    HullsByIncidence
    """
    w = np.asarray(albedos, dtype=float)
    return _hulls(w.tobytes(), w.shape, by_incidence, intervals)


@lru_cache(maxsize=32)
def _hulls(data: bytes, shape: tuple[int, ...], by_incidence: bool, intervals: int) -> HullsByIncidence:
    w = np.frombuffer(data).reshape(shape)
    if not by_incidence:
        return HullsByIncidence((mixture_hull(w, intervals=intervals),), False)
    bins = bin_angles()
    corners = {
        angle: mixture_hull(w, [(angle, angle)], intervals=intervals).vertices
        for angle in np.unique(np.concatenate(bins)).tolist()
    }
    hulls = (convex_hull(np.concatenate([corners[angle] for angle in angles.tolist()])) for angles in bins)
    return HullsByIncidence(tuple(hulls), True)


def materials_as_albedo(reflectances: ArrayLike) -> NDArray[np.float64]:
    """Single-scattering albedos of materials given by their laboratory reflectance (30° and 0°)."""
    return single_scattering_albedo(reflectances, *LABORATORY_GEOMETRY)
