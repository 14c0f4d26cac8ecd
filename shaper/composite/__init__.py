"""Sequences in closed form: the sandwich, the time-optimal drives, the published composites."""

from shaper.composite.box import shortest_box as shortest_box
from shaper.composite.compose import compositions as compositions
from shaper.composite.compose import library_pulses as library_pulses
from shaper.composite.geodesic import Geodesic as Geodesic
from shaper.composite.geodesic import geodesic_drive as geodesic_drive
from shaper.composite.geodesic import stepped as stepped
from shaper.composite.geodesic import stepped_z_length as stepped_z_length
from shaper.composite.geodesic import time_optimal as time_optimal
from shaper.composite.library import LIBRARY as LIBRARY
from shaper.composite.limit import limit as limit
from shaper.composite.sandwich import sandwich as sandwich
from shaper.composite.sequence import Sequence as Sequence
from shaper.composite.sequence import length as length
from shaper.composite.sequence import place as place
