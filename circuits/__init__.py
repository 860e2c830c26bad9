"""What is simulated: op-amp macromodels, stages, source networks, and the decks made of them."""

import lazy_loader

__getattr__, __dir__, __all__ = lazy_loader.attach_stub(__name__, __file__)
