"""A picture with everything that belongs to it: name, words and the numbers behind it."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING

from mwdlink.figures import style
from mwdlink.files.results import csv_text

if TYPE_CHECKING:
    from matplotlib.figure import Figure
    from pandas import DataFrame


@dataclass(frozen=True)
class Picture:
    """One picture, ready to be written.

    Attributes
    ----------
    name : str
        Stem of the file names, in small letters.
    figure : matplotlib.figure.Figure
    title : str
        A heading of a few words.
    description : str
        A sentence or two made from the numbers, for who cannot see the picture.
    data : pandas.DataFrame
        What is drawn, units in the headers.
    """

    name: str
    figure: Figure
    title: str
    description: str
    data: DataFrame

    def svg(self) -> bytes:
        """SVG, byte-identical for the same content."""
        return self._svg

    @cached_property
    def _svg(self) -> bytes:
        # wanted twice, for its own file and inside the page, and drawing is the slow part
        svg = style.save_svg(self.figure, title=self.title, description=self.description)
        # the layout found for one file serves the other
        self.figure.set_layout_engine("none")
        return svg

    def png(self) -> bytes:
        """PNG at 300 dots per inch."""
        self.svg()
        return style.save_png(self.figure, title=self.title, description=self.description)

    def csv(self) -> bytes:
        """The numbers behind the picture, as a table that can be read again."""
        return csv_text(self.data).encode("utf-8")
