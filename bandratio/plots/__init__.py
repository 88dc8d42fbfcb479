"""Pictures: maps, scatters, composites and histograms, each on matplotlib axes."""

from .composite import plot_composite
from .histogram import plot_histogram
from .ice import plot_ice_plane
from .laboratory import plot_materials, plot_separation, plot_spectra
from .lasers import plot_laser_plan
from .maps import plot_map
from .scatter import plot_scatter

__all__ = [
    "plot_composite",
    "plot_histogram",
    "plot_ice_plane",
    "plot_laser_plan",
    "plot_map",
    "plot_materials",
    "plot_scatter",
    "plot_separation",
    "plot_spectra",
]
