"""From the text of a job file to a frozen, checked record in SI."""

from __future__ import annotations

import difflib
import os
import tomllib
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from pydantic import BaseModel, ValidationError

from shaper import rotation
from shaper.errors import InputError
from shaper.job.schema import JobFile, TargetSection
from shaper.target import Target
from shaper.units import DEG, MHZ, MSPS, NS, US

_MAX_JOB_BYTES = 1_000_000
_DEFAULT_STOP_NOMINAL = 1e-9


@dataclass(frozen=True)
class Job:
    """One job in SI: seconds, rad/s. See ``shaper.job.schema`` for the meaning of each key."""

    title: str
    text: str
    detuning: float
    t1: float | None
    t2: float | None
    anharmonicity: float | None
    rabi_max: float
    bound: str
    sample_rate: float
    dac_bits: int
    granularity: int
    min_samples: int
    target: Target
    target_name: str
    equivalence: str
    amplitude_tolerance: float
    detuning_tolerance: float
    slices: int
    samples_per_slice: int
    starts: int
    iterations: int
    seed: int
    minimize: str
    stop_infidelity: float | None

    @property
    def slice_duration(self) -> float:
        """Length of one slice, s."""
        return self.samples_per_slice / self.sample_rate

    @property
    def duration(self) -> float:
        """Length of the shaped waveform, s."""
        return self.slices * self.slice_duration

    @property
    def has_tolerance(self) -> bool:
        """Whether there is a box to withstand at all."""
        return self.amplitude_tolerance > 0 or self.detuning_tolerance > 0


def read_job(path: str | os.PathLike) -> Job:
    """Read and check a job file.

    Raises:
        InputError: one line per fault, each with the key's path, what was expected, what came.
    """
    path = Path(path)
    try:
        with open(path, "rb") as file:
            raw = file.read(_MAX_JOB_BYTES + 1)
    except OSError as error:
        raise InputError(f"{path}: cannot read the job file: {error.strerror}") from error
    if len(raw) > _MAX_JOB_BYTES:
        raise InputError(f"{path}: expected a job file below {_MAX_JOB_BYTES} bytes")
    try:
        text = raw.decode("utf-8")
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: expected UTF-8 text: {error.reason}") from error
    return parse_job(text, str(path))


def parse_job(text: str, name: str = "job") -> Job:
    """Check the text of a job file and turn it into SI.

    Args:
        text: TOML.
        name: where it came from, for the messages.
    Raises:
        InputError: one line per fault.
    """
    try:
        data = tomllib.loads(text)
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(f"{name}: not valid TOML: {error}") from error
    try:
        file = JobFile.model_validate(data)
    except ValidationError as error:
        raise InputError(*_fault_lines(error, name)) from error
    try:
        target, target_name = _target(file.target)
    except ValueError as error:
        raise InputError(f"{name}: target.{error}") from error
    return _in_si(file, text, target, target_name)


def _in_si(file: JobFile, text: str, target: Target, target_name: str) -> Job:
    qubit, drive, tolerance, search = file.qubit, file.drive, file.tolerance, file.search
    stop = search.stop_infidelity
    if stop is None and not (tolerance.amplitude or tolerance.detuning_MHz):
        stop = _DEFAULT_STOP_NOMINAL
    return Job(
        title=file.title,
        text=text,
        detuning=qubit.detuning_MHz * MHZ,
        t1=qubit.t1_us and qubit.t1_us * US,
        t2=qubit.t2_us and qubit.t2_us * US,
        anharmonicity=qubit.anharmonicity_MHz and qubit.anharmonicity_MHz * MHZ,
        rabi_max=drive.rabi_max_MHz * MHZ,
        bound=drive.bound,
        sample_rate=drive.sample_rate_MSps * MSPS,
        dac_bits=drive.dac_bits,
        granularity=drive.granularity_samples,
        min_samples=drive.min_samples,
        target=target,
        target_name=target_name,
        equivalence=file.target.equivalence,
        amplitude_tolerance=tolerance.amplitude,
        detuning_tolerance=tolerance.detuning_MHz * MHZ,
        slices=round(file.pulse.duration_ns / file.pulse.slice_ns),
        samples_per_slice=round(file.pulse.slice_ns * NS * drive.sample_rate_MSps * MSPS),
        starts=search.starts,
        iterations=search.iterations,
        seed=search.seed,
        minimize=search.minimize,
        stop_infidelity=stop,
    )


def _target(section: TargetSection) -> tuple[Target, str]:
    """The target and its name for people."""
    if section.from_state is not None:
        quaternion = rotation.between(section.from_state, section.to_state)
        end = np.array(section.to_state) / np.linalg.norm(section.to_state)
        name = f"state {_components(section.from_state)} to {_components(section.to_state)}"
        return Target(quaternion, end, "state"), name
    if section.axis is not None:
        quaternion = rotation.from_axis_angle(section.axis, section.angle_deg * DEG)
        name = f"{section.angle_deg:g} degrees about {_components(section.axis)}"
    elif section.euler_deg is not None:
        quaternion = rotation.from_euler(*(angle * DEG for angle in section.euler_deg))
        name = f"zyz {_components(section.euler_deg)}"
    elif section.unitary is not None:
        quaternion = rotation.from_matrix([[re + 1j * im for re, im in r] for r in section.unitary])
        name = "unitary"
    elif section.gate in ("x", "y", "z"):
        turn = {"x": rotation.about_x, "y": rotation.about_y, "z": rotation.about_z}
        quaternion = turn[section.gate](section.angle_deg * DEG)
        name = f"{section.gate}({section.angle_deg:g})"
    else:
        quaternion, name = rotation.NAMED_GATES[section.gate], section.gate
    if section.equivalence == "up_to_final_z":
        return Target(quaternion, np.array([0.0, 0.0, 1.0])), name + " up to a final z"
    return Target(quaternion), name


def _components(vector: list[float]) -> str:
    return "(" + ", ".join(f"{v:g}" for v in vector) + ")"


def _fault_lines(error: ValidationError, name: str) -> list[str]:
    """One line per fault: place, what was expected, what came, the nearest known key."""
    lines = []
    for fault in error.errors(include_url=False):
        place = ".".join(str(part) for part in fault["loc"] if not str(part).startswith("list["))
        came = repr(fault["input"])
        came = came if len(came) <= 60 else came[:57] + "..."
        if fault["type"] == "extra_forbidden":
            line = f"{place}: unknown key, got {came}"
            known = _known_keys(fault["loc"])
            near = difflib.get_close_matches(str(fault["loc"][-1]), known, n=1, cutoff=0.5)
            line += f"; nearest known key: {near[0]}" if near else f"; known: {', '.join(known)}"
        elif fault["type"] == "missing":
            line = f"{place}: expected this key, got none"
        elif fault["type"] == "value_error":
            reason = str(fault["ctx"]["error"])
            joint = "." if place and ":" in reason.split(" ")[0] else ": "
            line = f"{place}{joint}{reason}" if place else reason
        else:
            expected = fault["msg"].removeprefix("Input should be ")
            line = f"{place}: expected {expected}, got {came}"
        lines.append(f"{name}: {line}")
    return lines


def _known_keys(loc: tuple) -> list[str]:
    """The keys of the section in which an unknown key stands."""
    model: type[BaseModel] = JobFile
    for part in loc[:-1]:
        field = model.model_fields.get(str(part))
        inner = field.annotation if field is not None else None
        if isinstance(inner, type) and issubclass(inner, BaseModel):
            model = inner
    return list(model.model_fields)
