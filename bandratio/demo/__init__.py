"""The Corvane Basin, an invented place: made, seen from orbit, and mapped, so that every job has something to run on."""

import lazy_loader as _lazy

__getattr__, __dir__, __all__ = _lazy.attach(
    __name__,
    submod_attrs={
        "basin": ["Basin", "make_basin"],
        "job": ["run_demo"],
        "scene": ["see"],
        "shots": ["range_counts"],
    },
)
