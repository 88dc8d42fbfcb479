"""Means over regions: the ratio of the region's sums, with what averages away and what regions share."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import replace
from typing import Any

import numpy as np
import xarray as xr
from numpy.typing import NDArray

from ..bands import TOLERANCE_NM
from ..catalogue import resolve
from ..cube import is_lazy, require_cube
from ..maps import map_attributes
from ..noise import BandNoise, Noise
from ..ratio import BandRatio
from .membership import Membership

__all__ = ["region_means"]

_PART = {
    "_sigma": "standard uncertainty of ",
    "_sigma_random": "random part of the standard uncertainty of ",
    "_sigma_shared": "shared part of the standard uncertainty of ",
}


def region_means(
    cube: xr.DataArray,
    noise: Noise | None,
    regions: Any,
    names: Sequence[str | BandRatio] | Mapping[str, BandRatio] | str | BandRatio | None = None,
    *,
    correlation_area: float = 1.0,
    tolerance: float = TOLERANCE_NM,
    covariance: bool = True,
) -> xr.Dataset:
    """Spectral parameters of whole regions, with standard uncertainties and the covariance between regions.

    Parameters
    ----------
    cube : DataArray, dimensions (wavelength, …)
        Reflectance; a lazy cube is read once, in stripes.
    noise : Noise or None
        What is known about the errors; None gives values and spreads only.
    regions : array of int, GeoDataFrame or path
        Labels on the cube's pixels (0: no region); or polygons, which hold the pixels whose centre lies inside and may
        overlap; or a file of either (.tif, .gpkg, .geojson, .shp, .parquet).
    names : sequence of str and BandRatio, or mapping, optional
        Which parameters, as for ``parameters``.
    correlation_area : float
        Number of pixels that share one random error, 1 unless the image was resampled: n pixels then count as
        n / correlation_area independent ones.
    tolerance : float
        Largest distance between a nominal wavelength and a band's centre [nm].
    covariance : bool
        Also give the covariance between all regions, a square matrix for each parameter.

    Returns
    -------
    Dataset over ``region``
        ``<name>``, ``<name>_sigma``, ``<name>_sigma_random``, ``<name>_sigma_shared``, ``<name>_spread`` (standard
        deviation of the pixels' values, ground and noise together), ``n_pixels``, and ``<name>_covariance``
        (region, region2). NaN for a region without a whole pixel.

    Raises
    ------
    TypeError, ValueError, OSError
        If the cube, the noise, the regions or the names do not fit.

    Notes
    -----
    A region's mean of a ratio is the ratio of its sums over the pixels that have every band, which noise does not bias.
    With S_j the region's mean reflectance and g_j = ∂p/∂S_j, random errors add Σ_j g_j² v_j / n (a cube's pixel_gain
    Σ_jk g_j g_k c_jk / n, with c its mean covariance between the bands), and errors that all
    pixels share stay, however large the region. The difference of two regions has the variance
    ``cov[a, a] + cov[b, b] − 2·cov[a, b]``: much of what they share cancels in it.

    Examples
    --------
    >>> import bandratio as br
    >>> cube = br.as_cube(np.full((2, 4, 4), 0.2), [600, 700])
    >>> labels = np.repeat([[1], [1], [2], [2]], 4, axis=1)
    >>> means = br.region_means(cube, br.Noise(random=0.002, band_offset=0.001), labels, ["reflectance_700"])
    >>> means.reflectance_700_sigma_random.values.round(5).tolist(), means.reflectance_700_sigma_shared.values.tolist()
    ([0.00071, 0.00071], [0.001, 0.001])
    """
    cube = require_cube(cube)
    if noise is not None and not isinstance(noise, Noise):
        raise TypeError(
            f"noise must be a br.Noise or None, got {type(noise).__name__}; br.Noise(random={noise!r})?"
        )
    if not correlation_area >= 1 or not np.isfinite(correlation_area):
        raise ValueError(f"correlation_area is a number of pixels, 1 or more, got {correlation_area}")
    centres = np.asarray(cube["wavelength"].values, dtype=float)
    ratios, _ = resolve(names, centres, tolerance=tolerance)
    if not ratios:
        raise ValueError("the bands allow no parameter of the catalogue; give names=… with BandRatio objects")
    members = Membership.of(regions, cube)
    sums = _Sums.over(cube, noise, members, list(ratios.values()), tolerance)
    variables: dict[str, Any] = {
        "n_pixels": (
            "region",
            sums.pixels.sum(axis=1).astype(np.int64),
            {"long_name": "pixels with every band", "units": "1"},
        )
    }
    for place, (name, ratio) in enumerate(ratios.items()):
        found = _propagate(ratio, sums, correlation_area, tolerance, covariance=covariance)
        attributes = map_attributes(
            ratio, "", ["", *_PART] if noise is not None else [""], centres, tolerance
        )
        variables[name] = ("region", found["value"], attributes)
        unit = {"units": ratio.units}
        readable = ratio.long_name or ratio.definition
        if noise is not None:
            for suffix, text in _PART.items():
                variables[name + suffix] = ("region", found[suffix], {"long_name": text + readable, **unit})
            if covariance:
                squared = {
                    "long_name": f"covariance between regions of {readable}",
                    "units": f"({ratio.units})²",
                }
                variables[f"{name}_covariance"] = (("region", "region2"), found["covariance"], squared)
        spread = {"long_name": f"standard deviation of the pixels' {readable}", **unit}
        variables[f"{name}_spread"] = ("region", sums.spread(place), spread)
    coords: dict[str, Any] = {"region": members.names}
    if covariance and noise is not None:
        coords["region2"] = members.names
    coords.update({str(key): c for key, c in cube.coords.items() if c.ndim == 0})
    attributes = {"Conventions": "CF-1.11", "noise": noise.describe() if noise is not None else "none given"}
    return xr.Dataset(variables, coords, {**attributes, "correlation_area": float(correlation_area)})


class _Sums:
    """What one pass over the pixels leaves: sums per region and group of shared errors."""

    def __init__(
        self, band: BandNoise | None, centres: NDArray, regions: int, groups: int, ratios: int
    ) -> None:
        self.band, self.centres = band, centres
        self.pixels = np.zeros((regions, groups))
        self.reflectance = np.zeros((centres.size, regions, groups))
        # sums of the brightness factor, which is one unless given
        self.factor = np.zeros((centres.size, regions, groups))
        self.random = np.zeros((centres.size, regions))
        self.overlap_names = np.empty((0, 2), dtype=np.int64)
        self.overlap_random = np.zeros((centres.size, 0))
        # of the gain error that the bands of a pixel share: a covariance between bands, (band, band, region)
        self.common = np.zeros((centres.size, centres.size, regions))
        self.overlap_common = np.zeros((centres.size, centres.size, 0))
        self._count = np.zeros((ratios, regions))
        self._mean = np.zeros((ratios, regions))
        self._square = np.zeros((ratios, regions))

    @classmethod
    def over(
        cls,
        cube: xr.DataArray,
        noise: Noise | None,
        members: Membership,
        ratios: list[BandRatio],
        tolerance: float,
    ) -> _Sums:
        from ..kernel import RatioTable, evaluate

        centres = np.asarray(cube["wavelength"].values, dtype=float)
        used = np.zeros(centres.size, dtype=bool)
        for ratio in ratios:
            used |= np.any(np.array(ratio.weights_for(centres, tolerance)) != 0, axis=0)
        band = None if noise is None else noise.for_cube(cube, tolerance)
        if band is not None:
            held = {
                part: getattr(band, part).isel(wavelength=used)
                for part in ("random", "relative", "band_gain", "band_offset", "shot", "brightness_factor")
                if "wavelength" in getattr(getattr(band, part), "dims", ())
            }
            band = replace(band, **held)
        cube = cube.isel(wavelength=used)
        table = RatioTable.build(ratios, centres[used], tolerance)
        group, groups = _groups(noise, cube)
        overlaps = members.overlaps()
        sums = cls(band, centres[used], members.names.size, groups, len(ratios))
        sums.overlap_names = overlaps.names
        sums.overlap_random = np.zeros((sums.centres.size, len(overlaps.names)))
        sums.overlap_common = np.zeros((sums.centres.size, sums.centres.size, len(overlaps.names)))
        for start, R, planes in _stripes(cube, band):
            gain = planes.get("pixel_gain")
            here = slice(*np.searchsorted(members.pixel, [start, start + R.shape[1]]))
            pixel, region = members.pixel[here] - start, members.region[here]
            # a row of float64 for each band of the region's pixels, and of those only what has every band
            chosen = R[:, pixel].astype(float)
            whole = np.isfinite(chosen).all(axis=0)
            chosen, region, pixel = chosen[:, whole], region[whole], pixel[whole]
            of_group = np.zeros(pixel.size, dtype=np.int64) if group is None else group[pixel + start]
            sums._add(chosen, planes.get("brightness_factor"), pixel, region, of_group)
            sums._add_spread(evaluate(chosen, table)[:, 0], region)
            if band is None:
                continue
            sums.random += sums._random_variance(chosen, pixel, planes, region, sums.random.shape[1])
            if gain is not None:
                sums.common += _common_covariance(chosen, gain[0, pixel], region, sums.random.shape[1])
            both = slice(*np.searchsorted(overlaps.pixel, [start, start + R.shape[1]]))
            if both.stop > both.start:
                twice, pair = overlaps.pixel[both] - start, overlaps.region[both]
                of_both = R[:, twice].astype(float)
                good = np.isfinite(of_both).all(axis=0)
                sums.overlap_random += sums._random_variance(
                    of_both[:, good], twice[good], planes, pair[good], len(overlaps.names)
                )
                if gain is not None:
                    sums.overlap_common += _common_covariance(
                        of_both[:, good], gain[0, twice[good]], pair[good], len(overlaps.names)
                    )
        return sums

    def _add(
        self, R: NDArray, factor: NDArray | None, pixel: NDArray, region: NDArray, group: NDArray
    ) -> None:
        regions, groups = self.pixels.shape
        key = region * groups + group
        count = np.bincount(key, minlength=regions * groups).reshape(regions, groups)
        self.pixels += count
        if factor is None:
            self.factor += count
        else:
            rows = [np.bincount(key, row[pixel], regions * groups) for row in factor]
            self.factor += np.reshape(rows, (len(rows), regions, groups))
        for j, row in enumerate(R):
            self.reflectance[j] += np.bincount(key, row, regions * groups).reshape(regions, groups)

    def _random_variance(
        self, R: NDArray, pixel: NDArray, planes: dict[str, NDArray], region: NDArray, regions: int
    ) -> NDArray[np.float64]:
        """Sum over the pixels of each region of every band's random variance, shape (band, region)."""
        assert self.band is not None

        def of_band(name: str, j: int) -> NDArray[np.float64]:
            plane = planes[name]
            row: NDArray[np.float64] = plane[j if plane.shape[0] > 1 else 0, pixel].astype(float)
            return row

        total = np.empty((R.shape[0], regions))
        for j, row in enumerate(R):
            f = of_band("brightness_factor", j) if "brightness_factor" in planes else 1.0
            random = of_band("random", j) if "random" in planes else self.band.random.values[j]
            shot, relative = self.band.shot.values[j], self.band.relative.values[j]
            variance = (f * random) ** 2 + f * shot**2 * np.maximum(row, 0) + (relative * row) ** 2
            total[j] = np.bincount(region, variance, regions)
        return total

    def _add_spread(self, values: NDArray, region: NDArray) -> None:
        """Merge means and sums of squared deviations (Chan, Golub & LeVeque 1983, Am. Stat. 37, 242; from memory)."""
        regions = self.pixels.shape[0]
        for k, of_pixels in enumerate(values):
            good = np.isfinite(of_pixels)
            p, r = of_pixels[good], region[good]
            count = np.bincount(r, minlength=regions)
            with np.errstate(invalid="ignore"):
                mean = np.where(count > 0, np.bincount(r, p, regions) / np.maximum(count, 1), 0)
            square = np.bincount(r, (p - mean[r]) ** 2, regions)
            both = self._count[k] + count
            share = count / np.maximum(both, 1)
            shift = mean - self._mean[k]
            self._square[k] += square + shift**2 * self._count[k] * share
            self._mean[k] += shift * share
            self._count[k] = both

    def spread(self, place: int) -> NDArray[np.float64]:
        """Sample standard deviation of the pixels' values of one ratio, NaN below two pixels."""
        count = self._count[place]
        return np.sqrt(np.where(count > 1, self._square[place] / np.maximum(count - 1, 1), np.nan))


def _common_covariance(R: NDArray, gain: NDArray, region: NDArray, regions: int) -> NDArray[np.float64]:
    """Sum over the pixels of each region of the bands' covariance by a gain error that they share."""
    bands = R.shape[0]
    total = np.empty((bands, bands, regions))
    for j in range(bands):
        for k in range(j + 1):
            total[j, k] = total[k, j] = np.bincount(region, gain.astype(float) ** 2 * R[j] * R[k], regions)
    return total


def _groups(noise: Noise | None, cube: xr.DataArray) -> tuple[NDArray[np.int64] | None, int]:
    """Group of shared errors of each pixel, flat, and how many groups there are."""
    if noise is None or noise.shared_within is None:
        return None, 1
    dims, shape = cube.dims[1:], cube.shape[1:]
    labels = noise.shared_within
    if isinstance(labels, xr.DataArray):
        labels = labels.transpose(*dims).values if set(labels.dims) == set(dims) else labels.values
    if np.shape(labels) != shape:
        raise ValueError(
            f"noise.shared_within has the shape {np.shape(labels)}, and the cube's pixels {shape}"
        )
    names, group = np.unique(np.asarray(labels).reshape(-1), return_inverse=True)
    return group.reshape(-1).astype(np.int64), names.size


def _stripes(cube: xr.DataArray, band: BandNoise | None) -> Iterator[tuple[int, NDArray, dict[str, NDArray]]]:
    """First pixel, reflectances (band, pixel) and what of the noise differs by pixel of one stripe after another."""
    first = cube.dims[1] if cube.ndim > 1 else None
    planes: dict[str, xr.DataArray] = {}
    for name in () if band is None else ("random", "pixel_gain", "brightness_factor"):
        plane = getattr(band, name)
        if isinstance(plane, xr.DataArray) and plane.dims != ("wavelength",):
            plane = plane if "wavelength" in plane.dims else plane.expand_dims("wavelength")
            missing = {dim: cube.sizes[dim] for dim in cube.dims[1:] if dim not in plane.dims}
            planes[name] = plane.expand_dims(missing).transpose(*cube.dims)
    if first is None or not is_lazy(cube):
        stops = [cube.sizes[first] if first is not None else 1]
    else:
        assert cube.chunks is not None
        stops = np.cumsum(cube.chunks[1]).tolist()
    row = cube[0].size // max(cube.sizes[first], 1) if first is not None else 1

    def flat(array: xr.DataArray, start: int, stop: int) -> NDArray:
        part = array if first is None else array.isel({first: slice(start, stop)})
        return np.asarray(part.values).reshape(array.shape[0], -1)

    start = 0
    for stop in stops:
        here = {name: flat(plane, start, stop) for name, plane in planes.items()}
        yield start * row, flat(cube, start, stop), here
        start = stop


def _propagate(
    ratio: BandRatio, sums: _Sums, correlation_area: float, tolerance: float, *, covariance: bool
) -> dict[str, NDArray]:
    n = sums.pixels.sum(axis=1)
    with np.errstate(invalid="ignore", divide="ignore"):
        factor = sums.factor / n[:, None]  # (band, region, group)
        part = sums.reflectance / n[:, None]  # (band, region, group)
    mean = xr.DataArray(part.sum(axis=2), {"wavelength": sums.centres}, ("wavelength", "region"))
    value = ratio.value(mean, tolerance=tolerance).values
    if sums.band is None:
        return {"value": value}
    g = ratio.gradient(mean, tolerance=tolerance).values  # (band, region)
    with np.errstate(invalid="ignore", divide="ignore"):
        random = (g**2 * sums.random).sum(axis=0) + np.einsum("jr,kr,jkr->r", g, g, sums.common)
        random = random / n**2 * np.minimum(correlation_area, n)
    # one column for each independent shared error: each band's gain and offset, and the common gain, in each group
    columns = [g[:, :, None] * sums.band.band_gain.values[:, None, None] * part]
    columns.append(g[:, :, None] * sums.band.band_offset.values[:, None, None] * factor)
    if not (ratio.is_pure and factor.shape[2] == 1):
        columns.append(sums.band.common_gain * (g[:, :, None] * part).sum(axis=0, keepdims=True))
    errors = np.concatenate(columns).transpose(1, 0, 2).reshape(n.size, -1)
    shared = (errors**2).sum(axis=1)
    found = {
        "value": value,
        "_sigma": np.sqrt(random + shared),
        "_sigma_random": np.sqrt(random),
        "_sigma_shared": np.sqrt(shared),
    }
    if covariance:
        matrix = errors @ errors.T + np.diag(random)
        for pair, (a, b) in enumerate(sums.overlap_names.tolist()):
            area = min(correlation_area, n[a], n[b])
            common = (g[:, a] * g[:, b] * sums.overlap_random[:, pair]).sum()
            common += g[:, a] @ sums.overlap_common[:, :, pair] @ g[:, b]
            common *= area / (n[a] * n[b])
            matrix[a, b] += common
            matrix[b, a] += common
        found["covariance"] = matrix
    return found
