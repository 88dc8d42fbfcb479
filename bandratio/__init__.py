"""Spectral parameters of airless bodies, each with a standard uncertainty.

The public names are listed in ``__init__.pyi``, from where they are loaded on first use, so that
``import bandratio`` costs next to nothing.
"""

import lazy_loader as _lazy

__version__ = "0.1.0"
__getattr__, __dir__, __all__ = _lazy.attach_stub(__name__, __file__)
