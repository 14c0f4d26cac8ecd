"""The one place where the units of files and people become SI, and back.

Inside the package: seconds, rad/s, radians. At the edges the unit is part of the name:
``_MHz`` is an ordinary frequency, so a rate of 1 MHz is 2 pi 1e6 rad/s.
"""

import math

NS = 1e-9
US = 1e-6
MHZ = 2e6 * math.pi  # rad/s in one MHz of ordinary frequency
MSPS = 1e6  # samples per second in one MSps
DEG = math.pi / 180
