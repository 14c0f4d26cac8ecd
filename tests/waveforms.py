"""Random but valid waveform records, for whoever needs a file; and whether two are the same."""

import math
from dataclasses import replace

import numpy as np

from shaper import rotation
from shaper.pulse import Score, Table, Waveform, make_pulse
from shaper.store import layout
from shaper.target import Target

RATE = 1e9  # samples per second of the Alder bench in these tests
RABI_MAX = 2 * math.pi * 25e6  # rad/s


def job_text(bound="circle", bits=14):
    return f"""title = "Quarter turn, Alder bench, alder-1"
[drive]
rabi_max_MHz = 25.0
bound = "{bound}"
sample_rate_MSps = 1000.0
dac_bits = {bits}
[target]
gate = "z"
angle_deg = 90.0
[pulse]
duration_ns = 60.0
slice_ns = 1.0
"""


def random_pulse(rng, segments=6, bound="circle", bits=14, longest=5):
    samples = rng.integers(1, longest + 1, segments)
    radius = RABI_MAX * np.sqrt(rng.uniform(0, 1, segments))
    angle = rng.uniform(0, 2 * np.pi, segments)
    drive = np.stack([radius * np.cos(angle), radius * np.sin(angle)], -1)
    return make_pulse(
        drive,
        samples,
        full_scale=RABI_MAX,
        bits=bits,
        bound=bound,
        sample_rate=RATE,
        origin="optimized",
    )


def waveform(rng, bound="circle", bits=14, **changes):
    target = Target(rotation.about_z(math.pi / 2))
    record = Waveform(
        title="Quarter turn, Alder bench, alder-1",
        job_text=job_text(bound, bits),
        created="2024-05-01T10:00:00Z",
        software="shaper 0.1.0",
        seed=7,
        status="converged",
        target=target.quaternion,
        error_rows=target.error_rows,
        error_scale=target.scale,
        pulses={
            "shaped": random_pulse(rng, bound=bound, bits=bits),
            "sandwich": replace(
                random_pulse(rng, 3, bound, bits), origin="composite", source="own"
            ),
        },
        scores={
            "shaped": Score(1e-10, 2e-5, 8e-5, 1e-9, 2e-5, 8.1e-5, 8.2e-5),
            "sandwich": Score(0.0, 1e-2, 3.8e-2, 1e-8, 1e-2, 3.8e-2),
        },
        history={
            "cost": Table(
                rng.uniform(size=(3, 5)), ("start", "iteration"), "1", "cost of every start"
            ),
            "iteration": Table(np.arange(0, 50, 10), ("iteration",), "1", "iteration"),
            "status_code": Table(np.array([0, 1, 0]), ("start",), "1", "how every start ended"),
        },
        history_attrs={"best_start": 2, "method": "L-BFGS", "seconds": 0.5},
        evidence={
            "infidelity_against_detuning": Table(
                rng.uniform(size=7), ("detuning",), "1", "average gate infidelity"
            ),
            "detuning": Table(np.linspace(-1e6, 1e6, 7), ("detuning",), "rad/s", "detuning"),
        },
        notes="first light",
    )
    return replace(record, **changes)


def assert_same(a, b):
    for name in ("title", "job_text", "created", "software", "seed", "status", "notes"):
        assert getattr(a, name) == getattr(b, name)
    assert a.history_attrs == b.history_attrs
    assert a.error_scale == b.error_scale
    np.testing.assert_array_equal(a.target, b.target)
    np.testing.assert_array_equal(a.error_rows, b.error_rows)
    assert a.scores == b.scores
    assert a.pulses.keys() == b.pulses.keys()
    for name, pulse in a.pulses.items():
        other = b.pulses[name]
        for field in ("origin", "source", "full_scale", "bits", "sample_rate"):
            assert getattr(pulse, field) == getattr(other, field)
        for field in ("drive", "samples", "codes"):
            np.testing.assert_array_equal(getattr(pulse, field), getattr(other, field))
            assert getattr(pulse, field).dtype == getattr(other, field).dtype
    for place in layout.TABLE_GROUPS:
        ours, theirs = getattr(a, place), getattr(b, place)
        assert ours.keys() == theirs.keys()
        for name, table in ours.items():
            np.testing.assert_array_equal(table.values, theirs[name].values)
            assert table.axes == theirs[name].axes
            assert (table.units, table.long_name) == (theirs[name].units, theirs[name].long_name)
