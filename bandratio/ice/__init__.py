"""Candidate ice: flags with a known false discovery rate, and how much ice there may be."""

import lazy_loader as _lazy

__getattr__, __dir__, __all__ = _lazy.attach(
    __name__,
    submod_attrs={
        "amount": ["ice_fraction"],
        "candidates": ["rank_candidates"],
        "flags": ["FLAG_MEANINGS", "ice_flags"],
        "materials": ["GROUND_LISTS", "Materials", "ice_free_ground", "ice_materials"],
        "sight": ["least_areal_fraction"],
    },
)
