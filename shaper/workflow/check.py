"""What can be said of a job before a minute is spent on it: derived figures, and warnings."""

from __future__ import annotations

import math
import tomllib

from shaper.bench import line_of
from shaper.composite import limit, place, sandwich, stepped_z_length
from shaper.drive.dac import padded_length
from shaper.drive.line import Line
from shaper.job import Job
from shaper.physics.decay import coherence_limit
from shaper.readable import rate, time
from shaper.units import DEG, MHZ, NS
from shaper.workflow.trial import trial_infidelity

_HAIR = 1e-9  # relative; a duration this close below the limit is the limit
_COARSE_SLICE = math.pi / 2  # a slice that turns further than this can hardly follow any shape
_TRIAL_MISSES_BY = 10.0  # the most by which the real search was seen to beat the trial, or so
_LEAKY_PERIODS = 2.0  # of the anharmonicity; a pulse shorter than this excites the next level


def check_job(job: Job, trial: bool = False) -> dict:
    """Derived figures of a job and what speaks against running it.

    Args:
        trial: whether a job with a tolerance and a ``stop_infidelity`` gets a short trial search
            (a few seconds) to see if the one is within reach of the other.
    Returns:
        A flat dict, unit in each key, None where a figure has no meaning; ``warnings`` is a
        list of sentences, each with its remedy. Where the duration is to be found, figures that
        depend on it are None.
    Raises:
        InputError: if the job's measured line cannot be read, or its band lies below the pulse's.
    """
    shortest = limit(job.target, job.bound) / job.rabi_max  # s
    plain = place(sandwich(job.target, job.bound), job)
    samples = job.slices * job.samples_per_slice
    padded = padded_length(samples, job.granularity, job.min_samples)
    fixed = not job.open_duration
    asks = trial and fixed and job.has_tolerance and job.stop_infidelity is not None
    able = job.bound == "circle" and not job.others
    reached = trial_infidelity(job) if asks and able else None
    line = line_of(job)
    decays = job.t1 is not None or job.t2 is not None
    facts = {
        "title": job.title,
        "target": job.target_name,
        "rabi_max_MHz": job.rabi_max / MHZ,
        "bound": job.bound,
        "duration_ns": job.duration / NS if fixed else None,
        "slices": job.slices if fixed else None,
        "samples": samples if fixed else None,
        "padded_samples": padded if fixed else None,
        "largest_angle_per_slice_deg": job.rabi_max * job.slice_duration / DEG,
        "largest_total_angle_deg": job.rabi_max * job.duration / DEG if fixed else None,
        "shortest_duration_ns": shortest / NS,
        "shortest_duration_is": (
            "time-optimal, published" if job.bound == "circle" else "best known for the box"
        ),
        "duration_over_shortest": job.duration / shortest if fixed and shortest > 0 else None,
        "least_worst_infidelity": least_worst_infidelity(job) if fixed else None,
        "trial_worst_infidelity": reached,
        "sandwich_duration_ns": plain.duration / NS,
        "coherence_limited_infidelity": (
            coherence_limit(job.duration, job.t1, job.t2) if fixed and decays else None
        ),
        "line_bandwidth_MHz": line.bandwidth / 1e6 if line is not None else None,
        "frame_update": frame_update(job),
        "warnings": _warnings(job, shortest, padded - samples, line, reached),
    }
    return {
        key: float(f"{value:.12g}") if isinstance(value, float) else value  # 120, not 120.00..01
        for key, value in facts.items()
    }


def least_worst_infidelity(job: Job) -> float | None:
    """A floor under the worst case over the tolerance: no pulse of this duration is better.

    With the drive at the low edge of its tolerance the pulse has the time ``t = W_max (1 -
    amplitude) T``, short of the time-optimal length ``L`` by ``s = L - t``. Lengths obey the
    triangle inequality, so the error left is a rotation that itself takes at least ``s``; among
    rotations by ``phi`` the longest is the one about z, ``sqrt(phi (4 pi - phi))``. So ``phi >=
    2 pi - sqrt(4 pi^2 - s^2)`` and the infidelity is at least ``scale sin^2(phi/2)``.

    Returns:
        None where the duration suffices, and for the box, whose lengths are not proven shortest.
    Source:
        Derived here; that z is the longest is checked numerically in the tests.
    """
    if job.bound != "circle":
        return None
    time = job.rabi_max * (1 - job.amplitude_tolerance) * job.duration
    length = limit(job.target, job.bound)
    if time >= length * (1 - _HAIR):
        return None
    error = 2 * math.pi - math.sqrt(4 * math.pi**2 - (length - time) ** 2)
    return job.target.scale * math.sin(min(error, math.pi) / 2) ** 2


def frame_update(job: Job) -> str | None:
    """Whether shifting the phase of all later pulses does the job: "enough", "instead" or None.

    "enough": the target as stated needs no pulse at all. "instead": a z rotation whose pulse a
    frame update could replace, unless the rotation must be physical. None: neither. Of several
    qubits each has its own frame, and all have to be served.
    """
    targets = [group.target for group in job.groups]
    if all(target.needs_no_pulse for target in targets):
        return "enough"
    if all(
        target.needs_no_pulse or (target.kind == "gate" and target.z_angle is not None)
        for target in targets
    ):
        return "instead"
    return None


def _warnings(
    job: Job, shortest: float, padding: int, line: Line | None, reached: float | None
) -> list[str]:
    found = [_frame(job), _drift(job), _line(job, line), _coarse(job)]
    if not job.open_duration:
        found = [
            _too_short(job, shortest),
            _too_few_slices(job),
            _out_of_reach(job, reached),
            *found,
            _decay(job),
            _leakage(job),
            _padding(job, padding),
        ]
    return [sentence for sentence in found if sentence]


def _too_short(job: Job, shortest: float) -> str | None:
    have, need = job.duration / NS, shortest / NS
    floor = least_worst_infidelity(job)
    at_best = f" (infidelity at least {floor:.2g})" if floor else ""
    kind = "no pulse can be" if job.bound == "circle" else "no pulse is known that is"
    if have < need * (1 - _HAIR):
        return (
            f"pulse.duration_ns: {have:.6g} ns, but {kind} shorter than {need:.6g} ns for "
            f"{job.target_name} at {rate(job.rabi_max)}{at_best}; expect exit code 3. "
            "Lengthen the pulse or raise drive.rabi_max_MHz"
        )
    weak = need / (1 - job.amplitude_tolerance)  # the drive at the low edge of its tolerance
    if have < weak * (1 - _HAIR):
        return (
            f"tolerance.amplitude: with {100 * job.amplitude_tolerance:g} % less drive the gate "
            f"takes at least {weak:.6g} ns, the pulse has {have:.6g} ns: that edge cannot be "
            f"met{at_best}. Lengthen the pulse, or let --shortest find the duration"
        )
    return None


def _too_few_slices(job: Job) -> str | None:
    angle = job.target.z_angle
    exact_z = job.target.kind == "gate" and job.target.free_axis is None and angle is not None
    if job.bound == "circle" and exact_z and angle != 0 and job.slices > 1:
        need = stepped_z_length(angle, job.slices) / job.rabi_max
        if job.duration < need * (1 - _HAIR):
            finer = job.slice_duration * job.sample_rate > 1
            return (
                f"pulse.slice_ns: {job.slices} equal slices need at least {need / NS:.6g} ns for "
                f"{job.target_name}, the pulse has {job.duration / NS:.6g} ns. "
                + ("Take shorter slices or a longer pulse" if finer else "Lengthen the pulse")
            )
    return None


def _coarse(job: Job) -> str | None:
    turn = job.rabi_max * job.slice_duration
    if turn > _COARSE_SLICE:
        return (
            f"pulse.slice_ns: one slice turns by up to {turn / DEG:.4g} degrees; "
            "take slices of at most 90 degrees, better a tenth of that"
        )
    return None


def _out_of_reach(job: Job, reached: float | None) -> str | None:
    if reached is None or reached <= _TRIAL_MISSES_BY * job.stop_infidelity:
        return None
    return (
        f"search.stop_infidelity: {job.stop_infidelity:.2g} over the tolerance looks out of reach "
        f"in {job.duration / NS:.6g} ns: a short trial came to {reached:.1e}. Lengthen the pulse, "
        "or let --shortest find the duration"
    )


def _frame(job: Job) -> str | None:
    kind = frame_update(job)
    if kind == "enough":
        return (
            f"target: {job.target_name} needs no pulse at all: a frame update (a phase shift of "
            "all later pulses) does it, without error. Ask for the exact gate if the rotation "
            "must be physical"
        )
    if kind == "instead":
        return (
            f"target: {job.target_name} is a z rotation: a frame update does it without a pulse "
            "if every later pulse on this qubit can be shifted in phase. A pulse is worth its "
            "error where that is not so"
        )
    return None


def _decay(job: Job) -> str | None:
    asked = tomllib.loads(job.text).get("search", {}).get("stop_infidelity")  # no mere default
    if asked is None or (job.t1 is None and job.t2 is None):
        return None
    floor = coherence_limit(job.duration, job.t1, job.t2)
    if floor <= job.stop_infidelity:
        return None
    return (
        f"search.stop_infidelity: {job.stop_infidelity:.2g} is below what T1 and T2 leave in "
        f"{job.duration / NS:.6g} ns, {floor:.2g}: the search may reach it, the bench will not. "
        "Shorten the pulse or ask for less"
    )


def _leakage(job: Job) -> str | None:
    if job.anharmonicity is None:
        return None
    periods = job.duration * abs(job.anharmonicity) / (2 * math.pi)
    if periods < _LEAKY_PERIODS:
        return (
            f"qubit.anharmonicity_MHz: the pulse lasts {periods:.2g} periods of it; below "
            f"{_LEAKY_PERIODS:g} the next level is hard to keep empty. Lengthen the pulse"
        )
    return None


def _padding(job: Job, padding: int) -> str | None:
    if padding == 0:
        return None
    idle = padding / job.sample_rate
    return (
        f"drive.granularity_samples, drive.min_samples: the AWG plays {padding} more samples of "
        f"zero ({time(idle)}) after the pulse; count them as idle time"
    )


def _drift(job: Job) -> str | None:
    reach = abs(job.detuning) + job.detuning_tolerance
    if reach <= job.rabi_max:
        return None
    return (
        f"tolerance.detuning_MHz: the qubit may lie {rate(reach)} from the carrier, more "
        f"than the largest Rabi frequency {rate(job.rabi_max)}; expect a long pulse. "
        "Move the carrier or narrow the tolerance"
    )


def _line(job: Job, line: Line | None) -> str | None:
    if line is None or job.correction != "none":
        return None
    fastest = 0.5 / job.slice_duration  # Hz; the drive may turn round from slice to slice
    if line.bandwidth >= fastest:
        return None
    return (
        f"drive.correction: slices may change at up to {fastest / 1e6:.4g} MHz, the line passes "
        f"{line.bandwidth / 1e6:.4g} MHz and nothing makes up for it: the pulse at the qubit is "
        'another one. Take "model" or "inverse", or longer slices'
    )
