# The public names, one import a room, in alphabetical order of rooms.
from .catalogue import mafic_depth, named_ratio, red_slope, reflectance_700, uv_vis_slope
from .composition import iron_oxide, optical_maturity, titanium_oxide
from .cube import as_cube
from .cube_findings import check_cube
from .detection import Threshold, read_thresholds, scene_threshold, thresholds, write_thresholds
from .files import (
    open_cube,
    open_elevation,
    open_geometry,
    open_maps,
    open_returns,
    write_maps,
    write_regions,
)
from .ice import ice_flags, ice_fraction, rank_candidates
from .lidar import (
    LidarCalibration,
    LidarChannel,
    albedo_from_returns,
    as_returns,
    calibrate_lidar,
    flag_arguments,
    grid_returns,
    lidar_ratio,
)
from .maps import parameters
from .materials import material_table
from .noise import Noise
from .noise_estimate import add_misregistration, estimate_noise
from .photometry import (
    Akimov,
    ExponentialPhase,
    Hapke,
    Lambert,
    LommelSeeliger,
    LunarLambert,
    Minnaert,
    TabulatedPhase,
    convert_quantity,
    fit_photometry,
    geometry_summary,
    masked_pixels,
    normalise,
    require_quantity,
    slope_sigma_from_height,
    terrain_geometry,
)
from .planning import compare_filter_sets, least_ice, plan_lasers, rank_bands
from .plots import (
    plot_composite,
    plot_histogram,
    plot_ice_plane,
    plot_laser_plan,
    plot_map,
    plot_materials,
    plot_scatter,
    plot_separation,
    plot_spectra,
)
from .pyroclastic import pyroclastic_flags
from .ratio import BandRatio
from .regions import candidate_regions, candidate_table, region_means
from .report import write_report
from .spectra import band_average, effective_wavelength, open_library, reference_spectra

__version__: str
