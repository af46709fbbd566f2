"""Plots for notebooks and design reviews.

Each function takes a dataset, draws on the Axes it is given or on a new figure, and returns the
Axes. Lines are named where they end, in place of a legend to be looked up; opposite faces share a
colour and differ by their dashes, or by their tints over many revolutions, so that the figure also
reads in grey or with colour blindness.
"""

from envflux.plots.drawing import off_screen
from envflux.plots.series import beta_history, flux_history
from envflux.plots.summaries import eclipse_strip, orbit_mean_bars, sun_in_body

__all__ = ["beta_history", "eclipse_strip", "flux_history", "off_screen", "orbit_mean_bars", "sun_in_body"]
