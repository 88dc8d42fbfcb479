"""Curves of the least ice that two lasers find: over noise, infrared wavelength and grain size."""

from __future__ import annotations

import inspect
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np

from .._checks import listed
from ..ice.materials import MaterialChoice, Materials, ice_free_ground
from ..ice.sight import reference_ground
from .lasers import LASER_CAUTION, View, least_ice, pair_of, place_of

if TYPE_CHECKING:
    import pandas as pd

__all__ = ["LaserPlan", "plan_lasers"]

#: What is varied where nothing else is asked for.
NOISES = (0.003, 0.005, 0.01, 0.02, 0.03, 0.05, 0.07, 0.1, 0.15, 0.2)
INFRARED_NM = tuple(float(nm) for nm in range(1400, 1601, 10))
GRAINS_UM = (5.0, 7.0, 10.0, 15.0, 20.0, 30.0, 50.0, 70.0, 100.0, 150.0, 200.0, 300.0, 500.0)


@dataclass(frozen=True)
class LaserPlan:
    """The least ice that two lasers find, along three curves.

    Parameters
    ----------
    noise, wavelength, grain_size : DataFrame
        Index: relative noise of both channels [fraction], infrared wavelength [nm], grain size of the ice [µm].
        Columns: ``areal`` [share of the area], ``intimate`` [share of the weight]; NaN where no amount is found.
    settings : dict
        What was held, by the names of `plan_lasers`, with the ground list and the site in words.
    findings : tuple of str
        What a reader must know, in plain sentences; empty where nothing is to be said.
    caution : str
        Laser safety; to be shown with the curves.
    """

    noise: pd.DataFrame
    wavelength: pd.DataFrame
    grain_size: pd.DataFrame
    settings: dict[str, Any] = field(repr=False)
    findings: tuple[str, ...] = ()
    caution: str = LASER_CAUTION

    @property
    def sentence(self) -> str:
        """What was held, in one line."""
        held = self.settings
        relative = " and ".join(f"{100 * part:g} %" for part in dict.fromkeys(held["relative"]))
        sigma = " and ".join(f"{part:g}" for part in dict.fromkeys(held["sigma"]))
        where = "laboratory" if held["incidence_deg"] is None else f"incidence {held['incidence_deg']:g}°"
        return (
            f"site {held['site']}; ground list {held['ground']}; ice grains {held['grain_um']:g} µm; "
            f"{held['red_nm']:g} and {held['infrared_nm']:g} nm; noise {relative} of the albedo and {sigma}; geometry: "
            f"{where}; found with probability {held['probability']:g} at a false discovery rate of "
            f"{held['false_discovery_rate']:g} where {100 * held['prevalence']:g} % of the shots hold ice"
        )


def plan_lasers(
    ice_free: MaterialChoice = None,
    *,
    noises: Sequence[float] = NOISES,
    infrared_wavelengths: Sequence[float] = INFRARED_NM,
    grain_sizes_um: Sequence[float] = GRAINS_UM,
    **held: Any,
) -> LaserPlan:
    """The least areal and the least intimate ice that is found, over noise, infrared wavelength and grain size.

    Parameters
    ----------
    ice_free : optional
        Ground list, as for `ice_flags`.
    noises : sequence of float
        Noise of both channels as a fraction of the albedo, new in each shot.
    infrared_wavelengths : sequence of float
        Infrared wavelengths [nm].
    grain_sizes_um : sequence of float
        Grain sizes of the ice [µm].
    **held
        What is held on the other two curves: the parameters of `least_ice`.

    Returns
    -------
    LaserPlan
        Its `caution` on laser safety is to be shown with the curves. All curves hold the same materials: those not
        known at every wavelength are left out and named in its `findings`, unless the site is one of them; then the
        wavelengths are.

    Raises
    ------
    ValueError, TypeError
        As for `least_ice`, or if a list is empty or a name unknown.

    Examples
    --------
    >>> plan = plan_lasers("mare", noises=[0.01, 0.1], infrared_wavelengths=[1535], grain_sizes_um=[500])
    >>> bool(plan.noise["areal"][0.01] < plan.noise["areal"][0.1])
    True
    """
    known = [name for name in inspect.signature(least_ice).parameters if name not in ("kind", "ice_free")]
    unknown = [name for name in held if name not in known]
    if unknown:
        raise TypeError(f"plan_lasers has no {listed(unknown)}; it takes {listed(known)}")
    for name, values in (
        ("noises", noises), ("infrared_wavelengths", infrared_wavelengths), ("grain_sizes_um", grain_sizes_um),
    ):  # fmt: skip
        if np.ndim(values) != 1 or not len(values):
            raise ValueError(f"{name} must be a list of one value or more, got {values!r}")
    settings = {name: inspect.signature(least_ice).parameters[name].default for name in known} | held
    settings |= {name: pair_of(name, settings[name]) for name in ("relative", "sigma")}
    grounds, site, findings = _grounds(ice_free, settings, infrared_wavelengths)
    views = {
        nm: View.of(ground, place_of(ground, site), (settings["red_nm"], nm), settings["incidence_deg"])
        for nm, ground in grounds.items()
    }
    at = float(settings["infrared_nm"])
    settings |= {"ground": grounds[at].summary, "site": site}
    return LaserPlan(
        noise=_curve("relative", noises, lambda _: views[at], settings),
        wavelength=_curve("infrared_nm", infrared_wavelengths, lambda nm: views.get(float(nm)), settings),
        grain_size=_curve("grain_um", grain_sizes_um, lambda _: views[at], settings),
        settings=settings,
        findings=tuple(findings),
    )


def _curve(
    name: str, values: Sequence[float], view_at: Callable[[float], View | None], settings: dict[str, Any]
) -> pd.DataFrame:
    import pandas as pd

    rows: dict[str, list[float]] = {"areal": [], "intimate": []}
    for value in values:
        here = settings | {name: float(value)}
        view = view_at(value)
        for kind, found in rows.items():
            found.append(
                float("nan")
                if view is None
                else view.least(
                    kind, here["grain_um"], here["relative"], here["sigma"], here["gain_sigma"],
                    here["false_discovery_rate"], here["prevalence"], here["probability"],
                    (here["ground_grain_um"], here["ground_density"]),
                )
            )  # fmt: skip
    return pd.DataFrame(rows, index=pd.Index([float(value) for value in values], name=name))


#: Regolith that a plan looks at where nothing else is said, the first that is known at every wavelength.
_REGOLITHS = ("Soil 62231", "Moon mare", "Moon highland", "Moon average")


def _grounds(
    ice_free: MaterialChoice, settings: dict[str, Any], wavelengths: Sequence[float]
) -> tuple[dict[float, Materials], str, list[str]]:
    """Ground list at each infrared wavelength, the same materials at all of them; the site; what was left out."""
    red, held_nm = float(settings["red_nm"]), float(settings["infrared_nm"])
    grounds = {held_nm: ice_free_ground(ice_free, (red, held_nm))}
    names = grounds[held_nm].names
    findings, reasons = [], {}
    for nm in map(float, wavelengths):
        try:
            grounds.setdefault(nm, ice_free_ground(ice_free, (red, nm)))
        except ValueError as error:
            if not 30 <= nm < np.inf:
                raise
            reasons[nm] = str(error)
    if reasons:
        findings.append(f"no curve at {listed(reasons, 'nm')}: {next(iter(reasons.values()))}")
    everywhere = [name for name in names if all(name in ground.names for ground in grounds.values())]
    site = settings["site"]
    if site is None:
        usual = names[reference_ground(grounds[held_nm])]
        site = next((name for name in _REGOLITHS if name in everywhere), usual)
    if site in everywhere:
        dropped = [name for name in names if name not in everywhere]
        if dropped:
            findings.append(
                f"left out of the ground list, since not known at every wavelength: {listed(dropped)}"
            )
        return {nm: _only(ground, everywhere) for nm, ground in grounds.items()}, site, findings
    whole = {nm: ground for nm, ground in grounds.items() if set(names) <= set(ground.names)}
    left_out = [nm for nm in map(float, wavelengths) if nm not in whole and nm not in reasons]
    findings.append(f"no curve at {listed(left_out, 'nm')}, where a material of the ground list is not known")
    return {nm: _only(ground, names) for nm, ground in whole.items()}, site, findings


def _only(ground: Materials, names: Sequence[str]) -> Materials:
    places = [ground.names.index(name) for name in names]
    return Materials(tuple(names), ground.albedos[places], ground.title)
