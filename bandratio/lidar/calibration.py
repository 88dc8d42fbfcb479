"""What is known about the two channels of a lidar, and how well."""

from __future__ import annotations

import csv
from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any

from .._checks import listed, non_negative, positive, suggestion

__all__ = ["CHANNELS", "LidarCalibration", "LidarChannel"]

#: The two channels, as their variables are named.
CHANNELS = ("red", "infrared")


@dataclass(frozen=True, kw_only=True)
class LidarChannel:
    """One channel of a lidar: its receiver constant, and the errors and limits of a return.

    Energies are in the unit of the returns: joule, or counts.

    Parameters
    ----------
    constant : float
        Receiver constant K = A_r η / π of E_r = K E_t ρ cos i / R² [m²].
    constant_sigma : float
        Its standard uncertainty [m²], shared by all shots.
    transmitted : float, optional
        Transmitted energy E_t, where the returns do not hold each shot's own.
    relative : float
        Error of each shot's own that is a fraction of the albedo, as of the transmitted energy [1].
    energy_per_count : float
        Energy of one detected count, for counting statistics (1 where the returns are counts; 0: no such noise).
    background : float
        Background energy within the gate, where the returns do not hold each shot's own.
    background_sigma : float
        Standard uncertainty of the background of each shot.
    background_subtracted : bool
        True where the returns are net of the background.
    read_noise : float
        Noise of the electronics, each shot's own.
    limit : float, optional
        Least energy that the receiver records: what a stored zero lies below.
    saturation : float, optional
        Energy from which on the receiver saturates.
    dead_time_s, gate_s : float
        Non-paralysable dead time after each count, and length of the gate [s].
    least_live : float
        Least live fraction at which counts are still used; below it they are marked as saturated (common practice,
        no source).

    Raises
    ------
    ValueError
        If a value is not positive, or negative, or the dead time has no gate or no energy per count.
    """

    constant: float
    constant_sigma: float = 0.0
    transmitted: float | None = None
    relative: float = 0.0
    energy_per_count: float = 0.0
    background: float = 0.0
    background_sigma: float = 0.0
    background_subtracted: bool = True
    read_noise: float = 0.0
    limit: float | None = None
    saturation: float | None = None
    dead_time_s: float = 0.0
    gate_s: float = 0.0
    least_live: float = 0.5

    def __post_init__(self) -> None:
        positive("a lidar channel's constant", self.constant, "m²")
        for field in fields(self):
            value = getattr(self, field.name)
            if field.name in ("transmitted", "saturation") and value is not None:
                positive(f"a lidar channel's {field.name}", value)
            elif field.name not in ("constant", "background_subtracted") and value is not None:
                non_negative(f"a lidar channel's {field.name}", value)
        if self.relative >= 1:
            raise ValueError(
                f"a lidar channel's relative error is a fraction below 1, got {self.relative:g}; "
                f"{self.relative:g} % is {self.relative / 100:g}"
            )
        if not 0 < self.least_live <= 1:
            raise ValueError(f"least_live is a fraction of the gate in (0, 1], got {self.least_live:g}")
        if self.dead_time_s and not (self.gate_s and self.energy_per_count):
            raise ValueError(
                "a dead time needs the gate's length and the energy of one count; give gate_s=… and "
                "energy_per_count=… (1 where the returns are counts)"
            )


@dataclass(frozen=True, kw_only=True)
class LidarCalibration:
    """Both channels of a lidar, and the errors that they share.

    Parameters
    ----------
    red, infrared : LidarChannel
        The two channels.
    correlation : float
        Correlation of the errors of the two constants, as of one reference target seen by both.
    range_sigma_m : float
        Standard uncertainty of each shot's range [m], the same for both channels.
    incidence_sigma_deg : float
        Standard uncertainty of each shot's incidence [degree], the same for both channels.
    units : str
        Unit of the return energies that it holds for, ``""`` where it is not said.
    source : str
        Where it comes from, for the result's attributes.

    Raises
    ------
    ValueError, TypeError
        If a channel is none, the correlation is outside [-1, 1], or an uncertainty is negative.

    Examples
    --------
    >>> channel = LidarChannel(constant=0.02, constant_sigma=0.0004, transmitted=1e-3)
    >>> round(LidarCalibration(red=channel, infrared=channel).gain_sigma, 4)
    0.0283
    """

    red: LidarChannel
    infrared: LidarChannel
    correlation: float = 0.0
    range_sigma_m: float = 0.0
    incidence_sigma_deg: float = 0.0
    units: str = ""
    source: str = ""

    def __post_init__(self) -> None:
        for name in CHANNELS:
            if not isinstance(getattr(self, name), LidarChannel):
                raise TypeError(f"{name} must be a LidarChannel, got {type(getattr(self, name)).__name__}")
        if not -1 <= self.correlation <= 1:
            raise ValueError(f"correlation must lie in [-1, 1], got {self.correlation:g}")
        non_negative("range_sigma_m", self.range_sigma_m, "m")
        non_negative("incidence_sigma_deg", self.incidence_sigma_deg, "degree")

    @property
    def gain_sigma(self) -> float:
        """Standard uncertainty of the red over infrared gain, a fraction shared by all shots."""
        red, infrared = (channel.constant_sigma / channel.constant for channel in (self.red, self.infrared))
        return float(max(red**2 + infrared**2 - 2 * self.correlation * red * infrared, 0.0) ** 0.5)

    @classmethod
    def from_csv(cls, path: str | Path) -> LidarCalibration:
        """Calibration from a table: a column `channel` with rows `red` and `infrared`, a column for each part.

        The columns are the parts of `LidarChannel`, and `correlation`, `range_sigma_m`, `incidence_sigma_deg` and
        `units` (the same in both rows); those left out, and cells left empty, have their defaults.

        Raises
        ------
        ValueError
            With the file, where a column is unknown, a row is missing, or a value is no number.
        """
        path = Path(path)
        with path.open(newline="", encoding="utf-8-sig") as stream:
            rows = list(csv.DictReader(line for line in stream if line.strip() and not line.startswith("#")))
        columns = {key: {} for key in CHANNELS}  # type: dict[str, dict[str, str]]
        own = {field.name for field in fields(LidarChannel)}
        both = {"correlation", "range_sigma_m", "incidence_sigma_deg", "units", "source"}
        for row in rows:
            given = {str(key).strip(): (value or "").strip() for key, value in row.items()}
            name = given.pop("channel", "")
            if name not in columns:
                raise ValueError(
                    f"{path}: wanted a column channel with rows red and infrared, got {name or 'none'!r}"
                )
            if columns[name]:
                raise ValueError(f"{path}: the channel {name} stands in two rows")
            for key in given:
                if key not in own | both:
                    raise ValueError(f"{path}: unknown column {key!r}{suggestion(key, own | both)}")
            columns[name] = {key: value for key, value in given.items() if value}
        absent = [name for name in CHANNELS if not columns[name]]
        if absent:
            raise ValueError(f"{path}: no row for {listed(absent)}; wanted one for red and one for infrared")
        shared: dict[str, Any] = {}
        for key in both & (set(columns["red"]) | set(columns["infrared"])):
            values = {columns[name].pop(key, None) for name in CHANNELS} - {None}
            if len(values) > 1:
                raise ValueError(
                    f"{path}: {key} is one value for both channels, got {listed(sorted(map(str, values)))}"
                )
            value = str(values.pop())
            shared[key] = value if key in ("units", "source") else _number(path, key, value)
        try:
            red, infrared = (
                LidarChannel(**{key: _part(path, key, value) for key, value in columns[name].items()})
                for name in CHANNELS
            )
            return cls(red=red, infrared=infrared, **shared)
        except (ValueError, TypeError) as error:
            text = str(error).replace(
                "LidarChannel.__init__() missing 1 required keyword-only argument: ", "no column "
            )
            raise ValueError(text if text.startswith(str(path)) else f"{path}: {text}") from None


def _part(path: Path, key: str, text: str) -> Any:
    if key != "background_subtracted":
        return _number(path, key, text)
    words = {"true": True, "yes": True, "1": True, "false": False, "no": False, "0": False}
    if text.lower() not in words:
        raise ValueError(f"{path}: {key} must be true or false, got {text!r}")
    return words[text.lower()]


def _number(path: Path, key: str, text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise ValueError(f"{path}: {key} must be a number, got {text!r}") from None
