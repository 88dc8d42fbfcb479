"""The Corvane Basin, an invented place: made, seen from orbit, and mapped, so that every job has something to run on."""

import lazy_loader as _lazy

__getattr__, __dir__, __all__ = _lazy.attach(
    __name__,
    submod_attrs={
        "basin": ["Basin", "make_basin"],
        "job": ["LIMITS", "ground_list", "normalised_scene", "run_demo"],
        "scene": ["NOISE", "see"],
        "shots": ["CALIBRATION", "range_counts"],
    },
)
