"""Write a waveform as an AWG takes it, and look at what was written. Copy and edit.

python scripts/load_awg.py WAVEFORM.h5 FOLDER
"""

import sys

from shaper.awg.folder import read_folder
from shaper.workflow.load import load_into_folder

waveform, folder = sys.argv[1:3]

manifest = load_into_folder(
    waveform,
    folder,
    names=None,  # all pulses of the file; or ["shaped", "sandwich"]
    layout="apart",  # or "interleaved": I0, Q0, I1, Q1, ...
    byte_order="big",  # or "little"
)

for name, codes in read_folder(folder).items():  # [sample, 2] int16, checked once more
    print(f"{name}: {len(codes)} samples, I {codes[:, 0].min()} to {codes[:, 0].max()}, "
          f"Q {codes[:, 1].min()} to {codes[:, 1].max()}")  # fmt: skip
for entry in manifest["pulses"]:
    print(*(file["file"] for file in entry["files"]))
for note in manifest["safety"]:
    print("caution:", note)
