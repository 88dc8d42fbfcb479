"""Rendered bodies and terrain with known geometry, for the tests of photometry."""

import numpy as np

BANDS = [480.0, 600.0, 700.0, 830.0]
ALBEDO = np.array([0.06, 0.09, 0.11, 0.13])


def sphere(size=161, phase_deg=40.0):
    """Incidence, emission and phase [deg] of a sphere seen from afar; NaN beside the disk and on the night side."""
    y, x = np.mgrid[1 : -1 : size * 1j, -1 : 1 : size * 1j]
    z = np.sqrt(np.maximum(1 - x**2 - y**2, 0))
    g = np.deg2rad(phase_deg)
    mu0, mu = x * np.sin(g) + z * np.cos(g), z
    seen = (x**2 + y**2 < 1) & (mu0 > 0) & (mu > 0)
    incidence, emission = (
        np.where(seen, np.degrees(np.arccos(np.clip(c, -1, 1))), np.nan) for c in (mu0, mu)
    )
    return incidence, emission, np.where(seen, phase_deg, np.nan)


def rough_height(size=96, slope_deg=12.0, seed=5):
    """Heights [m] of a smooth random surface on a grid of 1 m with a chosen root-mean-square slope."""
    rng = np.random.default_rng(seed)
    k = np.hypot(*np.meshgrid(np.fft.fftfreq(size), np.fft.fftfreq(size)))
    spectrum = np.fft.fft2(rng.normal(size=(size, size))) * np.exp(-((k / 0.06) ** 2))
    height = np.fft.ifft2(spectrum).real
    slope = np.sqrt((np.hypot(*np.gradient(height)) ** 2).mean())
    return height * np.tan(np.deg2rad(slope_deg)) / slope


def facets(height, sun=(60.0, 35.0), viewer=(0.0, 90.0)):
    """Angles [deg] of a height field on a 1 m grid whose rows run south; sun and viewer as azimuth and elevation."""
    rows, columns = np.gradient(height)
    normal = np.stack([-columns, rows, np.ones_like(height)])
    normal /= np.sqrt((normal**2).sum(0))

    def direction(azimuth, elevation):
        a, e = np.deg2rad([azimuth, elevation])
        return np.array([np.sin(a) * np.cos(e), np.cos(a) * np.cos(e), np.sin(e)])

    s, v = direction(*sun), direction(*viewer)
    incidence, emission = (np.degrees(np.arccos(np.clip(np.tensordot(d, normal, 1), -1, 1))) for d in (s, v))
    return incidence, emission, np.full_like(height, np.degrees(np.arccos(np.clip(s @ v, -1, 1))))


def cosines(*angles):
    return [np.cos(np.deg2rad(angle)) for angle in angles]
