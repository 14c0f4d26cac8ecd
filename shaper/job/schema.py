"""The job file's keys, types and ranges, unit in each name; nothing is converted here."""

from __future__ import annotations

import math
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

MAX_SLICES = 100_000
MAX_SAMPLES = 10_000_000
MAX_TURN = 100_000  # rad in all; each rad costs the engine a step
# Wide enough for any bench, narrow enough that no product of two of them overflows.
Number = Annotated[float, Field(ge=-1e12, le=1e12)]
Size = Annotated[float, Field(ge=0, le=1e12)]
Positive = Annotated[float, Field(ge=1e-12, le=1e12)]
Vector = Annotated[list[Number], Field(min_length=3, max_length=3)]
Complex = Annotated[list[Number], Field(min_length=2, max_length=2)]
ComplexRow = Annotated[list[Complex], Field(min_length=2, max_length=2)]
Degrees = Annotated[float, Field(ge=-1e6, le=1e6)]

ADDRESSED = "addressed"  # name of the qubit of the sections qubit, target and tolerance
TARGET_FORMS = ("gate", "axis", "euler_deg", "unitary", "from_state")


class Section(BaseModel):
    """Strict: unknown keys, wrong types, nan and infinities are refused."""

    model_config = ConfigDict(extra="forbid", strict=True, allow_inf_nan=False, frozen=True)


class Qubit(Section):
    """What is driven."""

    detuning_MHz: Number = Field(0.0, description="qubit minus carrier frequency")
    t1_us: Positive | None = Field(None, description="energy relaxation time")
    t2_us: Positive | None = Field(None, description="coherence time, at most 2 t1_us")
    anharmonicity_MHz: Number | None = Field(
        None, description="second transition minus first; leakage is modelled if given"
    )

    levels: int = Field(3, ge=3, le=5, description="levels of the model if there is leakage")

    @model_validator(mode="after")
    def _physical(self):
        if self.t1_us and self.t2_us and self.t2_us > 2 * self.t1_us:
            raise ValueError(
                f"t2_us: expected at most 2 t1_us = {2 * self.t1_us:g}, got {self.t2_us:g}"
            )
        if self.anharmonicity_MHz == 0:
            raise ValueError(
                "anharmonicity_MHz: expected a number other than zero, got 0; "
                "leave the key out for an ideal two-level qubit"
            )
        return self


class Drive(Section):
    """What drives it."""

    rabi_max_MHz: Positive = Field(description="largest Rabi frequency, W_max / 2 pi")
    bound: Literal["circle", "box"] = Field(
        "circle", description="circle: one I/Q line; box: two independent lines"
    )
    sample_rate_MSps: Positive = Field(description="DAC sample rate")
    dac_bits: int = Field(14, ge=2, le=16, description="DAC resolution, sign included")
    granularity_samples: int = Field(1, ge=1, le=65536, description="length multiple of the AWG")
    min_samples: int = Field(1, ge=1, le=1_000_000, description="shortest length of the AWG")
    carrier_GHz: Positive | None = Field(None, description="frequency of the oscillating carrier")
    correction: Literal["model", "inverse", "none"] = Field(
        "model",
        description="of the line: in the model, by predistortion, or not at all",
    )
    intermediate_MHz: Number = Field(
        0.0, description="digital intermediate frequency, its phase counted from sample 0"
    )
    polish: bool = Field(False, description="a last search on the integer codes themselves")


class LineSection(Section):
    """The drive line between DAC and qubit."""

    kind: Literal["none", "first_order", "gaussian", "step_response", "touchstone"] = Field(
        "none", description="what is known of it"
    )
    bandwidth_MHz: Positive | None = Field(
        None, description="-3 dB, to either side of the carrier; first_order and gaussian"
    )
    file: str | None = Field(
        None, description="measured: CSV time_ns,response or Touchstone, relative to the job file"
    )
    from_port: int = Field(1, ge=1, description="Touchstone port on the side of the DAC")
    to_port: int = Field(2, ge=1, description="Touchstone port on the side of the qubit")

    @model_validator(mode="after")
    def _one_source(self):
        needs = {"first_order": "bandwidth_MHz", "gaussian": "bandwidth_MHz"}
        needs |= {"step_response": "file", "touchstone": "file"}
        needed = needs.get(self.kind)
        for key in ("bandwidth_MHz", "file"):
            given = getattr(self, key) is not None
            if given != (key == needed):
                raise ValueError(
                    f"{key}: expected {'a value' if key == needed else 'no such key'} "
                    f"with kind = {self.kind!r}, got {getattr(self, key)!r}"
                )
        return self


class MixerSection(Section):
    """Calibrated faults of the I/Q mixer, corrected before the codes."""

    gain: Positive = Field(1.0, description="of the Q arm, relative to I")
    phase_deg: float = Field(0.0, gt=-45, lt=45, description="quadrature error")
    offset_i_MHz: Number = Field(0.0, description="carrier leakage in I, as a Rabi frequency")
    offset_q_MHz: Number = Field(0.0, description="carrier leakage in Q, as a Rabi frequency")
    skew_ns: Number = Field(0.0, description="by which Q is late")


class NoiseSection(Section):
    """What drifts and fluctuates; used by verify."""

    detuning_sigma_kHz: Size = Field(0.0, description="quasi-static, rms")
    amplitude_sigma: Size = Field(0.0, description="quasi-static, relative, rms")
    detuning_psd_file: str | None = Field(
        None, description="CSV frequency_Hz,density_Hz2_per_Hz, relative to the job file"
    )


class TargetSection(Section):
    """What the pulse must do: exactly one of gate, axis, euler_deg, unitary, from_state."""

    gate: (
        Literal["x", "y", "z", "hadamard", "s", "t", "s_inverse", "t_inverse", "sqrt_x", "identity"]
        | None
    ) = Field(None, description="named gate; x, y, z with angle_deg")
    angle_deg: Degrees | None = Field(None, description="rotation angle for x, y, z and axis")
    axis: Vector | None = Field(None, description="rotation axis, any length but zero")
    euler_deg: Vector | None = Field(
        None, description="z(first), then y(second), then z(third), in time order"
    )
    unitary: Annotated[list[ComplexRow], Field(min_length=2, max_length=2)] | None = Field(
        None, description="2x2, each entry [re, im]; the global phase is removed"
    )
    from_state: Vector | None = Field(None, description="Bloch vector before the pulse")
    to_state: Vector | None = Field(None, description="Bloch vector after the pulse")
    equivalence: Literal["exact", "up_to_final_z"] = Field(
        "exact", description="up_to_final_z: what a frame update absorbs afterwards"
    )

    @model_validator(mode="after")
    def _one_form(self):
        given = [name for name in TARGET_FORMS if getattr(self, name) is not None]
        if len(given) != 1:
            raise ValueError(
                f"expected exactly one of {', '.join(TARGET_FORMS)}, "
                f"got {' and '.join(given) if given else 'none'}"
            )
        turns = self.axis is not None or self.gate in ("x", "y", "z")
        if turns and self.angle_deg is None:
            raise ValueError("angle_deg: expected an angle for this target, got none")
        if not turns and self.angle_deg is not None:
            raise ValueError(
                f"angle_deg: expected only with x, y, z or axis, got {self.angle_deg:g}"
            )
        if (self.from_state is None) != (self.to_state is None):
            raise ValueError("expected from_state and to_state together, got only one")
        if self.from_state is not None and self.equivalence != "exact":
            raise ValueError("equivalence: has no meaning for a state-to-state target")
        for name in ("axis", "from_state", "to_state"):
            vector = getattr(self, name)
            if vector is not None and max(map(abs, vector)) < 1e-12:
                raise ValueError(f"{name}: expected a vector other than zero, got {vector}")
        return self


class Tolerance(Section):
    """The box that the pulse must withstand."""

    amplitude: float = Field(0.0, ge=0, lt=1, description="relative amplitude error, +-")
    detuning_MHz: Size = Field(0.0, description="drift of the resonance, +-")


class GroupSection(Section):
    """Another qubit on the same line, with a target of its own."""

    name: str = Field(max_length=100, description="of the qubit")
    offset_MHz: Number = Field(description="of its frequency from the addressed qubit's")
    target: TargetSection = Field(description="what the same pulse must do to it")
    amplitude: float = Field(0.0, ge=0, lt=1, description="relative amplitude error, +-")
    detuning_MHz: Size = Field(0.0, description="drift of its resonance, +-")
    weight: Positive = Field(1.0, description="of its infidelity against the others'")


class ShapeSection(Section):
    """What the waveform should look like, apart from what it does."""

    smoothness: Size = Field(0.0, description="weight of the mean squared second difference")
    max_bandwidth_MHz: Positive | None = Field(
        None, description="band, to either side of the carrier, that should hold the energy"
    )
    band_weight: Positive = Field(10.0, description="weight of the part of the energy outside")
    rise_ns: Size = Field(
        0.0, description="the drive rises from zero and falls back to it in this time"
    )


class PulseSection(Section):
    """The waveform's clockwork."""

    duration_ns: Positive | Literal["shortest", "best"] = Field(
        description='length of the waveform; "shortest": what reaches stop_infidelity; '
        '"best": least worst case with decay'
    )
    slice_ns: Positive = Field(description="length of a slice, a whole number of DAC samples")


class Search(Section):
    """How the waveform is looked for; all optional."""

    starts: int = Field(128, ge=1, le=4096, description="number of starting waveforms")
    iterations: int = Field(
        100, ge=1, le=1_000_000, description="most exploring steps of each start"
    )
    seed: int = Field(0, ge=0, le=2**31 - 1, description="of the random starts")
    minimize: Literal["worst", "mean", "first_order"] = Field(
        "worst",
        description="over the tolerance box; first_order: the slopes at its center instead",
    )
    stop_infidelity: Annotated[float, Field(gt=0, lt=1)] | None = Field(
        None, description="the search stops here; falling short of it is exit code 3"
    )
    leakage_weight: Positive = Field(
        1.0,
        description="of population lost to the levels above, against a wrong rotation; seepage "
        "is weighted with it: 2 leakage / (levels - 2) without decay",
    )


class JobFile(Section):
    """One job: which gate, on what qubit, through which line, within which tolerance."""

    title: str = Field("", max_length=500, description="free text")
    qubit: Qubit = Field(default_factory=Qubit)
    drive: Drive
    line: LineSection = Field(default_factory=LineSection)
    mixer: MixerSection = Field(default_factory=MixerSection)
    noise: NoiseSection = Field(default_factory=NoiseSection)
    target: TargetSection
    tolerance: Tolerance = Field(default_factory=Tolerance)
    group: list[GroupSection] = Field(default_factory=list, max_length=20)
    pulse: PulseSection
    shape: ShapeSection = Field(default_factory=ShapeSection)
    search: Search = Field(default_factory=Search)

    @model_validator(mode="after")
    def _readable(self):
        for place, text in [
            ("title", self.title),
            *((f"group.{k}.name", group.name) for k, group in enumerate(self.group)),
        ]:
            if not text.isprintable():
                raise ValueError(f"{place}: expected printable text on one line, got {text!r}")
        return self

    @model_validator(mode="after")
    def _names_differ(self):
        taken = {ADDRESSED}
        for k, group in enumerate(self.group):
            if group.name in taken:
                raise ValueError(
                    f"group.{k}.name: expected a name that no other qubit has, got {group.name!r}"
                )
            taken.add(group.name)
        return self

    @model_validator(mode="after")
    def _clockwork(self):
        samples = self.pulse.slice_ns * self.drive.sample_rate_MSps / 1e3
        if round(samples) < 1 or abs(samples - round(samples)) > 1e-9 * max(samples, 1.0):
            raise ValueError(
                "pulse.slice_ns: expected a whole number of DAC samples "
                f"(multiple of {1e3 / self.drive.sample_rate_MSps:.10g} ns), "
                f"got {self.pulse.slice_ns:.10g} ns = {samples:.10g} samples"
            )
        open_duration = isinstance(self.pulse.duration_ns, str)
        if open_duration:
            self._require_goal()
        else:
            self._require_whole_slices()
        if 2 * self.shape.rise_ns > 0 and not open_duration:
            if 2 * self.shape.rise_ns >= self.pulse.duration_ns:
                raise ValueError(
                    "shape.rise_ns: expected less than half of pulse.duration_ns = "
                    f"{self.pulse.duration_ns:g}, got {self.shape.rise_ns:g}"
                )
        if self.qubit.anharmonicity_MHz is not None:
            if self.group:
                raise ValueError(
                    "group: expected a job without qubit.anharmonicity_MHz; several qubits on one "
                    "line have two levels each"
                )
        elif self.search.leakage_weight != 1:
            raise ValueError(
                "search.leakage_weight: expected qubit.anharmonicity_MHz with it, since nothing "
                f"leaks from two levels; got {self.search.leakage_weight:g} and no anharmonicity"
            )
        if self.line.kind == "touchstone" and self.drive.carrier_GHz is None:
            raise ValueError("drive.carrier_GHz: expected a value with a touchstone line, got none")
        if abs(self.drive.intermediate_MHz) >= self.drive.sample_rate_MSps / 2:
            raise ValueError(
                "drive.intermediate_MHz: expected less than half of sample_rate_MSps, got "
                f"{self.drive.intermediate_MHz:g}"
            )
        if self.search.minimize == "first_order" and not (
            self.tolerance.amplitude or self.tolerance.detuning_MHz
        ):
            raise ValueError(
                'search.minimize: expected a tolerance with "first_order": '
                "which errors, and how they weigh, is read from it"
            )
        return self

    def _require_goal(self):
        if self.pulse.duration_ns == "best":
            if self.qubit.t1_us is None and self.qubit.t2_us is None:
                raise ValueError(
                    'pulse.duration_ns: expected qubit.t1_us or qubit.t2_us with "best", got none'
                )
            return
        tolerant = self.tolerance.amplitude or self.tolerance.detuning_MHz
        if tolerant and self.search.stop_infidelity is None:
            raise ValueError(
                'pulse.duration_ns: expected search.stop_infidelity with "shortest", got none'
            )

    def _require_whole_slices(self):
        slices = self.pulse.duration_ns / self.pulse.slice_ns
        if round(slices) < 1 or abs(slices - round(slices)) > 1e-9 * max(slices, 1.0):
            raise ValueError(
                "pulse.duration_ns: expected a whole number of slices "
                f"(multiple of {self.pulse.slice_ns:.10g} ns), "
                f"got {self.pulse.duration_ns:.10g} ns = {slices:.10g} slices"
            )
        if slices > MAX_SLICES:
            raise ValueError(
                f"pulse.duration_ns: expected at most {MAX_SLICES} slices, got {slices:.10g}"
            )
        samples = self.pulse.duration_ns * self.drive.sample_rate_MSps / 1e3
        if samples > MAX_SAMPLES:
            raise ValueError(
                f"pulse.duration_ns: expected at most {MAX_SAMPLES} samples, got {samples:.10g}"
            )
        rates = [abs(self.qubit.detuning_MHz) + self.tolerance.detuning_MHz]
        rates += [
            abs(self.qubit.detuning_MHz + group.offset_MHz) + group.detuning_MHz
            for group in self.group
        ]
        turn = math.hypot(self.drive.rabi_max_MHz, max(rates)) * self.pulse.duration_ns
        turn *= 2 * math.pi * 1e-3
        if turn > MAX_TURN:
            raise ValueError(
                "pulse.duration_ns: expected a waveform that turns the qubit by at most "
                f"{MAX_TURN} rad in all, got {turn:.4g} rad"
            )
