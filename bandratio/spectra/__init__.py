"""Laboratory spectra: open a library, average to bands, the reference table."""

from .averaging import Responses, band_average, effective_wavelength
from .library import open_library
from .reference import reference_spectra, without_value
from .selection import chosen_samples

__all__ = [
    "Responses",
    "band_average",
    "chosen_samples",
    "effective_wavelength",
    "open_library",
    "reference_spectra",
    "without_value",
]
