"""Figures and reports of result files; the one door to matplotlib.

What a figure shows was measured before: here it is only read, binned and drawn.
"""

from trajcage.plots.cage_files import write_cage
from trajcage.plots.catalog import FIGURES, Figures, draw_figures
from trajcage.plots.report import write_report
from trajcage.plots.saving import FORMATS, write_figures

__all__ = [
    "FIGURES",
    "FORMATS",
    "Figures",
    "draw_figures",
    "write_cage",
    "write_figures",
    "write_report",
]
