"""Figures for reports, with matplotlib: SVG, PDF or PNG."""

from modesieve.io.figures.save import plates, save_figures, save_report

__all__ = ["plates", "save_figures", "save_report"]
