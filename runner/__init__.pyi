from .checking import Check as Check
from .checking import check as check
from .errors import EngineMissingError as EngineMissingError
from .errors import OutputError as OutputError
from .errors import SimulationError as SimulationError
from .sweep import Run as Run
from .sweep import run as run
