"""Make results/example/ again: python scripts/example.py [FOLDER]

One worked job of the Alder bench, from the search to the report. A test holds the figures of
what is stored against what the code computes now.
"""

import json
import sys
from pathlib import Path

import shaper
from shaper.workflow.compare import as_json, draw, draw_maps
from shaper.workflow.optimize import draw as draw_search
from shaper.workflow.report import make_report

AGAINST = ["CORPSE-in-BB1", "two-pulse-reversed-Knill"]

root = Path(__file__).resolve().parent.parent
folder = Path(sys.argv[1]) if len(sys.argv) > 1 else root / "results" / "example"
folder.mkdir(parents=True, exist_ok=True)
waveform = shaper.optimize(shaper.read_job(root / "configs" / "z90_spin.toml"))
shaper.save_waveform(folder / "z90_spin.h5", waveform)
comparison = shaper.compare(waveform, AGAINST)
draw(comparison, folder / "comparison.png")
draw_maps(comparison, folder / "maps.png")
draw_search(waveform, folder / "search.png")
numbers = json.dumps(as_json(comparison), indent=1)
(folder / "comparison.json").write_text(numbers + "\n", encoding="utf-8")
(folder / "report.html").write_text(make_report(waveform, against=AGAINST), encoding="utf-8")
