"""A scene's arrays, in memory or lazy: one pass to find the cut of the false discovery rule, then the flags."""

from __future__ import annotations

import os
import tempfile
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, TypeAlias

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ..detection.false_discovery import adjusted, adjusted_table, false_discovery_cut
from ..detection.outside import BLOCK, Points, over_blocks
from .decision import FLAG_MEANINGS, Decision, Judged
from .materials import Materials
from .sight import Sight, least_areal_fraction, reference_ground

__all__ = ["Scene"]

Floats: TypeAlias = NDArray[np.float64]

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


@dataclass(frozen=True, eq=False)
class Scene:
    """Albedos and errors of a scene, on common dimensions.

    Parameters
    ----------
    arrays : dict
        Each a scalar or an array of the scene's shape, numpy or dask.
    template : DataArray
        Red: dimensions and coordinates of the result.
    gain_sigma : float
        Uncertainty shared by all points, as a fraction of the infrared.
    opposition_ratio : float
        The red is divided by it.
    """

    arrays: dict[str, Any]
    template: xr.DataArray
    gain_sigma: float
    opposition_ratio: float

    @classmethod
    def of(cls, values: Mapping[str, Any], *, gain_sigma: float, opposition_ratio: float) -> Scene:
        """Bring arrays to common dimensions.

        Raises
        ------
        ValueError
            If shapes or coordinates differ, or the errors are those of nothing.
        """
        red = values["red"]
        template = red if isinstance(red, xr.DataArray) else _labelled(red)
        template = template.drop_vars(["wavelength", "fwhm"], errors="ignore")
        arrays = {name: _fitted(name, value, template) for name, value in values.items()}
        return cls(arrays, template, gain_sigma, opposition_ratio)

    def points(self, arrays: Mapping[str, Any]) -> Points:
        """Points of one block of the arrays."""
        errors = {name: array for name, array in arrays.items() if name != "red"}
        scale = self.opposition_ratio
        errors["sigma_red"] = errors["sigma_red"] / scale
        errors["covariance"] = errors["covariance"] / scale
        infrared, sigma_red, sigma_infrared = (
            errors.pop(name) for name in ("infrared", "sigma_red", "sigma_infrared")
        )
        return Points.of(
            arrays["red"] / scale, infrared, sigma_red, sigma_infrared, gain_sigma=self.gain_sigma, **errors
        )

    def judged(self, decision: Decision, rate: float, dependence: Any) -> xr.Dataset:
        """Flags and what leads to them; lazy where the arrays are."""
        lazy = any(hasattr(array, "dask") for array in self.arrays.values())
        judge = self._judged_lazily if lazy else self._judged_in_memory
        results, cuts, noise = judge(decision, rate, dependence)
        flags = xr.Dataset(
            {
                name: self.template.copy(data=data).rename(None).assign_attrs(_described(name))
                for name, data in results.items()
            }
        )
        flags.attrs = {
            "Conventions": "CF-1.11",
            "p_value_cut": cuts[1],
            **{f"typical_{name}": value for name, value in noise.items()},
            **self._sight(decision, noise),
        }
        return flags

    def mapped(
        self, work: Callable[[Points], Any], names: Sequence[str], dtypes: Mapping[str, Any]
    ) -> dict[str, Any]:
        """Arrays of the scene's shape from a function of points that gives one row for each name."""
        chunked = self._chunked()
        if not chunked:
            size = self.template.size
            results = {name: np.empty(size, dtype=dtypes[name]) for name in names}

            def fill(first: int, last: int) -> None:
                for name, row in zip(names, work(self._block(first, last)), strict=True):
                    results[name][first:last] = row

            over_blocks(fill, size)
            return {name: values.reshape(self.template.shape) for name, values in results.items()}
        import dask.array as da

        def rows(*parts: NDArray) -> NDArray[np.float64]:
            return np.stack(work(self._from_parts(parts))).reshape(len(names), *parts[0].shape)

        stacked = da.map_blocks(
            rows, *chunked, dtype=np.float64, new_axis=0, chunks=((len(names),), *chunked[0].chunks),
            meta=np.empty((0,) * (chunked[0].ndim + 1)),
        )  # fmt: skip
        return {name: stacked[i].astype(dtypes[name]) for i, name in enumerate(names)}

    @cached_property
    def _flat(self) -> dict[str, Any]:
        return {name: np.ravel(array) if np.ndim(array) else array for name, array in self.arrays.items()}

    def _block(self, first: int, last: int) -> Points:
        return self.points(
            {name: array[first:last] if np.ndim(array) else array for name, array in self._flat.items()}
        )

    def _from_parts(self, parts: tuple[NDArray, ...]) -> Points:
        full = [name for name, array in self.arrays.items() if np.ndim(array)]
        return self.points(self.arrays | dict(zip(full, parts, strict=True)))

    def _chunked(self) -> list[Any]:
        """The arrays that are not scalars as dask arrays of common chunks; none where nothing is lazy."""
        full = [array for array in self.arrays.values() if np.ndim(array)]
        lazy = [array for array in full if hasattr(array, "dask")]
        if not lazy:
            return []
        import dask.array as da

        chunked = [
            array if hasattr(array, "dask") else da.from_array(array, chunks=lazy[0].chunks) for array in full
        ]
        return list(
            da.core.unify_chunks(*(part for array in chunked for part in (array, range(array.ndim))))[1]
        )

    def _judged_in_memory(self, decision: Decision, rate: float, dependence: Any) -> tuple[Any, Any, Any]:
        size = self.template.size
        outside, p, p_outer = (np.empty(size) for _ in range(3))

        def find(first: int, last: int) -> None:
            outside[first:last], p[first:last], p_outer[first:last] = decision.p_values(
                self._block(first, last)
            )

        over_blocks(find, size)
        cut_outer = false_discovery_cut(p_outer, rate, dependence)
        filtered = np.where(p_outer <= cut_outer, 1.0, p)
        cut = false_discovery_cut(filtered, rate, dependence)
        results = {name: np.empty(size, dtype=_DTYPES[name]) for name in Judged._fields}

        def judge(first: int, last: int) -> None:
            here = slice(first, last)
            judged = decision.judged(
                self._block(first, last), outside[here], p[here], p_outer[here], cut_outer, cut
            )
            for name, values in judged._asdict().items():
                results[name][here] = values

        over_blocks(judge, size)
        results["q_value"] = adjusted(filtered, dependence)
        shaped = {name: results[name].reshape(self.template.shape) for name in _NAMES}
        return shaped, (cut_outer, cut), self._noise([_medians(self.arrays)])

    def _judged_lazily(self, decision: Decision, rate: float, dependence: Any) -> tuple[Any, Any, Any]:
        full = [name for name, array in self.arrays.items() if np.ndim(array)]

        def tally(*parts: NDArray) -> tuple[Floats, int, Floats]:
            _, p, p_outer = decision.p_values(self._from_parts(parts))
            telling = (p < 1) | (p_outer <= rate)
            told = np.column_stack([p[telling], p_outer[telling]])
            medians = _medians(self.arrays | dict(zip(full, parts, strict=True)))
            return told, int(np.sum(~np.isnan(p) & ~telling)), medians

        with tempfile.SpooledTemporaryFile(max_size=_SPOOL_IN_MEMORY) as spool:
            silent, medians = 0, []
            for told, others, typical in _computed(tally, self._chunked()):
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

        def finish(points: Points) -> list[NDArray]:
            judged = decision.judged(points, *decision.p_values(points), cut_outer, cut)._asdict()
            q = table(judged["p_value"])
            # the table's values are up to 0.2 % too large: keep them on the side that the decision was on
            judged["q_value"] = np.where(judged["p_value"] <= cut, np.minimum(q, rate), q)
            return [judged[name] for name in _NAMES]

        return self.mapped(finish, tuple(_NAMES), _DTYPES), (cut_outer, cut), self._noise(medians)

    def _noise(self, medians: list[Floats]) -> dict[str, float]:
        """Typical errors and incidence of the scene."""
        table = np.array(medians)
        typical = {}
        for column, name in enumerate(_TYPICAL):
            known = table[~np.isnan(table[:, column]), column]
            typical[name] = float(np.median(known)) if known.size else np.nan
        return typical

    def _sight(self, decision: Decision, typical: dict[str, float]) -> dict[str, Any]:
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
        scale = self.opposition_ratio
        fraction = np.nan
        if not np.isnan(typical["sigma_red"] + typical["sigma_infrared"]):
            typical["sigma_red"] /= scale
            fraction = float(
                least_areal_fraction(
                    decision.hulls, ground.reflectance(at)[index], ices[coarsest], **typical,
                    gain_sigma=self.gain_sigma, incidence_deg=incidence,
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
    """Median of the errors and of the incidence, of at most some thousand points spread over the block."""
    medians = []
    for name in _TYPICAL:
        values = np.ravel(arrays[name])
        values = values[:: max(1, values.size // 10_000)]
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


def _labelled(values: Any) -> xr.DataArray:
    array = values if hasattr(values, "dask") else np.asarray(values, dtype=float)
    dims = {0: (), 1: ("shot",), 2: ("y", "x")}.get(array.ndim, tuple(f"dim_{i}" for i in range(array.ndim)))
    return xr.DataArray(array, dims=dims)


def _fitted(name: str, value: Any, template: xr.DataArray) -> Any:
    """A scalar, or an array of the template's shape."""
    if isinstance(value, xr.DataArray):
        strange = [str(dim) for dim in value.dims if dim not in template.dims]
        if strange:
            raise ValueError(
                f"{name} has the dimension {', '.join(strange)}, which red has not; red has "
                f"{', '.join(map(str, template.dims)) or 'none'}"
            )
        plain = value.reset_coords(drop=True)
        bare = template.reset_coords(drop=True)
        try:
            plain, bare = xr.align(plain, bare, join="exact", copy=False)
        except ValueError:
            sizes = ", ".join(f"{dim}: {size}" for dim, size in value.sizes.items())
            raise ValueError(
                f"{name} does not lie on red's coordinates (it has {sizes}); put both on one grid first"
            ) from None
        return _number(name, plain.broadcast_like(bare).transpose(*template.dims).data)
    array = value if hasattr(value, "dask") else np.asarray(value)
    if array.ndim and array.shape != template.shape:
        try:
            array = np.broadcast_to(array, template.shape)
        except ValueError:
            raise ValueError(
                f"{name} must be one number or have the shape of red, {template.shape}, got {array.shape}"
            ) from None
    return _number(name, array)


def _number(name: str, array: Any) -> Any:
    if array.dtype.kind not in "fiu":
        raise TypeError(f"{name} must be real numbers, got {array.dtype}")
    return array


def _described(name: str) -> dict[str, Any]:
    if name == "flag":
        return {
            "long_name": _NAMES[name],
            "flag_values": np.arange(len(FLAG_MEANINGS), dtype=np.int8),
            "flag_meanings": " ".join(FLAG_MEANINGS),
        }
    return {"long_name": _NAMES[name], "units": "1"}
