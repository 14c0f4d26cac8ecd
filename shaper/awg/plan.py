"""What will lie in the instrument's memory: every trace, byte for byte, before any link is opened.

Everything that can be refused is refused here: names, lengths, rates, volts, watts.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np

from shaper.awg import block
from shaper.awg.files import sha256
from shaper.awg.profile import Profile
from shaper.awg.safety import exposure, require_within, rotation_of, scaled
from shaper.drive import dac
from shaper.errors import InputError
from shaper.pulse import Pulse

_SAME = 1e-9  # relative; two rates this close are one
_CALIBRATED = 1e-3  # relative; a full scale this far off its calibration makes another rotation


@dataclass(frozen=True)
class Choice:
    """One pulse to be loaded.

    Attributes:
        trace: the name it shall have in the instrument, before prefix and suffix.
        pulse: the waveform.
        bound: "circle" or "box", of its job.
        detuning: rad/s, of its job.
        file, file_sha256, pulse_name: where it comes from.
        target, infidelity: what it was made for, and how well its codes do it at full scale.
    """

    trace: str
    pulse: Pulse
    bound: str
    detuning: float
    file: str
    file_sha256: str
    pulse_name: str
    target: str
    infidelity: float


@dataclass(frozen=True)
class Trace:
    """One name in the instrument's memory and its bytes."""

    name: str
    part: str
    output: int
    points: int
    data: bytes
    data_sha256: str
    pulse: str


@dataclass(frozen=True)
class Plan:
    """A set: all of it, or nothing, will be loaded."""

    profile: Profile
    traces: tuple[Trace, ...]
    pulses: tuple[dict, ...]
    settings: dict

    @property
    def total_bytes(self) -> int:
        """Of all traces."""
        return sum(len(trace.data) for trace in self.traces)


def make_plan(
    choices: list[Choice],
    profile: Profile,
    *,
    prefix: str = "",
    scale: float = 1.0,
    repetition: float | None = None,
) -> Plan:
    """The traces of a set of pulses, checked against the profile and its limits.

    Args:
        prefix: goes before each name.
        scale: lowers the amplitude of all; the resulting rotation is stated in the plan.
        repetition: pulses played per second, all together; None for without a gap.
    Raises:
        InputError: one line per fault in names, lengths, rates or calibration.
        SafetyError: one line per limit exceeded.
    """
    if not choices:
        raise InputError("set: expected at least one pulse, got none")
    if repetition is not None and not 0 < repetition < float("inf"):
        raise InputError(f"repetition: expected a positive rate, got {repetition:g}")
    faults = [line for choice in choices for line in _mismatches(choice, profile)]
    scales = {choice.pulse.full_scale for choice in choices}
    if max(scales) > min(scales) * (1 + _SAME):
        faults.append(
            "set: expected one full scale for all pulses, since the instrument has one setting; "
            f"got {min(scales):.6g} to {max(scales):.6g} rad/s"
        )
    if faults:
        raise InputError(*faults)
    traces, pulses = [], []
    for choice in choices:
        pulse = scaled(choice.pulse, scale, choice.bound)
        codes, gate = _framed(pulse, profile)
        where = f"{choice.file}: {choice.pulse_name}"
        if len(codes) > profile.memory.max_samples:
            raise InputError(
                f"{where}: expected at most {profile.memory.max_samples} samples with lead, hold "
                f"and padding, got {len(codes)}"
            )
        found = exposure(codes, gate, profile, repetition)
        require_within(found, profile, where)
        own = _traces(choice, codes, gate, profile, prefix)
        traces += own
        pulses.append(
            {
                "pulse": choice.pulse_name,
                "file": choice.file,
                "file_sha256": choice.file_sha256,
                "origin": pulse.origin,
                "source": pulse.source,
                "target": choice.target,
                "infidelity_dac_at_full_scale": choice.infidelity,
                "rotation": rotation_of(pulse, choice.detuning),
                "full_scale_rad_per_s": pulse.full_scale,
                "samples": len(pulse.codes),
                "lead_samples": profile.marker.lead_samples if profile.marker else 0,
                "total_samples": len(codes),
                "exposure": found.as_record(),
                "traces": [trace.name for trace in own],
            }
        )
    _distinct([trace.name for trace in traces], profile)
    settings = {"prefix": prefix, "scale": scale, "repetition_Hz": repetition}
    return Plan(profile, tuple(traces), tuple(pulses), settings)


def _mismatches(choice: Choice, profile: Profile) -> list[str]:
    """Where a pulse does not fit the instrument."""
    pulse, data, where = choice.pulse, profile.data, f"{choice.file}: {choice.pulse_name}"
    lines = []
    if abs(pulse.sample_rate - data.sample_rate) > _SAME * data.sample_rate:
        lines.append(
            f"{where}: expected {data.sample_rate / 1e6:.10g} MSps as in the profile, "
            f"got {pulse.sample_rate / 1e6:.10g} MSps"
        )
    if pulse.bits != data.bits:
        lines.append(f"{where}: expected {data.bits} bits as in the profile, got {pulse.bits}")
    wanted = profile.outputs.rabi_at_full_scale
    if wanted is not None and abs(pulse.full_scale - wanted) > _CALIBRATED * wanted:
        lines.append(
            f"{where}: expected a full scale of {wanted:.6g} rad/s as calibrated "
            f"(outputs.rabi_at_full_scale_MHz), got {pulse.full_scale:.6g} rad/s"
        )
    return lines


def _framed(pulse: Pulse, profile: Profile) -> tuple[np.ndarray, np.ndarray]:
    """Codes with lead, hold and padding, and the gate of the marker.

    Returns:
        [sample, 2] int16 and [sample] bool.
    """
    marker, memory = profile.marker, profile.memory
    lead = marker.lead_samples if marker else 0
    hold = marker.hold_samples if marker else 0
    end = lead + len(pulse.codes) + hold
    played = np.zeros((end, 2), np.int16)
    played[lead : lead + len(pulse.codes)] = pulse.codes
    gate = np.full(end, marker is not None)
    if profile.data.end_at_zero and (marker is not None or np.any(played[-1])):
        played = np.concatenate([played, np.zeros((1, 2), np.int16)])
    codes = dac.pad(played, memory.granularity_samples, memory.min_samples)
    return codes, np.concatenate([gate, np.zeros(len(codes) - end, bool)])


def _traces(
    choice: Choice, codes: np.ndarray, gate: np.ndarray, profile: Profile, prefix: str
) -> list[Trace]:
    data, outputs, names = profile.data, profile.outputs, profile.names
    bit = profile.marker.bit if profile.marker else None
    words = block.place(codes, data.bits, justify=data.justify, gate=gate, bit=bit)
    suffix = {"i": names.suffix_i, "q": names.suffix_q, "iq": ""}
    output = {"i": outputs.i, "q": outputs.q, "iq": outputs.i}
    found = []
    for part, values in block.split(words, data.layout).items():
        name = _trace_name(prefix + choice.trace + suffix[part], profile)
        content = block.to_bytes(values, data.byte_order)
        found.append(
            Trace(name, part, output[part], len(values), content, sha256(content), choice.trace)
        )
    return found


def _trace_name(text: str, profile: Profile) -> str:
    """The name in capitals, by the instrument's rules."""
    longest = profile.names.max_length
    if not re.fullmatch(r"[A-Za-z][A-Za-z0-9_]*", text) or len(text) > longest:
        raise InputError(
            f"trace name: expected a letter, then letters, digits or _, at most {longest} "
            f"characters with prefix and suffix, got {text!r}; choose another with PULSE=TRACE"
        )
    return text.upper()


def _distinct(names: list[str], profile: Profile) -> None:
    for name in names:
        if names.count(name) > 1:
            raise InputError(f"trace name: expected each name once, got {name} more than once")
    if profile.names.probe.upper() in names:
        raise InputError(f"trace name: {profile.names.probe} is reserved (names.probe)")
