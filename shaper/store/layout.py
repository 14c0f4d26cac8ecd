"""What a waveform file is made of: names, sizes, checksums; what writer and reader must share.

::

    /                   attrs format, format_version, title, job, created, software, seed, status,
                        notes
    /target/quaternion  float64 (4)      /target/error_rows  float64 (k, 4), attr scale
    /pulses/NAME        attrs origin, source, duration_s, sample_rate_Hz, dac_bits,
                        full_scale_rad_per_s, infidelity, infidelity_mean, infidelity_worst,
                        infidelity_dac, infidelity_dac_mean, infidelity_dac_worst,
                        infidelity_guaranteed (if proved)
        segment_start_s, segment_s, drive_x, drive_y   float64 (n)
        sample_s                                       float64 (m)
        dac_i, dac_q                                   int16 (m)
    /history/NAME, /evidence/NAME   tables; their axes are dimension scales beside them

Every dataset has ``units``, ``long_name`` and ``sha256`` (of its elements in C order, little
endian). A reader ignores what it does not know, as long as it is harmless.
"""

from __future__ import annotations

import hashlib
import re

import numpy as np

FORMAT = "shaper-waveform"
VERSION = 1

MAX_FILE_BYTES = 256 * 2**20
MAX_DATA_BYTES = 512 * 2**20  # sum of all that the datasets declare
MAX_ATTRIBUTE_BYTES = 4 * 2**20
MAX_DEPTH = 8
MAX_OBJECTS = 2000

PULSE_ARRAYS = ("segment_start_s", "segment_s", "drive_x", "drive_y", "sample_s", "dac_i", "dac_q")
TABLE_GROUPS = ("history", "evidence")

# attribute of a pulse group, field of Score; the last three came after the first files
SCORES = {
    "infidelity": "nominal",
    "infidelity_mean": "mean",
    "infidelity_worst": "worst",
    "infidelity_dac": "dac",
    "infidelity_dac_mean": "dac_mean",
    "infidelity_dac_worst": "dac_worst",
    "infidelity_guaranteed": "guaranteed",
}
OPTIONAL_SCORES = ("infidelity_dac_mean", "infidelity_dac_worst", "infidelity_guaranteed")

# names become links in the file and, when loaded into an AWG, names of files and traces
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_+-]{0,63}")


def is_name(name: str) -> bool:
    """Whether a pulse, table or axis may be called so: letters, digits, ``_ + -``, at most 64."""
    return _NAME.fullmatch(name) is not None


def digest(values: np.ndarray) -> str:
    """Sha256, in hex, of the elements in C order, little endian."""
    values = np.ascontiguousarray(values)
    return hashlib.sha256(values.astype(values.dtype.newbyteorder("<")).tobytes()).hexdigest()
