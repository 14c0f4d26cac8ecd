"""A small waveform file's content, made by hand for the report's tests: no search is run."""

import numpy as np

from shaper.composite import place, sandwich
from shaper.composite.sequence import from_turns
from shaper.evidence.score import score
from shaper.job import parse_job
from shaper.pulse import Table, Waveform, make_pulse

JOB = """title = "Quarter-turn phase gate, Alder bench, alder-1 <&>"

[qubit]
detuning_MHz = 0.1
t1_us = 60.0
t2_us = 45.0

[drive]
rabi_max_MHz = 25.0
bound = "{bound}"
sample_rate_MSps = 1000.0
granularity_samples = 4

[target]
gate = "z"
angle_deg = 90.0

[tolerance]
amplitude = 0.02
detuning_MHz = 0.5

[pulse]
duration_ns = 62.0
slice_ns = 1.0
"""


LINE_AND_NEIGHBOR = """
[line]
kind = "first_order"
bandwidth_MHz = 60.0

[[group]]
name = "alder-2"
offset_MHz = 12.0
target = { gate = "identity", equivalence = "up_to_final_z" }
"""


def make_case(
    bound="circle", target='gate = "z"\nangle_deg = 90.0', more="", anharmonicity_MHz=None
):
    """A wavy pulse that is no good, the sandwich, and BB1 for x(90) (Wimperis 1994)."""
    text = JOB.format(bound=bound).replace('gate = "z"\nangle_deg = 90.0', target)
    text += more
    if anharmonicity_MHz is not None:
        text = text.replace("[drive]", f"anharmonicity_MHz = {anharmonicity_MHz}\n\n[drive]")
    job = parse_job(text)
    slices = np.arange(job.slices)
    phase, size = 2.1 * np.sin(slices / 7) + slices / 11, 0.9 + 0.1 * np.cos(slices / 5)
    drive = job.rabi_max * (size * np.stack([np.cos(phase), np.sin(phase)])).T
    shaped = make_pulse(
        drive,
        np.full(job.slices, job.samples_per_slice),
        full_scale=job.rabi_max,
        bits=job.dac_bits,
        bound=bound,
        sample_rate=job.sample_rate,
        origin="optimized",
    )
    half = np.pi / 2
    b = np.arccos(-half / (4 * np.pi))
    bb1 = from_turns(
        [(np.pi, b), (2 * np.pi, 3 * b), (np.pi, b), (half, 0.0)],
        source="Wimperis, J. Magn. Reson. A 109, 221 (1994)",
    )
    pulses = {
        "shaped": shaped,
        "sandwich": place(sandwich(job.target, bound), job),
        "bb1": place(bb1, job),
    }
    history = np.array([[0.4, 1e-2, 3e-3, 1e-3], [0.5, 2e-1, 1e-1, np.nan]])
    return Waveform(
        title=job.title,
        job_text=text,
        created="2026-12-01T09:00:00Z",
        software="shaper 0.1.0",
        seed=7,
        status="step_limit",
        target=job.target.quaternion,
        error_rows=job.target.error_rows,
        error_scale=job.target.scale,
        pulses=pulses,
        scores={name: score(pulse, job) for name, pulse in pulses.items()},
        history={"infidelity": Table(history, ("start", "iteration"), "1", "infidelity")},
    )
