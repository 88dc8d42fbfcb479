"""Response curves of bands, and the exact average of a piecewise linear spectrum under them. Arrays only."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from .._checks import listed, positive
from ..bands import wavelength_array

__all__ = ["LARGEST_GAP_NM", "Gaussian", "Monochromatic", "Response", "Tabulated", "Weights", "band_weights"]

#: FWHM of a Gaussian in units of its sigma, 2√(2 ln 2).
FWHM_PER_SIGMA = 2.3548200450309493
#: Half width of the part of a Gaussian band that counts, in sigmas: 6e-5 of the response lies outside.
HALF_SUPPORT_SIGMA = 4.0
#: Share of a tabulated response's peak below which its tail is left out (common practice, no source).
TAIL_OF_PEAK = 1e-3
#: Largest distance between two points of a spectrum that a straight line may bridge where no band width says
#: more [nm]: a fifth of a typical mineral absorption's width near 1 µm (common practice, no source).
LARGEST_GAP_NM = 70.0


class Response(Protocol):
    """A band's response curve: where it is not zero, how wide it is, and its running moments."""

    @property
    def centre(self) -> float:
        """Wavelength that moments are taken about [nm]."""

    @property
    def width(self) -> float:
        """Largest distance of a spectrum's channels that resolves the band [nm]."""

    @property
    def support(self) -> tuple[float, float]:
        """First and last wavelength where the response counts [nm]."""

    def moments(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        """∫ uᵐ·r du up to each `u` [nm from the centre] for m = 0, 1, 2: shape (3, …)."""


@dataclass(frozen=True)
class Gaussian:
    """A Gaussian response, cut off at four sigmas.

    Parameters
    ----------
    centre, fwhm : float
        Centre and full width at half maximum [nm].
    """

    centre: float
    fwhm: float

    def __post_init__(self) -> None:
        positive("fwhm", self.fwhm, "nm")

    @property
    def width(self) -> float:
        """Its FWHM [nm]."""
        return self.fwhm

    @property
    def support(self) -> tuple[float, float]:
        """Four sigmas on both sides [nm]."""
        half = HALF_SUPPORT_SIGMA * self.fwhm / FWHM_PER_SIGMA
        return self.centre - half, self.centre + half

    def moments(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        """∫ uᵐ·r du from far below up to each `u`, in closed form."""
        from scipy.special import ndtr

        sigma = self.fwhm / FWHM_PER_SIGMA
        z = u / sigma
        density = np.exp(-(z**2) / 2) / np.sqrt(2 * np.pi)
        return np.stack([ndtr(z), -sigma * density, sigma**2 * (ndtr(z) - z * density)])


@dataclass(frozen=True, eq=False)
class Tabulated:
    """A response curve given at wavelengths, with straight lines between them.

    Parameters
    ----------
    wavelengths : array_like, shape (point,)
        Ascending [nm].
    values : array_like, shape (point,)
        Response in any unit, not negative. Tails below a thousandth of the peak are left out.
    name : str
        For messages.
    """

    wavelengths: NDArray[np.float64]
    values: NDArray[np.float64]
    name: str = "the response"

    def __post_init__(self) -> None:
        x = wavelength_array(self.wavelengths, f"the wavelengths of {self.name}")
        r = np.asarray(self.values, dtype=float)
        if r.shape != x.shape:
            raise ValueError(
                f"{self.name} has {x.size} wavelengths and {r.size} values; give one value for each"
            )
        if x.size < 2 or not (np.diff(x) > 0).all():
            raise ValueError(
                f"the wavelengths of {self.name} must ascend, two or more; got {listed(x[:5].tolist())}"
            )
        if not np.isfinite(r).all() or (r < 0).any() or not (r > 0).any():
            raise ValueError(f"{self.name} must be finite, nowhere negative, and somewhere above zero")
        above = np.flatnonzero(r > TAIL_OF_PEAK * r.max())
        kept = slice(max(above[0] - 1, 0), above[-1] + 2)
        object.__setattr__(self, "wavelengths", x[kept])
        object.__setattr__(self, "values", r[kept])

    @property
    def centre(self) -> float:
        """Centroid of the response: the effective wavelength of a flat spectrum [nm]."""
        x, r = self.wavelengths, self.values
        h = np.diff(x)
        area = h * (r[1:] + r[:-1]) / 2
        first = h * (x[:-1] * (2 * r[:-1] + r[1:]) + x[1:] * (r[:-1] + 2 * r[1:])) / 6
        return float(first.sum() / area.sum())

    @property
    def width(self) -> float:
        """Area over peak [nm]."""
        return float(np.trapezoid(self.values, self.wavelengths) / self.values.max())

    @property
    def support(self) -> tuple[float, float]:
        """First and last tabulated wavelength [nm]."""
        return float(self.wavelengths[0]), float(self.wavelengths[-1])

    def moments(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        """∫ uᵐ·r du from the first point up to each `u`, exact for straight lines."""
        nodes, r = self.wavelengths - self.centre, self.values
        slope = np.diff(r) / np.diff(nodes)

        def within(k: NDArray[np.intp], t: NDArray[np.float64]) -> NDArray[np.float64]:
            a, b, s = nodes[k], r[k], slope[k]
            return np.stack(
                [
                    b * t + s * t**2 / 2,
                    a * b * t + (b + a * s) * t**2 / 2 + s * t**3 / 3,
                    a**2 * b * t
                    + (2 * a * b + a**2 * s) * t**2 / 2
                    + (b + 2 * a * s) * t**3 / 3
                    + s * t**4 / 4,
                ]
            )

        pieces = within(np.arange(slope.size), np.diff(nodes))
        before = np.concatenate([np.zeros((3, 1)), np.cumsum(pieces, axis=1)], axis=1)
        clipped = np.clip(u, nodes[0], nodes[-1])
        piece = np.clip(np.searchsorted(nodes, clipped, side="right") - 1, 0, slope.size - 1)
        return before[:, piece] + within(piece, clipped - nodes[piece])


@dataclass(frozen=True)
class Monochromatic:
    """A band without width: the spectrum's value at one wavelength.

    Parameters
    ----------
    centre : float
        Wavelength [nm].
    """

    centre: float

    @property
    def width(self) -> float:
        """As far as a straight line may reach without knowing more [nm]."""
        return LARGEST_GAP_NM

    @property
    def support(self) -> tuple[float, float]:
        """The one wavelength, twice [nm]."""
        return self.centre, self.centre

    def moments(self, u: NDArray[np.float64]) -> NDArray[np.float64]:
        """An impulse at the centre."""
        # a unit impulse at the centre, u = 0
        return np.stack([(u >= 0).astype(float), np.zeros_like(u), np.zeros_like(u)])


@dataclass(frozen=True)
class Weights:
    """Weights of a spectrum's channels in one band.

    Parameters
    ----------
    mean : ndarray, shape (channel,)
        Weights of the band average; they sum to one.
    moment : ndarray, shape (channel,)
        Weights of ∫ (λ − centre)·S·r dλ / ∫ r dλ [nm].
    gap : float
        Widest distance between neighbouring channels under the band [nm].
    spacing : float
        Median distance between channels under the band and a few beside it [nm].
    """

    mean: NDArray[np.float64]
    moment: NDArray[np.float64]
    gap: float
    spacing: float


def band_weights(channels: NDArray[np.float64], response: Response) -> Weights | None:
    """Weights that average a spectrum under a response, exactly for straight lines between its channels.

    Parameters
    ----------
    channels : ndarray, shape (channel,)
        Wavelengths where the spectrum has a value, ascending [nm].
    response : Response
        The band.

    Returns
    -------
    Weights or None
        None where the channels do not cover the response's whole support.

    Notes
    -----
    On the segment from channel k to k+1, of length h, S = S_k + (S_{k+1} − S_k)·(u − u_k)/h with u the wavelength
    from the band's centre. With A_m = ∫ uᵐ·r du over the segment, ∫ S·r du gives channel k the weight
    A_0 − (A_1 − u_k·A_0)/h and channel k+1 the weight (A_1 − u_k·A_0)/h; the first moment likewise with A_1, A_2.
    """
    low, high = response.support
    if channels.size == 0 or channels[0] > low + 1e-9 or channels[-1] < high - 1e-9:
        return None
    mean, moment = np.zeros(channels.size), np.zeros(channels.size)
    if isinstance(response, Monochromatic):
        return _interpolation(channels, response.centre)
    first = max(int(np.searchsorted(channels, low, side="right")) - 1, 0)
    last = min(int(np.searchsorted(channels, high, side="left")), channels.size - 1)
    u = channels[first : last + 1] - response.centre
    h = np.diff(u)
    limits = np.clip(u, low - response.centre, high - response.centre)
    A0, A1, A2 = np.diff(response.moments(limits), axis=1)
    right = (A1 - u[:-1] * A0) / h
    mean[first:last] += A0 - right
    mean[first + 1 : last + 1] += right
    right = (A2 - u[:-1] * A1) / h
    moment[first:last] += A1 - right
    moment[first + 1 : last + 1] += right
    total = A0.sum()
    beside = np.diff(channels[max(first - 3, 0) : last + 4])
    return Weights(mean / total, moment / total, float(h.max()), float(np.median(beside)))


def _interpolation(channels: NDArray[np.float64], wavelength: float) -> Weights:
    mean, moment = np.zeros(channels.size), np.zeros(channels.size)
    right = int(np.searchsorted(channels, wavelength, side="left"))
    if right < channels.size and channels[right] == wavelength:
        mean[right] = 1.0
        return Weights(mean, moment, 0.0, 0.0)
    if right == channels.size:  # within rounding of the last channel
        mean[-1] = 1.0
        return Weights(mean, moment, 0.0, 0.0)
    if right == 0:
        mean[0] = 1.0
        return Weights(mean, moment, 0.0, 0.0)
    h = channels[right] - channels[right - 1]
    mean[right] = (wavelength - channels[right - 1]) / h
    mean[right - 1] = 1 - mean[right]
    return Weights(mean, moment, float(h), 0.0)
