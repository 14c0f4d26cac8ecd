"""Jobs for the tests of the search, given by what the physics knows: an angle, not a time."""

import math

import numpy as np
from scipy.optimize import minimize_scalar

Z90 = 'gate = "z"\nangle_deg = 90.0'
SLICES = 64
# Garon, Glaser, Sugny, Phys. Rev. A 88, 043422 (2013): z(a) takes sqrt(a (4 pi - a)) / W_max
Z90_LIMIT = math.sqrt(math.pi / 2 * (4 * math.pi - math.pi / 2))


def job_text(turn, target=Z90, bound="circle", slices=SLICES, search="", tolerance=None, more=""):
    """A job of slices of 1 ns whose W_max times duration is ``turn`` (rad).

    ``tolerance`` is (relative amplitude, detuning in units of W_max).
    """
    rabi_MHz = float(turn) / (2 * math.pi * slices * 1e-3)
    amplitude, detuning = tolerance or (0.0, 0.0)
    return f"""title = "Test job, Alder bench, alder-1"
[drive]
rabi_max_MHz = {rabi_MHz!r}
bound = "{bound}"
sample_rate_MSps = 1000.0
dac_bits = 16
granularity_samples = 4
min_samples = 16
[target]
{target}
[tolerance]
amplitude = {amplitude}
detuning_MHz = {detuning * rabi_MHz!r}
[pulse]
duration_ns = {slices}.0
slice_ns = 1.0
[search]
{search}
{more}
"""


def unitary_lines(q):
    """The target section's lines for a quaternion, as a 2x2 unitary."""
    w, x, y, z = (float(c) for c in q)
    return f"unitary = [[[{w!r}, {-z!r}], [{-y!r}, {-x!r}]], [[{y!r}, {-x!r}], [{w!r}, {z!r}]]]"


def least_z90_infidelity(turn):
    """Theory's least infidelity of z(90) when ``W_max T`` is too short: over all extremals.

    By the maximum principle the best pulse of a given length has full amplitude and a phase that
    runs evenly at some rate, U = R_z(rate T) exp(-i T/2 [sx - rate sz]) (the phase at the start
    does not matter for a z rotation); here minimized over the rate and over all shorter lengths.
    """

    def off(rate, time):
        root = np.sqrt(1 + rate**2)
        cos, sinc = np.cos(root * time / 2), np.sin(root * time / 2) / root
        half = rate * time / 2 - math.pi / 4  # of R_z(rate T) after z(90) undone
        return 2 / 3 * (1 - (np.cos(half) * cos + np.sin(half) * sinc * rate) ** 2)

    rates = np.linspace(-6, 6, 24_001)
    least = np.inf
    for time in np.linspace(0.5, 1, 26) * turn:
        values = off(rates, time)
        k = int(np.clip(np.argmin(values), 1, len(rates) - 2))
        around = (rates[k - 1], rates[k + 1])
        found = minimize_scalar(off, bounds=around, args=(time,), method="bounded")
        least = min(least, float(found.fun), float(np.min(values)))
    return least
