"""From the text of a job file to a frozen, checked record in SI."""

from __future__ import annotations

import difflib
import os
import re
import tomllib
from dataclasses import dataclass, replace
from pathlib import Path
from typing import get_args

import numpy as np
from pydantic import BaseModel, ValidationError

from shaper import rotation
from shaper.errors import InputError
from shaper.job.facts import LineFacts, MixerFacts, NoiseFacts, Shape
from shaper.job.schema import ADDRESSED, GroupSection, JobFile, TargetSection
from shaper.target import Target
from shaper.units import DEG, MHZ, MSPS, NS, US

_MAX_JOB_BYTES = 1_000_000
_DEFAULT_STOP_NOMINAL = 1e-9
_IS_KEY = re.compile(r"\w+")  # other parts of a fault's place name a kind, not a key


@dataclass(frozen=True)
class Group:
    """One qubit that the pulse acts on: its target, and the box of errors around its resonance.

    Attributes:
        name: of the qubit.
        target: what the pulse must do to it.
        detuning: rad/s, its frequency minus the carrier's.
        amplitude_tolerance: relative, +-.
        detuning_tolerance: rad/s, +-.
        weight: of its infidelity against the others'.
        target_name: the target for people.
    """

    name: str
    target: Target
    detuning: float
    amplitude_tolerance: float
    detuning_tolerance: float
    weight: float = 1.0
    target_name: str = ""

    @property
    def has_tolerance(self) -> bool:
        """Whether there is a box to withstand for this qubit."""
        return self.amplitude_tolerance > 0 or self.detuning_tolerance > 0


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
    leakage_weight: float
    others: tuple[Group, ...]
    shape: Shape
    line: LineFacts
    correction: str
    carrier: float | None  # rad/s
    intermediate_frequency: float  # rad/s
    mixer: MixerFacts
    noise: NoiseFacts
    levels: int
    polish: bool
    find_shortest: bool  # the duration is to be found; ``slices`` then says nothing
    find_best: bool  # likewise, by the least worst case with decay

    @property
    def open_duration(self) -> bool:
        """Whether the duration is to be found."""
        return self.find_shortest or self.find_best

    @property
    def groups(self) -> tuple[Group, ...]:
        """All qubits that the pulse acts on, the addressed one first."""
        addressed = Group(
            ADDRESSED,
            self.target,
            self.detuning,
            self.amplitude_tolerance,
            self.detuning_tolerance,
            target_name=self.target_name,
        )
        return (addressed, *self.others)

    def for_group(self, group: Group) -> Job:
        """The job as if this qubit were alone: for scores, proofs and figures of it."""
        return replace(
            self,
            target=group.target,
            target_name=group.target_name,
            detuning=group.detuning,
            amplitude_tolerance=group.amplitude_tolerance,
            detuning_tolerance=group.detuning_tolerance,
            others=(),
        )

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
        """Whether there is a box to withstand at all, for any of the qubits."""
        return any(group.has_tolerance for group in self.groups)


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
    return parse_job(text, str(path), path.parent)


def parse_job(text: str, name: str = "job", folder: str | os.PathLike = ".") -> Job:
    """Check the text of a job file and turn it into SI.

    Args:
        text: TOML.
        name: where it came from, for the messages.
        folder: where the files it names lie.
    Raises:
        InputError: one line per fault.
    """
    try:
        data = tomllib.loads(text)
    except (ValueError, RecursionError) as error:  # ValueError: integers of thousands of digits too
        raise InputError(f"{name}: not valid TOML: {error}") from error
    try:
        file = JobFile.model_validate(data)
    except ValidationError as error:
        raise InputError(*_fault_lines(error, name)) from error
    target, target_name = _named_target(file.target, f"{name}: target")
    others = tuple(
        _group(section, file.qubit.detuning_MHz, f"{name}: group.{k}")
        for k, section in enumerate(file.group)
    )
    return _in_si(file, text, target, target_name, others, Path(folder))


def _named_target(section: TargetSection, place: str) -> tuple[Target, str]:
    try:
        return _target(section)
    except ValueError as error:
        raise InputError(f"{place}.{error}") from error


def _group(section: GroupSection, detuning_MHz: float, place: str) -> Group:
    target, target_name = _named_target(section.target, f"{place}.target")
    return Group(
        name=section.name,
        target=target,
        target_name=target_name,
        detuning=(detuning_MHz + section.offset_MHz) * MHZ,
        amplitude_tolerance=section.amplitude,
        detuning_tolerance=section.detuning_MHz * MHZ,
        weight=section.weight,
    )


def _in_si(
    file: JobFile, text: str, target: Target, target_name: str, others: tuple, folder: Path
) -> Job:
    qubit, drive, tolerance, search = file.qubit, file.drive, file.tolerance, file.search
    stop = search.stop_infidelity
    tolerant = tolerance.amplitude or tolerance.detuning_MHz
    tolerant = tolerant or any(g.amplitude_tolerance or g.detuning_tolerance for g in others)
    if stop is None and not tolerant:
        stop = _DEFAULT_STOP_NOMINAL
    duration = file.pulse.duration_ns
    line, mixer, noise, shape = file.line, file.mixer, file.noise, file.shape

    def beside(name: str | None) -> Path | None:
        return None if name is None else folder / name

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
        slices=1 if isinstance(duration, str) else round(duration / file.pulse.slice_ns),
        samples_per_slice=round(file.pulse.slice_ns * NS * drive.sample_rate_MSps * MSPS),
        starts=search.starts,
        iterations=search.iterations,
        seed=search.seed,
        minimize=search.minimize,
        stop_infidelity=stop,
        leakage_weight=search.leakage_weight,
        others=others,
        shape=Shape(
            shape.smoothness,
            shape.max_bandwidth_MHz and shape.max_bandwidth_MHz * 1e6,
            shape.band_weight,
            shape.rise_ns * NS,
        ),
        line=LineFacts(
            line.kind,
            line.bandwidth_MHz and line.bandwidth_MHz * 1e6,
            beside(line.file),
            (line.to_port, line.from_port),
        ),
        correction=drive.correction,
        carrier=drive.carrier_GHz and drive.carrier_GHz * 1e3 * MHZ,
        intermediate_frequency=drive.intermediate_MHz * MHZ,
        mixer=MixerFacts(
            mixer.gain,
            mixer.phase_deg * DEG,
            mixer.offset_i_MHz * MHZ,
            mixer.offset_q_MHz * MHZ,
            mixer.skew_ns * NS,
        ),
        noise=NoiseFacts(
            noise.detuning_sigma_kHz * 1e-3 * MHZ,
            noise.amplitude_sigma,
            beside(noise.detuning_psd_file),
        ),
        levels=qubit.levels,
        polish=drive.polish,
        find_shortest=duration == "shortest",
        find_best=duration == "best",
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
    lines: dict[str, str] = {}  # by place
    for fault in error.errors(include_url=False):
        place = ".".join(str(part) for part in fault["loc"])
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
            place = ".".join(part for part in map(str, fault["loc"]) if _IS_KEY.fullmatch(part))
            expected = fault["msg"].removeprefix("Input should be ")
            if fault["type"] == "too_short":
                expected = f"at least {fault['ctx']['min_length']} entries"
            elif fault["type"] == "too_long":
                expected = f"at most {fault['ctx']['max_length']} entries"
            if place in lines:  # a key of two kinds is at fault once for each
                expected = (
                    lines[place].removeprefix(f"{place}: expected ").removesuffix(f", got {came}")
                    + f" or {expected}"
                )
            line = f"{place}: expected {expected}, got {came}"
        lines[place] = line
    return [f"{name}: {_printable(line)}" for line in lines.values()]


def _printable(line: str) -> str:
    """One line for a terminal, whatever stood in the file."""
    return "".join(c if c.isprintable() else f"\\u{ord(c):04x}" for c in line)


def _known_keys(loc: tuple) -> list[str]:
    """The keys of the section in which an unknown key stands."""
    model: type[BaseModel] = JobFile
    for part in loc[:-1]:
        field = model.model_fields.get(str(part))
        inner = field.annotation if field is not None else None
        inner = next(iter(get_args(inner)), inner)  # the items of a list
        if isinstance(inner, type) and issubclass(inner, BaseModel):
            model = inner
    return list(model.model_fields)
