"""Every figure: those of one fit are here or in `arrhenius`, those of a whole study in `surveys`."""

from __future__ import annotations

from gapfit.arrhenius import arrhenius_figure
from gapfit.style import ONE_COLUMN_MM, TWO_COLUMNS_MM, Figure, figure_svg, save_figure

__all__ = ["ONE_COLUMN_MM", "TWO_COLUMNS_MM", "Figure", "arrhenius_figure", "figure_svg", "save_figure"]
