"""Pictures of results as PNG, SVG or PDF, by the suffix of the file; drawn with matplotlib, an optional library.

One set of fonts, sizes and line styles for all of them (`style`). Nothing is told by colour alone: marks and dashes
differ, or curves stand in panels of their own, so that a print in grey says the same. Every picture has a function that
returns it as a figure of matplotlib, and one that writes it to a file.
"""

from latticedip.report.plots.curves import draw_directions, draw_modes, modes_figure
from latticedip.report.plots.field import draw_field, field_figure
from latticedip.report.plots.ordering import draw_orderings, orderings_figure
from latticedip.report.plots.rank import draw_rank, rank_figure
from latticedip.report.plots.shift import draw_shift, shift_figure, shift_has_curve
from latticedip.report.plots.spectrum import draw_spectrum, spectrum_figure
from latticedip.report.plots.style import SUFFIXES, check_library, check_plot, render

__all__ = [
    "SUFFIXES",
    "check_library",
    "check_plot",
    "draw_directions",
    "draw_field",
    "draw_modes",
    "draw_orderings",
    "draw_rank",
    "draw_shift",
    "draw_spectrum",
    "field_figure",
    "modes_figure",
    "orderings_figure",
    "rank_figure",
    "render",
    "shift_figure",
    "shift_has_curve",
    "spectrum_figure",
]
