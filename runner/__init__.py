"""How it runs: the ngspice engine, batches, worker processes, the run folder and the command line."""

import lazy_loader

__getattr__, __dir__, __all__ = lazy_loader.attach_stub(__name__, __file__)
