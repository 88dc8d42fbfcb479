"""What is known about the errors of a cube: parts that average away over pixels, and parts that do not."""

from .model import BandNoise, Noise, brightness_factor_of

__all__ = ["BandNoise", "Noise", "brightness_factor_of"]
