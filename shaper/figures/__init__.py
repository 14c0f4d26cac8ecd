"""Figures from tables; the only room that knows matplotlib. Nothing is computed here."""

from shaper.figures.benchmark import benchmark_figure as benchmark_figure
from shaper.figures.budget import budget_figure as budget_figure
from shaper.figures.comparison import comparison_figure as comparison_figure
from shaper.figures.cuts import cuts_figure as cuts_figure
from shaper.figures.discs import disc_figure as disc_figure
from shaper.figures.duration import duration_figure as duration_figure
from shaper.figures.history import history_figure as history_figure
from shaper.figures.maps import map_figure as map_figure
from shaper.figures.spectrum import spectrum_figure as spectrum_figure
from shaper.figures.style import DARK as DARK
from shaper.figures.style import LIGHT as LIGHT
from shaper.figures.style import Theme as Theme
from shaper.figures.style import encoded as encoded
from shaper.figures.style import save as save
from shaper.figures.style import scientific as scientific
from shaper.figures.waveform import waveform_figure as waveform_figure
