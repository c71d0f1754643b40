"""Figures as matplotlib `Figure` objects (never pyplot), saved as PNG and PDF. One file per kind of dataset."""

from gutz.plots.canvas import save
from gutz.plots.diagram import draw, parameters

__all__ = ["draw", "parameters", "save"]
