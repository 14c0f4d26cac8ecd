"""Compare the pulses of a waveform file: python scripts/compare.py results/z90.h5 [picture.png]"""

import sys

import shaper
from shaper.cli.compare import text
from shaper.workflow.compare import compare, draw

comparison = compare(shaper.load_waveform(sys.argv[1]))
print(text(comparison))
if len(sys.argv) > 2:
    draw(comparison, sys.argv[2])
