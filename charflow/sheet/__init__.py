"""What the user says: the cell sheet, its units, and the netlist and model files it names.

Public: :func:`read_sheet`, :class:`Sheet` and its parts. May import :mod:`charflow.errors` only.
"""

from charflow.sheet.read import read_sheet
from charflow.sheet.schema import Axes, Cell, Corner, Measure, Pin, Role, Sheet

__all__ = ["Axes", "Cell", "Corner", "Measure", "Pin", "Role", "Sheet", "read_sheet"]
