"""What is asked: the YAML spec of a sweep, its quantities and axes, and their expansion to cases."""

import lazy_loader

__getattr__, __dir__, __all__ = lazy_loader.attach_stub(__name__, __file__)
