"""Write a waveform as an AWG takes it, and look at what was written. Copy and edit.

python scripts/load_awg.py WAVEFORM.h5 FOLDER
python scripts/load_awg.py WAVEFORM.h5 FOLDER 127.0.0.1:5025 configs/instruments/alder_awg.toml
"""

import sys

from shaper.awg.folder import read_folder
from shaper.awg.profile import read_profile
from shaper.errors import ShaperError
from shaper.workflow.load import load_into_folder, load_into_instrument, plan_from

if len(sys.argv) < 3:
    sys.exit(__doc__)
waveform, folder = sys.argv[1:3]

try:
    manifest = load_into_folder(
        waveform,
        folder,
        names=None,  # all pulses of the file; or ["shaped", "sandwich"]
        layout="apart",  # or "interleaved": I0, Q0, I1, Q1, ...
        byte_order="big",  # or "little"
    )
    for name, codes in read_folder(folder).items():  # [sample, 2] int16, checked once more
        print(f"{name}: {len(codes)} samples, largest code {abs(codes.astype(int)).max()}")
    for entry in manifest["pulses"]:
        print(*(file["file"] for file in entry["files"]))
    for note in manifest["safety"]:
        print("caution:", note)

    if len(sys.argv) > 3:  # into an instrument: see scripts/stand_in_awg.py for one to try
        address, profile_path = sys.argv[3:5]
        profile, fingerprint = read_profile(profile_path)
        plan = plan_from(
            [waveform],
            profile,
            prefix="",  # before every trace name
            scale=0.05,  # a first look, 26 dB down; 1.0 for the real thing
            repetition=None,  # pulses per second; None: without a gap, the worst case
        )
        record = load_into_instrument(
            plan,
            address,
            f"{folder}/first_look.load.json",
            profile_sha256=fingerprint,
            replace=True,  # overwrite traces of the same names
            say=print,
        )
        print("outputs:", record["output"]["statement"])  # never switched on from here
except ShaperError as error:
    sys.exit(f"{type(error).__name__}: {error}")
