"""What is read: CMRR and gain figures, tables, plots and the summary page."""

from modepair.reports.figures import figures, spot_column
from modepair.reports.pairs import FLOOR_VOLTS, ModePair

__all__ = ["FLOOR_VOLTS", "ModePair", "figures", "spot_column"]
