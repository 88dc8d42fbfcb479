"""Candidate pyroclastic pixels: bright and flat, or dark, each with a p-value."""

from .flags import pyroclastic_flags

__all__ = ["pyroclastic_flags"]
