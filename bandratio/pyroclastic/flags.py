"""Flags for candidate pyroclastic pixels: labels on, thresholds checked, false discoveries held down."""

from __future__ import annotations

import json
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from .._checks import listed, open_fraction
from ..cube import quantity_of
from ..detection import Threshold, as_threshold
from .cancellation import BRIGHTNESS, SLOPE, KnownNoise

__all__ = ["CAUTION", "FLAG_MEANINGS", "pyroclastic_flags"]

#: Word of each flag, in the order of its code.
FLAG_MEANINGS = ("no_data", "background", "undecided", "bright_candidate", "dark_candidate")
CAUTION = "flags are indicators to follow up, never proof of a pyroclastic deposit"

#: Pixels that are worked on at once: what is made on the way stays in the second-level cache.
_STRETCH = 65_536
#: Pixels that are looked at for the errors of a threshold from the scene.
_SAMPLE = 1_000_000


@dataclass(frozen=True)
class _Condition:
    """One comparison: a parameter, its threshold, and which errors count."""

    parameter: str
    sign: int
    threshold: Threshold
    compared: float
    sigma: str | None
    kept: KnownNoise | None
    variance: float
    growth: tuple[float, float, float]
    told: str

    @property
    def settings(self) -> list[float]:
        return [self.sign, self.compared, self.variance, *self.growth]


def pyroclastic_flags(
    maps: xr.Dataset,
    *,
    brighter_than: float | Threshold | None = None,
    darker_than: float | Threshold | None = None,
    flatter_than: float | Threshold | None = None,
    false_discovery_rate: float = 0.05,
) -> xr.Dataset:
    """Candidate pyroclastic pixels, each with a p-value, at a false discovery rate that holds for the whole list.

    A bright candidate is brighter than a threshold at 700 nm, a dark one darker; where `flatter_than` is given, both
    must also have a red slope below it. Flags are indicators to follow up, never proof of a pyroclastic deposit: bright
    and flat finds one family only, many deposits are dark (glass-rich and black-bead kinds), and fresh craters are
    bright too.

    Parameters
    ----------
    maps : Dataset
        Result of ``parameters`` with `reflectance_700` and, for `flatter_than`, `red_slope`, of any shape; lazy maps give
        lazy flags after one streamed pass. Best with ``parts=True``: against a threshold from the scene only the random
        part of sigma counts.
    brighter_than, darker_than : number or Threshold, optional
        Limits of the reflectance at 700 nm [reflectance]; at least one is needed. From ``thresholds`` (laboratory),
        ``scene_threshold``, or a number. A threshold's own sigma is added to every pixel's.
    flatter_than : number or Threshold, optional
        Limit of the red slope [% per 100 nm], signed: the slope must lie below it.
    false_discovery_rate : float
        Share of false ones among the candidates that is held on average, both kinds taken together.

    Returns
    -------
    Dataset, dimensions of `maps`
        ``p_bright`` and ``p_dark`` (those that were asked for) and ``flag`` (int8, CF ``flag_values`` and
        ``flag_meanings``). Attributes: ``thresholds`` (JSON: each threshold, and which errors counted),
        ``false_discovery_rate``, ``largest_p_value`` (the cut), ``noise``, ``caution``.

    Raises
    ------
    TypeError, ValueError
        If no limit is given or `flatter_than` alone, a parameter is missing, a threshold was made for another
        parameter or reflectance quantity, or `darker_than` is not below `brighter_than`.

    Notes
    -----
    "Both" is tested by intersection and union: ``p = max(Φ((t1 − R700)/σ), Φ((S − t2)/σ_S))``, valid whatever the
    correlation of the two (Berger 1982); then Benjamini and Hochberg's rule over every p-value. With errors that all
    pixels share, its promise holds on average over calibrations, not within one scene.

    ================================ ==================================================
    flag                             rule, first that applies
    ================================ ==================================================
    no_data                          a parameter or its sigma is missing
    bright_candidate, dark_candidate the p-value of that rule passes the false discovery rule
    background                       in each rule, one of the conditions is rejected at 95 %
    undecided                        the rest
    ================================ ==================================================

    Which errors count. Against a number or a laboratory threshold: the whole sigma. Against a threshold from the same
    scene a gain that the scene shares moves both sides alike and cancels, so the random part counts; what does not cancel
    (offsets; in a mosaic the gains of other images) is kept, at the pixel and at the threshold. Errors that grow with
    the reflectance are taken at the limit for pixels darker than it, since there a measured value would make them too
    small. Without a sigma it is a plain comparison, and the attribute says so.

    References
    ----------
    Berger 1982, Technometrics 24, 295 (from memory). Benjamini & Hochberg 1995, J. R. Stat. Soc. B 57, 289,
    doi:10.1111/j.2517-6161.1995.tb02031.x.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube([[0.150, 0.200, 0.150], [0.168, 0.208, 0.160]], [600, 700])
    >>> maps = br.parameters(cube, br.Noise(random=0.001))
    >>> flags = br.pyroclastic_flags(maps, brighter_than=0.19, flatter_than=7)
    >>> flags.flag.values.tolist(), [f"{p:.1g}" for p in flags.p_bright.values]
    ([1, 3, 1], ['1', '5e-06', '1'])
    """
    if not isinstance(maps, xr.Dataset):
        raise TypeError(f"maps must be a Dataset, as br.parameters makes one, got {type(maps).__name__}")
    rate = open_fraction("false_discovery_rate", false_discovery_rate)
    limits = _limits(maps, brighter_than, darker_than, flatter_than)
    noise = KnownNoise.of(maps)
    conditions = {argument: _condition(maps, argument, limit, noise) for argument, limit in limits.items()}
    flatter = [conditions["flatter_than"]] if "flatter_than" in conditions else []
    rules = {
        word: [conditions[argument], *flatter]
        for word, argument in (("bright", "brighter_than"), ("dark", "darker_than"))
        if argument in conditions
    }
    p = _p_values(maps, list(rules.values()))
    from ..detection.false_discovery import false_discovery_cut

    cut = false_discovery_cut(p, rate)
    codes = np.array([0, 1, 2, *(FLAG_MEANINGS.index(f"{word}_candidate") for word in rules)], dtype=np.int8)
    return _labelled(maps, rules, conditions, p, _flags(p, codes, cut), rate, cut)


def _limits(
    maps: xr.Dataset,
    brighter_than: float | Threshold | None,
    darker_than: float | Threshold | None,
    flatter_than: float | Threshold | None,
) -> dict[str, Threshold]:
    given = {
        "brighter_than": (brighter_than, BRIGHTNESS),
        "darker_than": (darker_than, BRIGHTNESS),
        "flatter_than": (flatter_than, SLOPE),
    }
    if brighter_than is None and darker_than is None:
        alone = (
            "flatter_than alone marks no kind of deposit" if flatter_than is not None else "no limit is given"
        )
        raise ValueError(
            f"{alone}; give brighter_than=… or darker_than=…, a reflectance at 700 nm or a Threshold"
        )
    limits = {}
    for argument, (value, parameter) in given.items():
        if parameter == BRIGHTNESS and isinstance(value, (int, float)) and 2 < value < np.inf:
            raise ValueError(
                f"{argument} is a reflectance, a fraction, got {value:g}; {value:g} % is {value / 100:g}"
            )
        if value is None:
            continue
        if parameter not in maps:
            raise ValueError(
                f"{argument} needs {parameter}, and the maps hold {listed(str(name) for name in maps.data_vars)}; make "
                f"them with br.parameters(cube, noise), which needs {'700' if parameter == BRIGHTNESS else '600 and 700'} nm"
            )
        try:
            limit = as_threshold(value, parameter)
        except (TypeError, ValueError) as error:
            raise type(error)(f"{argument}: {error}") from None
        limit.check_map(maps[parameter])
        limit.check_direction("above" if argument == "brighter_than" else "below")
        limits[argument] = limit
    if "flatter_than" in limits and maps[BRIGHTNESS].sizes != maps[SLOPE].sizes:
        raise ValueError(
            f"{BRIGHTNESS} has {dict(maps[BRIGHTNESS].sizes)} and {SLOPE} {dict(maps[SLOPE].sizes)}; both must be on one grid"
        )
    if {"brighter_than", "darker_than"} <= set(limits):
        bright, dark = limits["brighter_than"].value, limits["darker_than"].value
        if not dark < bright:
            raise ValueError(
                f"darker_than ({dark:g}) must lie below brighter_than ({bright:g}): no pixel is both"
            )
    return limits


def _condition(maps: xr.Dataset, argument: str, limit: Threshold, noise: KnownNoise | None) -> _Condition:
    parameter = limit.parameter or (SLOPE if argument == "flatter_than" else BRIGHTNESS)
    sign = 1 if argument == "brighter_than" else -1
    # compared in the maps' own precision, so that without errors it is the comparison that a user would type
    limit = replace(limit, parameter=parameter)
    compared = float(maps[parameter].dtype.type(limit.value))
    sigma: str | None = f"{parameter}_sigma"
    kept = None
    variance = limit.sigma**2
    counted = True
    if sigma not in maps:
        sigma, told = None, "no sigma in the maps: a plain comparison"
        if limit.sigma:
            told = "no sigma in the maps: the threshold's sigma alone"
    elif limit.origin != "scene":
        told = "whole sigma"
    elif noise is None:
        told = "whole sigma, since the maps hold no parts (parts=True)"
        if f"{parameter}_sigma_random" in maps:
            sigma, counted = f"{parameter}_sigma_random", False
            told = "random part of sigma; the shared part is taken for gains, since the maps do not say what it is"
    elif noise.mosaic and noise.has_shared:
        variance += _at_threshold(maps, limit, noise)
        told = "whole sigma, and the shared part at the threshold, since images of a mosaic do not share their errors"
    elif noise.rescaled and noise.band_offset.any():
        variance += _at_threshold(maps, limit, noise)
        told = "whole sigma, and the shared part at the threshold, since offsets were scaled with the cube"
    elif f"{parameter}_sigma_random" not in maps:
        told = "whole sigma, since the maps hold no parts (parts=True): more than is needed against the scene itself"
        if noise.band_offset.any():
            variance += _at_threshold(maps, limit, noise)
    else:
        sigma, counted = f"{parameter}_sigma_random", False
        told = "random part of sigma: gains that the scene shares cancel"
        if noise.band_offset.any():
            kept = noise
            variance += _at_threshold(maps, limit, noise)
            told += "; offsets do not, and are kept"
    growth = (0.0, 0.0, 0.0)
    if sigma is not None and noise is not None and argument == "darker_than":
        growth = (0.0, 0.0, 1.0) if noise.rescaled else (*noise.growth(shared=counted), 0.0)
    return _Condition(parameter, sign, limit, compared, sigma, kept, variance, growth, told)


def _at_threshold(maps: xr.Dataset, limit: Threshold, noise: KnownNoise) -> float:
    """Variance of a threshold from the scene by the errors that do not cancel: its mean over pixels near it."""
    name = limit.parameter
    if name == BRIGHTNESS and not noise.rescaled:
        return float(noise.not_cancelling(BRIGHTNESS, np.array(limit.value), None))
    shared = next(f"{name}{part}" for part in ("_sigma_shared", "_sigma") if f"{name}{part}" in maps)
    values = maps[name]
    step = int(np.ceil(max(1.0, values.size / _SAMPLE) ** (1 / max(values.ndim, 1))))
    thin = (slice(None, None, step),) * values.ndim
    here, R, sigma = (
        np.asarray(maps[each].transpose(*values.dims)[thin].values, dtype=float).ravel()
        for each in (name, BRIGHTNESS, shared)
    )
    whole = np.isfinite(here) & np.isfinite(sigma) & (R > 0)
    if not whole.any():
        return 0.0
    here, R, sigma = here[whole], R[whole], sigma[whole]
    near = np.argsort(np.abs(here - limit.value))[: max(50, R.size // 100)]
    if noise.rescaled:
        return float((sigma[near] ** 2).mean())
    return float(noise.not_cancelling(name, R[near], here[near]).mean())


def _p_values(maps: xr.Dataset, rules: list[list[_Condition]]) -> Any:
    """P-values of shape (rule, …): numpy for maps in memory, dask for lazy ones."""
    dims = maps[BRIGHTNESS].dims
    used = {condition.parameter for rule in rules for condition in rule}
    names = sorted(used | {c.sigma for rule in rules for c in rule if c.sigma is not None})
    if any(c.kept is not None for rule in rules for c in rule):
        names = sorted({*names, BRIGHTNESS, SLOPE} & {str(name) for name in maps.data_vars})
    arrays = [maps[name].transpose(*dims) for name in names]
    if all(array.chunks is None for array in arrays):
        from ..kernel import cores

        return _block(*(array.values for array in arrays), names=names, rules=rules, threads=cores())
    import dask.array as da

    first = next(array for array in arrays if array.chunks is not None)
    chunks = dict(zip(dims, first.chunks or (), strict=True))
    lazy = [array.chunk(chunks).data for array in arrays]
    return da.map_blocks(
        _block,
        *lazy,
        names=names,
        rules=rules,
        dtype=np.float64,
        chunks=((len(rules),), *lazy[0].chunks),
        new_axis=0,
        meta=np.empty((0,) * (lazy[0].ndim + 1)),
    )


def _block(
    *arrays: NDArray, names: list[str], rules: list[list[_Condition]], threads: int = 1
) -> NDArray[np.float64]:
    from .kernel import p_values

    flat = {name: np.ascontiguousarray(array).reshape(-1) for name, array in zip(names, arrays, strict=True)}
    pixels = arrays[0].size
    out = np.empty((len(rules), pixels))

    def run(start: int) -> None:
        here = {name: array[start : start + _STRETCH] for name, array in flat.items()}
        for place, rule in enumerate(rules):
            kept = [
                c.kept.not_cancelling(c.parameter, here[BRIGHTNESS], here.get(SLOPE)) if c.kept else None
                for c in rule
            ]
            p_values(
                [here[c.parameter] for c in rule],
                [None if c.sigma is None else here[c.sigma] for c in rule],
                kept,
                np.array([c.settings for c in rule], dtype=float),
                out[place, start : start + _STRETCH],
            )

    starts = range(0, pixels, _STRETCH)
    if threads == 1 or len(starts) < 2:
        for start in starts:
            run(start)
    else:
        with ThreadPoolExecutor(threads) as pool:
            list(pool.map(run, starts))
    return out.reshape(len(rules), *arrays[0].shape)


def _flags(p: Any, codes: NDArray[np.int8], cut: float) -> Any:
    from ..kernel import cores
    from .kernel import flags_of

    if not hasattr(p, "dask"):
        return flags_of(p.reshape(p.shape[0], -1), codes, cut, threads=cores()).reshape(p.shape[1:])
    import dask.array as da

    def of_block(block: NDArray) -> NDArray[np.int8]:
        return flags_of(np.ascontiguousarray(block).reshape(block.shape[0], -1), codes, cut).reshape(
            block.shape[1:]
        )

    return da.map_blocks(of_block, p, dtype=np.int8, drop_axis=0, meta=np.empty((0,) * (p.ndim - 1), np.int8))


def _labelled(
    maps: xr.Dataset,
    rules: dict[str, list[_Condition]],
    conditions: dict[str, _Condition],
    p: Any,
    flags: Any,
    rate: float,
    cut: float,
) -> xr.Dataset:
    from .. import __version__

    dims = maps[BRIGHTNESS].dims
    variables = {}
    for place, (word, rule) in enumerate(rules.items()):
        tested = " and ".join(
            f"{c.parameter} {'>' if c.sign > 0 else '<'} {c.threshold.value:.6g}" for c in rule
        )
        variables[f"p_{word}"] = xr.Variable(
            dims, p[place], {"long_name": f"p-value of a {word} candidate: {tested}", "units": "1"}
        )
    variables["flag"] = xr.Variable(
        dims,
        flags,
        {
            "long_name": "candidate pyroclastic pixels",
            "flag_values": np.arange(len(FLAG_MEANINGS), dtype=np.int8),
            "flag_meanings": " ".join(FLAG_MEANINGS),
            "comment": CAUTION,
        },
    )
    told = {}
    for argument, condition in conditions.items():
        description = condition.threshold.describe()
        told[argument] = {**description, "errors": condition.told}
    attributes = {
        "Conventions": "CF-1.11",
        "bandratio_version": __version__,
        "thresholds": json.dumps(told),
        "false_discovery_rate": rate,
        "largest_p_value": cut,
        "noise": str(maps.attrs.get("noise", "not said in the maps")),
        "caution": CAUTION,
    }
    coords = {name: c for name, c in maps[BRIGHTNESS].coords.items() if name != "quantity"}
    flagged = xr.Dataset(variables, coords, attributes)
    quantity = quantity_of(maps)
    return flagged if quantity is None else flagged.assign_coords(quantity=quantity)
