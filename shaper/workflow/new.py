"""A first job for a bench, with a duration and a slice that make sense for it."""

from __future__ import annotations

import math
from dataclasses import dataclass

from shaper.composite import limit
from shaper.errors import InputError
from shaper.job import Job, parse_job
from shaper.job.template import job_text

_ROOM = 1.1  # of the shortest possible: enough freedom for the search to succeed quickly
_ROBUST_TURNS = 6 * math.pi  # times 1/W_max: where a robust gate of 1e-6 was found on tried jobs
_SLICES_PER_PI = 16  # of rotation at full drive


@dataclass(frozen=True)
class Wish:
    """What a newcomer is asked; everything else has a default in the job file.

    Attributes:
        gate: a name the job file knows, e.g. "z", "hadamard".
        angle_deg: for x, y, z; else None.
        rabi_max_MHz, bound, sample_rate_MSps: the drive.
        amplitude, detuning_MHz: half sides of the tolerance box.
        duration_ns: or None for a proposal.
        title: free text, or "" for one made of the rest.
    """

    gate: str
    angle_deg: float | None
    rabi_max_MHz: float
    bound: str = "circle"
    sample_rate_MSps: float = 1000.0
    amplitude: float = 0.0
    detuning_MHz: float = 0.0
    duration_ns: float | None = None
    title: str = ""


def new_job(wish: Wish, schema_path: str | None = None) -> tuple[str, Job]:
    """The commented text of a job file that runs, and the job it makes.

    Without a duration the pulse gets 1.1 times the shortest possible one, or 6 pi / W_max where
    there is a tolerance; the slice is about a sixteenth of a half turn, whole samples.

    Raises:
        InputError: if the wish makes no valid job; one line per fault.
    """
    # positive numbers first: the slice is computed from them
    for name in ("rabi_max_MHz", "sample_rate_MSps"):
        value = getattr(wish, name)
        if not (value > 0 and math.isfinite(value)):
            raise InputError(f"{name}: expected a positive number, got {value:g}")
    sample_ns = 1e3 / wish.sample_rate_MSps
    half_turn_ns = 1e3 / (2 * wish.rabi_max_MHz)
    per_slice = max(1, round(half_turn_ns / _SLICES_PER_PI / sample_ns))
    slice_ns = per_slice * sample_ns
    duration_ns = wish.duration_ns
    if duration_ns is None:
        duration_ns = slice_ns * _proposed_slices(wish, slice_ns, half_turn_ns)
    else:  # the longest slice up to the proposed one that divides the duration, if there is one
        samples = duration_ns / sample_ns
        for count in range(per_slice, 0, -1):
            if abs(samples / count - round(samples / count)) < 1e-9 * samples:
                slice_ns = count * sample_ns
                break
    text = _text(wish, _short(duration_ns), _short(slice_ns), schema_path)
    return text, parse_job(text, "new job")


def _proposed_slices(wish: Wish, slice_ns: float, half_turn_ns: float) -> int:
    probe = parse_job(_text(wish, _short(slice_ns), _short(slice_ns), None), "new job")
    length = _ROOM * limit(probe.target, probe.bound)
    if probe.has_tolerance:
        length = max(length, _ROBUST_TURNS)
    return max(1, math.ceil(length / math.pi * half_turn_ns / slice_ns))


def _text(wish: Wish, duration_ns: float, slice_ns: float, schema_path: str | None) -> str:
    title = wish.title or " ".join(
        [wish.gate] + ([f"{wish.angle_deg:g} degrees"] if wish.angle_deg is not None else [])
    )
    return job_text(
        {
            "title": title,
            "drive": {
                "rabi_max_MHz": float(wish.rabi_max_MHz),
                "bound": wish.bound,
                "sample_rate_MSps": float(wish.sample_rate_MSps),
            },
            "target": {"gate": wish.gate, "angle_deg": wish.angle_deg},
            "tolerance": {
                "amplitude": float(wish.amplitude),
                "detuning_MHz": float(wish.detuning_MHz),
            },
            "pulse": {"duration_ns": duration_ns, "slice_ns": slice_ns},
        },
        schema_path,
    )


def _short(value: float) -> float:
    """Without the digits that only round-off made; far within what the job file allows."""
    return float(f"{value:.12g}")
