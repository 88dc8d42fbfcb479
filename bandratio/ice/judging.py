"""One pass over a scene to find the cut of the false discovery rule, then the flags; in memory or lazy."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable, Iterable, Iterator, Mapping
from typing import Any, TypeAlias

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ..detection.false_discovery import adjusted, adjusted_table, false_discovery_cut
from ..detection.outside import BLOCK, Points, over_blocks
from .decision import FLAG_MEANINGS, Decision, Judged
from .materials import Materials
from .scene import Scene
from .sight import Sight, least_areal_fraction, reference_ground

__all__ = ["judged_scene"]

Floats: TypeAlias = NDArray[np.float64]
#: Arrays by name, the greatest p-value that is rejected, typical errors.
_Outcome: TypeAlias = tuple[dict[str, Any], float, float, dict[str, float]]
#: A larger share of candidates is told: ice is rare, a ground list that does not hold the ground is not (common practice,
#: no source).
_MANY = 0.05

_NAMES = {
    "ratio": "red/infrared albedo ratio",
    "outside_sigma": "distance outside the ice-free hull in standard deviations",
    "p_value": "probability that ice-free ground lies as far outside",
    "q_value": "least false discovery rate at which this is a candidate",
    "fraction_lower": "lower bound of the areal fraction of ice",
    "fraction_upper": "upper bound of the areal fraction of ice",
    "flag": "ice flag",
}
_DTYPES = {name: np.dtype(np.float32) for name in _NAMES} | {
    "p_value": np.dtype(np.float64),
    "q_value": np.dtype(np.float64),
    "flag": np.dtype(np.int8),
}
_SPOOL_IN_MEMORY = 1 << 28  # bytes of p-values held in memory in a streamed pass, before they go to a file


def judged_scene(scene: Scene, decision: Decision, rate: float, dependence: Any) -> xr.Dataset:
    """Flags of a scene and what leads to them; lazy where its arrays are."""
    judge = _lazily if scene.chunked else _in_memory
    results, cut, share, typical = judge(scene, decision, rate, dependence)
    flags = xr.Dataset({name: scene.labelled(data, _described(name)) for name, data in results.items()})
    flags.attrs = {
        "Conventions": "CF-1.11",
        "p_value_cut": cut,
        "candidate_share": share,
        **{f"typical_{name}": value for name, value in typical.items()},
        **_sight(scene, decision, typical),
    }
    if share > _MANY:
        flags.attrs["finding"] = (
            f"{share:.0%} of all points are candidates: more likely than ice everywhere is ground that the list of ice-free "
            "materials does not hold, and then the false discovery rate does not hold either; give ice_free=… what is "
            "there, or None for any rock"
        )
    return flags


def _in_memory(scene: Scene, decision: Decision, rate: float, dependence: Any) -> _Outcome:
    size = scene.template.size
    outside, p, p_outer = (np.empty(size) for _ in range(3))

    def find(first: int, last: int) -> None:
        outside[first:last], p[first:last], p_outer[first:last] = decision.p_values(scene.points(first, last))

    over_blocks(find, size)
    cut_outer = false_discovery_cut(p_outer, rate, dependence)
    filtered = np.where(p_outer <= cut_outer, 1.0, p)
    cut = false_discovery_cut(filtered, rate, dependence)
    results = {name: np.empty(size, dtype=_DTYPES[name]) for name in Judged._fields}

    def judge(first: int, last: int) -> None:
        here = slice(first, last)
        judged = decision.judged(
            scene.points(first, last), outside[here], p[here], p_outer[here], cut_outer, cut
        )
        for name, values in judged._asdict().items():
            results[name][here] = values

    over_blocks(judge, size)
    results["q_value"] = adjusted(filtered, dependence)
    shaped = {name: results[name].reshape(scene.template.shape) for name in _NAMES}
    return shaped, cut, _share([filtered], cut), _typical([_medians(scene.arrays)])


def _lazily(scene: Scene, decision: Decision, rate: float, dependence: Any) -> _Outcome:
    points_of = scene.block_points

    def tally(*parts: NDArray) -> tuple[Floats, int, Floats]:
        _, p, p_outer = decision.p_values(points_of(parts))
        telling = (p < 1) | (p_outer <= rate)
        told = np.column_stack([p[telling], p_outer[telling]])
        medians = _medians(points_of.arrays(parts))
        return told, int(np.sum(~np.isnan(p) & ~telling)), medians

    with tempfile.SpooledTemporaryFile(max_size=_SPOOL_IN_MEMORY) as spool:
        silent, medians = 0, []
        for told, others, typical in _computed(tally, scene.chunked):
            spool.write(told.tobytes())
            silent += others
            medians.append(typical)

        def passed(outer_cut: float | None) -> Callable[[], Iterator[Floats]]:
            def blocks() -> Iterator[Floats]:
                spool.seek(0)
                while data := spool.read(16 * BLOCK):
                    p, p_outer = np.frombuffer(data).reshape(-1, 2).T
                    yield p_outer if outer_cut is None else np.where(p_outer <= outer_cut, 1.0, p)
                for first in range(0, silent, BLOCK):
                    yield np.ones(min(BLOCK, silent - first))

            return blocks

        cut_outer = false_discovery_cut(passed(None), rate, dependence)
        cut = false_discovery_cut(passed(cut_outer), rate, dependence)
        table = adjusted_table(passed(cut_outer), dependence)
        share = _share(passed(cut_outer)(), cut)

    def finish(points: Points) -> list[NDArray]:
        judged = decision.judged(points, *decision.p_values(points), cut_outer, cut)._asdict()
        q = table(judged["p_value"])
        # the table's values are up to 0.2 % too large: keep them on the side that the decision was on
        judged["q_value"] = np.where(judged["p_value"] <= cut, np.minimum(q, rate), q)
        return [judged[name] for name in _NAMES]

    return scene.mapped(finish, tuple(_NAMES), _DTYPES), cut, share, _typical(medians)


def _share(blocks: Iterable[Floats], cut: float) -> float:
    """Share of the judged points whose p-value passes the cut."""
    passing = judged = 0
    for p in blocks:
        passing += int((p <= cut).sum())
        judged += int((~np.isnan(p)).sum())
    return passing / max(judged, 1)


def _typical(medians: list[Floats]) -> dict[str, float]:
    """Typical errors and incidence of the scene."""
    table = np.array(medians)
    typical = {}
    for column, name in enumerate(_TYPICAL):
        known = table[~np.isnan(table[:, column]), column]
        typical[name] = float(np.median(known)) if known.size else np.nan
    return typical


def _sight(scene: Scene, decision: Decision, typical: dict[str, float]) -> dict[str, Any]:
    ground = decision.ground
    if not isinstance(ground, Materials):
        return {
            "ice_free": f"one ratio, {ground:g}",
            "ice": "not used with a lone ratio",
            "least_areal_ice": np.nan,
            "least_areal_ice_meaning": "not known where one ratio is all that is known of the ground",
            "ice_free_ratio": ground,
        }
    incidence = typical.pop("incidence_deg")
    at = None if np.isnan(incidence) else incidence
    index = reference_ground(ground)
    ices = decision.ice.reflectance(at)
    coarsest = int(np.argmax(ices[:, 0] / ices[:, 1]))
    scale = scene.opposition_ratio
    fraction = np.nan
    if not np.isnan(typical["sigma_red"] + typical["sigma_infrared"]):
        typical["sigma_red"] /= scale
        fraction = float(
            least_areal_fraction(
                decision.hulls, ground.reflectance(at)[index], ices[coarsest], **typical,
                gain_sigma=scene.gain_sigma, incidence_deg=incidence,
            )
        )  # fmt: skip
    sight = Sight(fraction, ground.names[index], decision.ice.names[coarsest])
    return {
        "ice_free": ground.summary,
        "ice": decision.ice.summary,
        "least_areal_ice": fraction,
        "least_areal_ice_meaning": sight.sentence,
        **_drawing(decision, incidence, ices),
    }


def _drawing(decision: Decision, incidence: float, ices: NDArray[np.float64]) -> dict[str, Any]:
    """What a picture of the plane needs: corners of the ice-free hull and the ices, at the typical incidence."""
    hulls = decision.hulls
    corners = hulls.hulls[int(hulls.bins(np.array([incidence]))[0])].vertices
    return {
        "ice_free_hull_red": corners[:, 0],
        "ice_free_hull_infrared": corners[:, 1],
        "ice_red": ices[:, 0],
        "ice_infrared": ices[:, 1],
        "ice_names": ", ".join(decision.ice.names),
    }


_TYPICAL = ("sigma_red", "sigma_infrared", "relative_red", "relative_infrared", "incidence_deg")


def _medians(arrays: Mapping[str, Any]) -> Floats:
    """Median of the errors and of the incidence, of at most some thousand judged points spread over the block."""
    # where there is no albedo the errors are those of nothing, as in the empty cells of a grid
    seen = ~np.isnan(arrays["infrared"]) | ~np.isnan(arrays["infrared_limit"])
    judged = np.flatnonzero(np.broadcast_to(~np.isnan(arrays["red"]) & seen, np.shape(arrays["red"])))
    judged = judged[:: max(1, judged.size // 10_000)]
    medians = []
    for name in _TYPICAL:
        values = np.ravel(arrays[name])
        values = values if values.size == 1 else values[judged]
        known = values[~np.isnan(values)]
        medians.append(np.median(known) if known.size else np.nan)
    return np.array(medians)


def _computed(work: Callable[..., Any], arrays: list[Any]) -> Iterator[Any]:
    """Results of `work` on every block, a few blocks at a time."""
    import dask

    blocks = zip(*(array.to_delayed().ravel() for array in arrays), strict=True)
    task = dask.delayed(work, pure=False)  # type: ignore[attr-defined]
    tasks = [task(*parts) for parts in blocks]
    at_once = 4 * len(os.sched_getaffinity(0))
    for first in range(0, len(tasks), at_once):
        yield from dask.compute(*tasks[first : first + at_once])  # type: ignore[attr-defined,no-untyped-call]


def _described(name: str) -> dict[str, Any]:
    if name == "flag":
        return {
            "long_name": _NAMES[name],
            "flag_values": np.arange(len(FLAG_MEANINGS), dtype=np.int8),
            "flag_meanings": " ".join(FLAG_MEANINGS),
        }
    return {"long_name": _NAMES[name], "units": "1"}
