"""What the codes will do to the load: volts, watts, duty cycle; refused beyond the limits.

Software limits are no interlock. They catch a wrong file or a wrong setting, not a fault.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from shaper.awg.profile import HIGH, Profile
from shaper.drive import dac
from shaper.errors import InputError, SafetyError
from shaper.physics.propagate import propagate
from shaper.pulse import Pulse

_ROUND_OFF = 1e-9  # relative; a figure this close above its limit is the limit

CHECKLIST = (
    "Clock: sample rate as in the profile, reference locked?",
    "Levels: full scale measured into the real load, with date? Attenuators in the line?",
    "Load: 50 ohm or high impedance as in the profile? No amplifier without a load?",
    "Ratings: peak, mean power and duty cycle of amplifier, line, coil and cryostat known?",
    "Channels: I and Q on the right outputs, sign and sideband tried with one tone?",
    "Gate: marker lead and hold fit the amplifier or switch?",
    "DC: a block in the line where an offset could reach a cold or biased device?",
    "First look: on a scope, into a matched load, 20 to 30 dB down (--scale 0.05)?",
    "Stop: where is the hardware switch, and who stands at it?",
)

CAUTIONS = (
    "The output drives whatever is connected now. Look at the cable before you answer.",
    "An amplifier without a load can destroy itself. Order: load, bias, drive; off in reverse.",
    "Coils keep current: never unplug one that is driven. Quench, cryogen and implant rules hold.",
    "RF can burn and laser light can blind: shields and goggles where they belong.",
    "Not for anything connected to, or around, a person. Software limits are no interlock: keep a "
    "hand on the hardware switch.",
)


@dataclass(frozen=True)
class Exposure:
    """What one pulse does to the load, computed from its codes.

    Attributes:
        peak_i, peak_q: V, largest magnitude at each output.
        peak_vector: V, largest sqrt(I^2 + Q^2): the envelope behind an I/Q modulator.
        mean_power: W, of all outputs, over the repetition.
        duty_cycle: part of the time with a code other than zero, or with the gate open.
        period: s, from one start to the next.
        continuous: whether the period is just the trace, played without a gap.
    """

    peak_i: float
    peak_q: float
    peak_vector: float
    mean_power: float
    duty_cycle: float
    period: float
    continuous: bool

    def as_record(self) -> dict:
        """With the units in the names, for files and people."""
        power = self.mean_power
        return {
            "peak_i_V": self.peak_i,
            "peak_q_V": self.peak_q,
            "peak_vector_V": self.peak_vector,
            "mean_power_mW": 1e3 * power,
            "mean_power_dBm": 10 * math.log10(1e3 * power) if power > 0 else None,
            "duty_cycle": self.duty_cycle,
            "period_s": self.period,
            "continuous": self.continuous,
        }


def exposure(
    codes: np.ndarray, gate: np.ndarray, profile: Profile, repetition: float | None
) -> Exposure:
    """Peak, mean power and duty cycle of one trace.

    Args:
        codes: [sample, 2] int16, lead and padding included, before any shift or marker.
        gate: [sample] bool, where the marker is high.
        profile: full scale, load, sample rate.
        repetition: pulses played per second, all together. None: the trace is played again and
            again without a gap, which is the worst that can happen.
    Raises:
        InputError: if that many pulses do not fit into a second.
    """
    outputs, data = profile.outputs, profile.data
    volts = np.asarray(codes, dtype=float) / dac.largest_code(data.bits) * outputs.peak_V
    length = len(codes) / data.sample_rate
    period = length if repetition is None else 1 / repetition
    if period < length * (1 - _ROUND_OFF):
        raise InputError(
            f"repetition: expected at most {1 / length:.6g} per second for a trace of "
            f"{length:.6g} s, got {repetition:.6g}"
        )
    energy = float(np.sum(volts**2)) / data.sample_rate / outputs.ohm_for_power  # J
    busy = np.any(np.asarray(codes) != 0, axis=1) | np.asarray(gate, dtype=bool)
    peaks = np.max(np.abs(volts), axis=0)
    return Exposure(
        peak_i=float(peaks[0]),
        peak_q=float(peaks[1]),
        peak_vector=float(np.max(np.hypot(volts[:, 0], volts[:, 1]))),
        mean_power=energy / period,
        duty_cycle=float(np.count_nonzero(busy)) / data.sample_rate / period,
        period=period,
        continuous=repetition is None,
    )


def require_within(found: Exposure, profile: Profile, where: str) -> None:
    """Refuse what exceeds a limit.

    Raises:
        SafetyError: one line per limit exceeded.
    """
    limits, load = profile.limits, profile.outputs.load_ohm
    into = "a high load" if load == HIGH else f"{load:g} ohm"
    faults = []
    for what, value, limit, unit in (
        ("peak", found.peak_vector, limits.peak_V, f"V into {into}"),
        ("mean power", 1e3 * found.mean_power, limits.mean_power_mW, f"mW into {into}"),
        ("duty cycle", found.duty_cycle, limits.duty_cycle, ""),
    ):
        if not value <= limit * (1 + _ROUND_OFF):
            faults.append(f"{where}: {what}: expected at most {limit:.6g} {unit}".rstrip())
            faults[-1] += f", got {value:.6g}"
    if faults:
        raise SafetyError("\n".join(faults))


def scaled(pulse: Pulse, factor: float, bound: str) -> Pulse:
    """The pulse with its amplitude lowered: new codes, never outside the bound.

    Raises:
        InputError: if the factor is not above 0 and at most 1.
    """
    if not 0 < factor <= 1:
        raise InputError(f"scale: expected a number above 0 and at most 1, got {factor:g}")
    if factor == 1:
        return pulse
    drive = factor * dac.decode(pulse.codes, pulse.full_scale, pulse.bits)
    codes = dac.encode(drive, pulse.full_scale, pulse.bits, bound)
    return replace(pulse, codes=codes, drive=factor * pulse.drive)


def rotation_of(pulse: Pulse, detuning: float) -> dict:
    """What the codes do to a qubit at rest: turn angle (degrees) and axis.

    Args:
        detuning: rad/s, the job's own.
    """
    drive, durations = pulse.played
    w, *xyz = propagate(drive, durations, 0.0, detuning)
    length = math.hypot(*xyz)
    sign = -1.0 if w < 0 else 1.0  # of q and -q the turn by at most half a circle
    axis = [sign * component / length if length > 0 else 0.0 for component in xyz]
    return {"angle_deg": math.degrees(2 * math.atan2(length, abs(w))), "axis": axis}
