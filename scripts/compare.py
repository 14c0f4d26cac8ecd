"""Compare the pulses of a waveform file, and composites of the library if named (or "all"):

python scripts/compare.py results/z90.h5
python scripts/compare.py results/z90.h5 BB1 two-pulse-Knill
"""

import sys
from pathlib import Path

import shaper
from shaper.cli.compare import text
from shaper.errors import ShaperError
from shaper.workflow.compare import compare, draw, draw_maps

waveform, *composites = sys.argv[1:] or ["results/z90.h5"]

try:
    comparison = compare(shaper.load_waveform(waveform), composites)
    print(text(comparison))

    # comparison.rows holds every figure, comparison.pulses every waveform
    for suffix, picture in ((".png", draw), (".maps.png", draw_maps)):
        picture(comparison, Path(waveform).with_suffix(suffix))
        print(f"picture: {Path(waveform).with_suffix(suffix)}")
except ShaperError as error:
    sys.exit(f"{error}")
