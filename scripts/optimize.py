"""Run a job: python scripts/optimize.py configs/z90.toml [results/z90.h5]"""

import sys
from pathlib import Path

import shaper

if len(sys.argv) < 2:
    sys.exit(__doc__)
job_path = Path(sys.argv[1])
output = sys.argv[2] if len(sys.argv) > 2 else Path("results") / job_path.with_suffix(".h5").name


def progress(stage, step, total, best):
    print(f"\r{stage} {step}/{total}  best {best:.2e}   ", end="", file=sys.stderr, flush=True)


waveform = shaper.optimize(shaper.read_job(job_path), progress)
shaper.save_waveform(output, waveform)
print(file=sys.stderr)
for name, score in waveform.scores.items():
    duration = waveform.pulses[name].duration * 1e9
    print(f"{name:10} {duration:10.3f} ns  nominal {score.nominal:.2e}  worst {score.worst:.2e}")
print(f"search {waveform.status}; written to {output}")
