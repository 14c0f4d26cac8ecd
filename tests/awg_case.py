"""What the loading tests share: one bench, random pulses, plans, and a load into the stand-in."""

import math
import tomllib

import numpy as np
import stand_in

from shaper.awg.link import open_link
from shaper.awg.load import begin_record, load
from shaper.awg.plan import Choice, make_plan
from shaper.awg.profile import Profile
from shaper.job import parse_job
from shaper.pulse import Score, Waveform, make_pulse

JOB = """
title = "Quarter turn, Alder bench"
[drive]
rabi_max_MHz = 25.0
sample_rate_MSps = 1000.0
dac_bits = 14
granularity_samples = 16
min_samples = 64
[target]
gate = "z"
angle_deg = 90.0
[pulse]
duration_ns = 60.0
slice_ns = 1.0
"""
FULL_SCALE = 2 * math.pi * 25e6

PROFILE = """
[identity]
maker = "Alder Bench"
model = "Stand-in"
[link]
timeout_s = 20.0
[memory]
min_samples = 16
granularity_samples = 4
max_samples = 2_000_000
[data]
sample_rate_MSps = 1000.0
bits = 14
[outputs]
i = 1
q = 2
full_scale_V = 0.25
load_ohm = 50.0
[limits]
peak_V = 0.3
mean_power_mW = 5.0
duty_cycle = 1.0
"""


def profile(**sections) -> Profile:
    """The profile, some sections changed: ``profile(data={"layout": "interleaved"})``."""
    document = tomllib.loads(PROFILE)
    for name, changes in sections.items():
        if isinstance(changes, dict):
            document.setdefault(name, {}).update(changes)
        else:
            document[name] = changes
    return Profile.model_validate(document)


def pulse(samples, rng, **changes):
    """A random waveform within the circle."""
    angle, radius = rng.uniform(-np.pi, np.pi, samples), rng.uniform(0.1, 1, samples)
    drive = FULL_SCALE * radius[:, None] * np.stack([np.cos(angle), np.sin(angle)], axis=1)
    settings = {"full_scale": FULL_SCALE, "bits": 14, "bound": "circle", "sample_rate": 1e9}
    return make_pulse(drive, np.ones(samples), origin="optimized", **(settings | changes))


def waveform(rng, samples=60):
    """A waveform file's content with two pulses."""
    target = parse_job(JOB).target
    score = Score(1e-10, 1e-9, 1e-8, 1e-7, 1e-7, 1e-7)
    pulses = {"shaped": pulse(samples, rng), "sandwich": pulse(80, rng)}
    return Waveform(
        title="Quarter turn",
        job_text=JOB,
        created="2026-01-01T00:00:00Z",
        software="shaper",
        seed=7,
        status="converged",
        target=target.quaternion,
        error_rows=target.error_rows,
        error_scale=target.scale,
        pulses=pulses,
        scores={name: score for name in pulses},
    )


def choice(rng, trace="SHAPED", samples=60, **changes):
    """One pulse to be loaded."""
    made = pulse(samples, rng, **changes)
    return Choice(trace, made, "circle", 0.0, "z90.h5", "0" * 64, trace.lower(), "z(90)", 1e-9)


def plan(rng, *traces, into=None, samples=60, **settings):
    """A set of random pulses under these names."""
    chosen = [choice(rng, trace, samples) for trace in traces or ("SHAPED",)]
    return make_plan(chosen, into or profile(), **settings)


def run_load(made, address, path, say=lambda text: None, **options):
    """Load over a socket; the record."""
    record = begin_record(made, path, address)
    connect = lambda: open_link(address, made.profile.link.timeout_s)  # noqa: E731
    load(made, connect, record, say=say, **options)
    return record.document


def holds(generator: stand_in.Generator, made) -> bool:
    """Whether the instrument's memory is what was planned, sample for sample, and nothing else."""
    swapped = made.profile.data.byte_order == "little"
    wanted = {
        trace.name: bytes(stand_in.swap(trace.data)) if swapped else trace.data
        for trace in made.traces
    }
    return {name: bytes(data) for name, data in generator.traces.items()} == wanted
