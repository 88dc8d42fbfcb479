"""``bandratio ice``: lidar returns in, candidate ice out, with a closing table and a picture."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import click

from ._running import scheduled

__all__ = ["command"]

_TABLES = (".csv", ".parquet")


@click.command(
    epilog="Example: bandratio ice shots.laz -o ice.nc --calibration lidar.csv --red intensity_640 --infrared "
    "intensity_1535 --zero dropout --ice-free mare --picture plane.png"
)
@click.argument("returns")
@click.argument("infrared_returns", required=False)
@click.option(
    "-o", "--output", required=True, metavar="OUT", help=".nc, .zarr, .csv, .parquet; with --like also .tif."
)
@click.option(
    "--red", default="red", show_default=True, metavar="COLUMN", help="Return energy of the red laser."
)
@click.option(
    "--infrared", default="infrared", show_default=True, metavar="COLUMN", help="Of the infrared laser."
)
@click.option(
    "--column",
    "columns",
    multiple=True,
    metavar="NAME=COLUMN",
    help="Where else something stands, e.g. range_m=range.",
)
@click.option(
    "--unit", "units", multiple=True, metavar="NAME=UNIT", help="Unit the file does not say, e.g. range_m=km."
)
@click.option(
    "--zero",
    type=click.Choice(["dropout", "missing"]),
    help="What a stored zero means; never guessed where there is one.",
)
@click.option("--saturated", type=float, help="Energy from which on a return is saturated.")
@click.option(
    "--pair-radius", type=float, help="Two lasers with shots of their own: largest distance of a pair [m]."
)
@click.option("--crs", help="Map projection of the positions, where the file does not say it.")
@click.option(
    "--calibration", metavar="FILE.csv", help="Receiver constants, noise and limits of both channels."
)
@click.option(
    "--albedos", is_flag=True, help="The columns are albedos already, with columns sigma_red, sigma_infrared."
)
@click.option("--relative-red", default=0.0, help="With --albedos: error of each shot's own, as a fraction.")
@click.option("--relative-infrared", default=0.0, help="With --albedos: the same for the infrared.")
@click.option(
    "--gain-sigma", default=0.0, help="With --albedos: error of the red/infrared gain, a fraction, shared."
)
@click.option("--limit", type=float, help="With --albedos: least infrared albedo that the receiver sees.")
@click.option(
    "--like", metavar="MAPS", help="Sum the shots onto the grid of this cube or map, then flag the grid."
)
@click.option(
    "--pool", default=1, show_default=True, help="With --like: side of the neighbourhood that is summed."
)
@click.option(
    "--ice-free",
    metavar="NAME,NAME,…",
    help="Ice-free ground: mare, highland, groups or materials; else any rock.",
)
@click.option(
    "--ice-free-ratio", type=float, help="Highest red/infrared ratio of ice-free ground: the ratio test."
)
@click.option(
    "--ice-free-sigma", default=0.0, help="Uncertainty of the ice-free materials' ratio, a fraction."
)
@click.option("--ice", metavar="NAME,NAME,…", help="Ices: snow, frost, frost 50 µm, …; else snow and frost.")
@click.option("--opposition-ratio", default=1.0, help="Opposition brightening of red over infrared.")
@click.option(
    "--incidence", metavar="unknown|DEG", help="Where the file has none: unknown, or one angle [degree]."
)
@click.option("--red-nm", default=640.0, show_default=True, help="Red wavelength [nm].")
@click.option("--infrared-nm", default=1535.0, show_default=True, help="Infrared wavelength [nm].")
@click.option(
    "--false-discovery-rate", default=0.05, show_default=True, help="Share of false candidates, at most."
)
@click.option("--dependence", type=click.Choice(["positive", "any"]), default="positive", show_default=True)
@click.option(
    "--least-fraction", default=0.1, show_default=True, help="Ice-free: less than this areal fraction."
)
@click.option("--picture", metavar="FILE", help="Picture of the plane of red and infrared albedo.")
@click.option("--overwrite", is_flag=True, help="Replace OUT where it exists.")
def command(returns: str, infrared_returns: str | None, output: str, **given: Any) -> None:
    """Flag candidate ice in lidar RETURNS of two wavelengths, with a known false discovery rate.

    Flags are indicators to follow up, never proof of ice. INFRARED_RETURNS is the second file, where each laser
    has its own.
    """
    _check(output, given)
    with scheduled(None, None):
        arguments, albedos = _arguments([returns, *([infrared_returns] if infrared_returns else [])], given)
        from ..ice import ice_flags

        flags = ice_flags(**arguments)
        found = flags.assign(red=arguments["red"], infrared=arguments["infrared"])
        for name in ("red", "infrared"):
            found[name].attrs |= {"long_name": f"{name} albedo", "units": "1"}
        found = found.assign_coords(
            {name: values for name, values in albedos.coords.items() if name not in found}
        )
        _write(found, Path(output), overwrite=given["overwrite"])
        written = _opened(found, Path(output))
        click.echo(_closing(written))
        if given["picture"]:
            from ..plots import plot_ice_plane

            plot_ice_plane(written, written["red"], written["infrared"]).figure.savefig(given["picture"])
            click.echo(f"picture in {given['picture']}")
    click.echo(f"written to {output}")


def _check(output: str, given: dict[str, Any]) -> None:
    suffix = Path(output).suffix.lower()
    known = (".nc", ".zarr", *(() if given["like"] else _TABLES), *((".tif",) if given["like"] else ()))
    if suffix not in known:
        raise ValueError(f"OUT must end in {', '.join(known)}, got {output!r}")
    if Path(output).exists() and not given["overwrite"]:
        raise FileExistsError(f"{output} is there already; give --overwrite to replace it")
    if given["albedos"] == (given["calibration"] is not None):
        raise ValueError(
            "give either --calibration FILE.csv (the columns are return energies) or --albedos (they are albedos)"
        )
    if given["albedos"] and given["like"]:
        raise ValueError(
            "--like sums return energies, and needs --calibration; albedos are flagged shot by shot"
        )
    if given["picture"] and not Path(given["picture"]).resolve().parent.is_dir():
        raise ValueError(f"the folder of the picture {given['picture']} does not exist")


def _arguments(paths: list[str], given: dict[str, Any]) -> tuple[dict[str, Any], Any]:
    """What `ice_flags` is to be given, and the albedos with their positions."""
    from ..files import open_returns

    pairs = {name: _pairs(given[name], f"--{name[:-1]}") for name in ("columns", "units")}
    returns = open_returns(
        paths if len(paths) > 1 else paths[0],
        red=given["red"],
        infrared=given["infrared"],
        crs=given["crs"],
        zero=given["zero"],
        saturated=given["saturated"],
        pair_radius=given["pair_radius"],
        columns=pairs["columns"] or None,
        units=pairs["units"] or None,
    )
    common = {
        "ice_free": _words(given["ice_free"]),
        "ice_free_ratio": given["ice_free_ratio"],
        "ice_free_sigma": given["ice_free_sigma"],
        "ice": _words(given["ice"]),
        "red_nm": given["red_nm"],
        "infrared_nm": given["infrared_nm"],
        "false_discovery_rate": given["false_discovery_rate"],
        "dependence": given["dependence"],
        "least_fraction": given["least_fraction"],
    }
    incidence = given["incidence"]
    if incidence not in (None, "unknown"):
        incidence = _angle(incidence)
    if given["albedos"]:
        return _from_albedos(returns, incidence, given) | common, returns
    from ..lidar import LidarCalibration, albedo_from_returns, flag_arguments, grid_returns

    albedos = albedo_from_returns(
        returns,
        LidarCalibration.from_csv(given["calibration"]),
        incidence_deg=incidence,
        opposition_ratio=given["opposition_ratio"],
    )
    if given["like"]:
        from ..files import open_cube

        albedos = grid_returns(albedos, open_cube(given["like"]), pool=given["pool"])
    return flag_arguments(albedos) | common, albedos


def _from_albedos(returns: Any, incidence: Any, given: dict[str, Any]) -> dict[str, Any]:
    from ..lidar.returns import QUALITY

    absent = [name for name in ("sigma_red", "sigma_infrared") if name not in returns]
    if absent:
        raise ValueError(
            f"the file has no {' and no '.join(absent)}; name the column with --column {absent[0]}=COLUMN"
        )
    angle = returns.get("incidence_deg") if incidence is None else incidence
    limit = given["limit"]
    if limit is not None:  # what is missing for another reason than a weak return stays missing
        limit = (returns["infrared_quality"] <= QUALITY["dropout"]).astype(float) * limit
        limit = limit.where(limit > 0)
    return {
        "red": returns["red"],
        "infrared": returns["infrared"],
        "sigma_red": returns["sigma_red"],
        "sigma_infrared": returns["sigma_infrared"],
        "relative_red": given["relative_red"],
        "relative_infrared": given["relative_infrared"],
        "gain_sigma": given["gain_sigma"],
        "infrared_limit": limit,
        "incidence_deg": float("nan") if isinstance(angle, str) else angle,
        "opposition_ratio": given["opposition_ratio"],
    }


def _words(text: str | None) -> list[str] | None:
    return None if text is None else [word.strip() for word in text.split(",") if word.strip()]


def _pairs(given: tuple[str, ...], option: str) -> dict[str, str]:
    pairs = dict(entry.partition("=")[::2] for entry in given)
    if not all(name and value for name, value in pairs.items()):
        raise ValueError(f"{option} wants NAME=VALUE, such as range_m=range, got {', '.join(given)}")
    return pairs


def _angle(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise ValueError(f"--incidence wants unknown or an angle in degrees, got {text!r}") from None


def _write(found: Any, path: Path, *, overwrite: bool) -> None:
    if path.suffix.lower() not in _TABLES:
        from ..files import write_maps

        write_maps(found, path, overwrite=overwrite)
        return
    from ..files import beside

    table = found.compute().drop_vars("spatial_ref", errors="ignore").reset_coords().to_dataframe()
    words = found["flag"].attrs["flag_meanings"].split()
    table["flag"] = [words[code] for code in table["flag"]]
    with beside(path, overwrite=overwrite) as unfinished:
        if path.suffix.lower() == ".csv":
            table.to_csv(unfinished, index_label="shot")
        else:
            table.to_parquet(unfinished)


def _opened(found: Any, path: Path) -> Any:
    """What was written, so that nothing is computed twice; a table does not keep the attributes."""
    if path.suffix.lower() in (".nc", ".zarr", ".tif"):
        from ..files import open_maps

        return open_maps(path).assign_attrs(found.attrs)
    return found.compute()


def _closing(flags: Any) -> str:
    """Counts of each flag, percentiles of the ratio, the lists used, the least ice that is seen, the caution."""
    import numpy as np

    codes = np.asarray(flags["flag"].values)
    words = flags["flag"].attrs["flag_meanings"].split()
    counts = np.bincount(codes[codes >= 0].astype(int).ravel(), minlength=len(words))
    lines = [f"{'flag':<14}{'count':>12}{'share':>9}"]
    lines += [
        f"{word.replace('_', ' '):<14}{count:>12,}{count / max(codes.size, 1):>9.2%}"
        for word, count in zip(words, counts, strict=True)
    ]
    ratio = np.asarray(flags["ratio"].values)
    ratio = ratio[np.isfinite(ratio)]
    if ratio.size:
        low, middle, high = np.percentile(ratio, [5, 50, 95])
        lines.append(f"ratio red/infrared: 5 % {low:.3g}, 50 % {middle:.3g}, 95 % {high:.3g}")
    lines.append(f"ice-free ground: {flags.attrs['ice_free']}")
    lines.append(f"ice: {flags.attrs['ice']}")
    lines.append(f"least areal ice seen at the median noise: {flags.attrs['least_areal_ice_meaning']}")
    if "finding" in flags.attrs:
        lines.append(f"take care: {flags.attrs['finding']}")
    lines.append(str(flags.attrs["caution"]))
    return "\n".join(lines)
