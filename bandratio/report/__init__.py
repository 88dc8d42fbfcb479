"""One page that shows a result, lets it be explored, and says how it was made."""

import lazy_loader as _lazy

# bokeh is loaded only where a page is made
__getattr__, __dir__, __all__ = _lazy.attach(__name__, submod_attrs={"page": ["write_report"]})
