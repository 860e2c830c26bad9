from .deck import Deck as Deck
from .library import candidates as candidates
from .netlist import COPIES as COPIES
from .netlist import netlist as netlist
from .netlist import standalone as standalone
from .stages import OUTPUT as OUTPUT
from .structures import Structure as Structure
from .structures import structures as structures
