"""Pictures of results: each function draws on given axes, computes nothing, keeps no state."""

from mwdlink.figures.gather import figures_for, pictures_of
from mwdlink.figures.main import plot_result
from mwdlink.figures.picture import Picture
from mwdlink.figures.style import save_png, save_svg

__all__ = ["Picture", "figures_for", "pictures_of", "plot_result", "save_png", "save_svg"]
