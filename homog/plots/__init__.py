"""Figures: the page of one cell (E, nu, G against direction, the cell beside them) and the chart of a whole screen.

matplotlib is imported inside the functions that draw, so that importing this package costs nothing; only its `Figure`
objects are used, one figure is drawn or saved at a time, so that threads may. Every figure says at its foot what its
numbers are.
"""

from __future__ import annotations

from homog.plots.chart import property_chart
from homog.plots.page import polar_figure
from homog.plots.style import save

__all__ = ["polar_figure", "property_chart", "save"]
