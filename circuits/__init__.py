"""What is simulated: op-amp macromodels, stages, source networks, and the decks made of them."""

from modepair.circuits.decks import Deck, Structure, structures
from modepair.circuits.library import candidates
from modepair.circuits.netlist import COPIES, netlist, standalone
from modepair.circuits.stages import OUTPUT

__all__ = ["COPIES", "OUTPUT", "Deck", "Structure", "candidates", "netlist", "standalone", "structures"]
