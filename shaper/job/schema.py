"""The job file's keys, types and ranges, unit in each name; nothing is converted here."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

MAX_SLICES = 100_000
Vector = Annotated[list[float], Field(min_length=3, max_length=3)]
Complex = Annotated[list[float], Field(min_length=2, max_length=2)]
ComplexRow = Annotated[list[Complex], Field(min_length=2, max_length=2)]
Positive = Annotated[float, Field(gt=0)]
Degrees = Annotated[float, Field(ge=-1e6, le=1e6)]

TARGET_FORMS = ("gate", "axis", "euler_deg", "unitary", "from_state")


class Section(BaseModel):
    """Strict: unknown keys, wrong types, nan and infinities are refused."""

    model_config = ConfigDict(extra="forbid", strict=True, allow_inf_nan=False, frozen=True)


class Qubit(Section):
    """What is driven."""

    detuning_MHz: float = Field(0.0, description="qubit minus carrier frequency")
    t1_us: Positive | None = Field(None, description="energy relaxation time")
    t2_us: Positive | None = Field(None, description="coherence time, at most 2 t1_us")
    anharmonicity_MHz: float | None = Field(
        None, description="second transition minus first; leakage is modelled if given"
    )

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
            if vector is not None and not any(vector):
                raise ValueError(f"{name}: expected a vector other than zero, got {vector}")
        return self


class Tolerance(Section):
    """The box that the pulse must withstand."""

    amplitude: float = Field(0.0, ge=0, lt=1, description="relative amplitude error, +-")
    detuning_MHz: float = Field(0.0, ge=0, description="drift of the resonance, +-")


class PulseSection(Section):
    """The waveform's clockwork."""

    duration_ns: Positive = Field(description="length of the waveform")
    slice_ns: Positive = Field(description="length of a slice, a whole number of DAC samples")


class Search(Section):
    """How the waveform is looked for; all optional."""

    starts: int = Field(32, ge=1, le=4096, description="number of starting waveforms")
    iterations: int = Field(
        100, ge=1, le=1_000_000, description="most exploring steps of each start"
    )
    seed: int = Field(0, ge=0, le=2**31 - 1, description="of the random starts")
    minimize: Literal["worst", "mean"] = Field("worst", description="over the tolerance box")
    stop_infidelity: Annotated[float, Field(gt=0, lt=1)] | None = Field(
        None, description="the search stops here; falling short of it is exit code 3"
    )


class JobFile(Section):
    """One job: which gate, on what qubit, through which line, within which tolerance."""

    title: str = Field("", max_length=500, description="free text")
    qubit: Qubit = Field(default_factory=Qubit)
    drive: Drive
    target: TargetSection
    tolerance: Tolerance = Field(default_factory=Tolerance)
    pulse: PulseSection
    search: Search = Field(default_factory=Search)

    @model_validator(mode="after")
    def _clockwork(self):
        samples = self.pulse.slice_ns * self.drive.sample_rate_MSps / 1e3
        if round(samples) < 1 or abs(samples - round(samples)) > 1e-9 * max(samples, 1.0):
            raise ValueError(
                "pulse.slice_ns: expected a whole number of DAC samples "
                f"(multiple of {1e3 / self.drive.sample_rate_MSps:.10g} ns), "
                f"got {self.pulse.slice_ns:.10g} ns = {samples:.10g} samples"
            )
        slices = self.pulse.duration_ns / self.pulse.slice_ns
        if round(slices) < 1 or abs(slices - round(slices)) > 1e-9 * max(slices, 1.0):
            raise ValueError(
                "pulse.duration_ns: expected a whole number of slices "
                f"(multiple of {self.pulse.slice_ns:.10g} ns), "
                f"got {self.pulse.duration_ns:.10g} ns = {slices:.10g} slices"
            )
        if slices > MAX_SLICES:
            raise ValueError(
                f"pulse.duration_ns: expected at most {MAX_SLICES} slices, got {round(slices)}"
            )
        return self
