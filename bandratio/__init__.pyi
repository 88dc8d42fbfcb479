# The public names, one import a room, in alphabetical order of rooms.
from .cube import as_cube
from .noise import Noise
from .ratio import BandRatio

__version__: str
