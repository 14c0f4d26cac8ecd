"""What the loader must know of one instrument on one bench: a TOML file, every key checked.

IEEE 488.2 and SCPI-1999 settle the messages; they do not settle how a sample lies in its word,
which output plays which trace, or how many volts a code makes. That stands here.
"""

from __future__ import annotations

import difflib
import string
import tomllib
from pathlib import Path
from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationError, model_validator

from shaper.awg.block import MAX_BYTES, WORD_BITS
from shaper.awg.files import read_file, sha256
from shaper.errors import FileError, InputError
from shaper.units import MHZ, MSPS

_MAX_PROFILE_BYTES = 1_000_000
Positive = Annotated[float, Field(gt=0)]
HIGH = "high"  # a load that draws nothing


class Section(BaseModel):
    """Strict: unknown keys, wrong types, nan and infinities are refused."""

    model_config = ConfigDict(extra="forbid", strict=True, allow_inf_nan=False, frozen=True)


class IdentitySection(Section):
    """What ``*IDN?`` must answer; an empty text matches anything. Maker and model are needed."""

    maker: str = Field(min_length=1)
    model: str = Field(min_length=1)
    serial: str = ""
    firmware: str = ""


class LinkSection(Section):
    """Deadlines."""

    timeout_s: Positive = Field(5.0, description="for connecting and for each answer")
    slowest_MB_per_s: Positive = Field(1.0, description="a transfer may take this long beyond it")

    def transfer_seconds(self, count: int) -> float:
        """The deadline of a transfer of ``count`` bytes, s."""
        return self.timeout_s + count / (1e6 * self.slowest_MB_per_s)


class MemorySection(Section):
    """Lengths that the instrument takes, in samples of one trace."""

    min_samples: int = Field(1, ge=1, le=1_000_000)
    granularity_samples: int = Field(1, ge=1, le=65536)
    max_samples: int = Field(ge=1, le=MAX_BYTES // 4)

    @property
    def max_bytes(self) -> int:
        """The longest block that any trace can be."""
        return 4 * self.max_samples


class DataSection(Section):
    """How a sample lies in its word, and the words in the block."""

    sample_rate_MSps: Positive
    bits: int = Field(ge=2, le=WORD_BITS, description="DAC resolution, sign included")
    layout: Literal["apart", "interleaved"] = "apart"
    byte_order: Literal["big", "little"] = "big"
    justify: Literal["right", "left"] = "right"
    end_at_zero: bool = Field(True, description="add zeros if the last sample is not zero")

    @property
    def sample_rate(self) -> float:
        """Samples per second."""
        return self.sample_rate_MSps * MSPS


class NamesSection(Section):
    """Rules of trace names: character data of IEEE 488.2, a letter first, at most 12 long."""

    max_length: int = Field(12, ge=1, le=64)
    suffix_i: str = Field("_I", pattern=r"^[A-Za-z0-9_]*$")
    suffix_q: str = Field("_Q", pattern=r"^[A-Za-z0-9_]*$")
    probe: str = Field(
        "SHAPERPROBE",
        pattern=r"^[A-Za-z][A-Za-z0-9_]*$",
        description="reserved: a short trace that proves the byte order and is removed again",
    )


class OutputSection(Section):
    """Which output plays I and which Q, and what they feed."""

    i: int = Field(ge=1, le=1024)
    q: int = Field(ge=1, le=1024)
    full_scale_V: Positive = Field(description="peak volts of the largest code, as stated")
    stated_for_ohm: Positive | Literal["high"] = Field(50.0, description="load of that statement")
    source_ohm: Positive = 50.0
    load_ohm: Positive | Literal["high"] = Field(description="what is really connected")
    rabi_at_full_scale_MHz: Positive | None = Field(
        None, description="measured; pulses computed for another full scale are refused"
    )

    @property
    def numbers(self) -> tuple[int, ...]:
        """The outputs, each once."""
        return (self.i,) if self.i == self.q else (self.i, self.q)

    @property
    def rabi_at_full_scale(self) -> float | None:
        """rad/s, or None if it was never measured."""
        return self.rabi_at_full_scale_MHz and self.rabi_at_full_scale_MHz * MHZ

    @property
    def open_circuit_V(self) -> float:
        """Peak volts of the source behind its own resistance."""
        if self.stated_for_ohm == HIGH:
            return self.full_scale_V
        return self.full_scale_V * (1 + self.source_ohm / self.stated_for_ohm)

    @property
    def peak_V(self) -> float:
        """Peak volts of the largest code at the real load; doubled when 50 ohm become none."""
        if self.load_ohm == HIGH:
            return self.open_circuit_V
        return self.open_circuit_V * self.load_ohm / (self.load_ohm + self.source_ohm)

    @property
    def ohm_for_power(self) -> float:
        """Resistance in P = V^2 / R at the real load.

        For a high load it is the one that gives the most a source can deliver to any load,
        V_open^2 / 4 R_source: an upper limit, whatever is connected by mistake.
        """
        return 4 * self.source_ohm if self.load_ohm == HIGH else self.load_ohm


class LimitSection(Section):
    """What must never be exceeded at the load; there are no defaults."""

    peak_V: Positive = Field(description="of each output, and of sqrt(I^2 + Q^2)")
    mean_power_mW: Positive = Field(description="of all outputs together")
    duty_cycle: float = Field(gt=0, le=1)

    @property
    def mean_power(self) -> float:
        """W."""
        return self.mean_power_mW / 1e3


class MarkerSection(Section):
    """A marker bit in the I words that opens the gate of an amplifier."""

    bit: int = Field(0, ge=0, le=WORD_BITS - 1)
    lead_samples: int = Field(0, ge=0, le=1_000_000, description="gate open before the pulse")
    hold_samples: int = Field(0, ge=0, le=1_000_000, description="gate open after it")


class CheckSection(Section):
    """A question whose answer must be right before anything is loaded or switched on."""

    ask: str = Field(min_length=1)
    expect: float | str
    tolerance: float = Field(0.0, ge=0, description="for numbers, absolute")


class CommandSection(Section):
    """Message templates; the defaults are IEEE 488.2 and SCPI-1999 (from memory of its volume 2).

    ``{output}``, ``{name}`` and ``{points}`` are filled in. An empty text means that the
    instrument has no such command; only those that can be done without may be empty.
    """

    clear: str = "*CLS"
    identify: str = "*IDN?"
    complete: str = "*OPC?"
    error: str = "SYSTem:ERRor?"
    output_off: str = "OUTPut{output}:STATe OFF"
    output_on: str = "OUTPut{output}:STATe ON"
    output_state: str = "OUTPut{output}:STATe?"
    format_binary: str = "FORMat:DATA INTeger,16"
    format_text: str = "FORMat:DATA ASCii"
    order_big: str = "FORMat:BORDer NORMal"
    order_little: str = "FORMat:BORDer SWAPped"
    catalog: str = "TRACe:CATalog?"
    free: str = "TRACe:FREE?"
    define: str = "TRACe:DEFine {name},{points}"
    delete: str = "TRACe:DELete:NAME {name}"
    data: str = "TRACe:DATA {name},"
    data_query: str = "TRACe:DATA? {name}"

    @model_validator(mode="after")
    def _templates(self):
        for key, text in self:
            if not text and key not in _OPTIONAL:
                raise ValueError(f"{key}: expected a command, got none")
            if any(not 0x20 <= ord(c) < 0x7F for c in text):
                raise ValueError(f"{key}: expected printable ASCII, got {text!r}")
            try:
                fields = [
                    field for _, field, _, _ in string.Formatter().parse(text) if field is not None
                ]
            except ValueError as error:
                raise ValueError(f"{key}: {error}, in {text!r}") from error
            needed = _PLACES.get(key, set())
            allowed = needed | ({"points"} if key == "define" else set())
            if text and not (needed <= set(fields) <= allowed):
                wanted = ", ".join(f"{{{p}}}" for p in sorted(allowed)) or "no {...}"
                raise ValueError(f"{key}: expected {wanted}, got {text!r}")
        return self


_OPTIONAL = {
    "format_binary",
    "format_text",
    "order_big",
    "order_little",
    "catalog",
    "free",
    "define",
}
_PLACES = {
    **dict.fromkeys(("output_off", "output_on", "output_state"), {"output"}),
    **dict.fromkeys(("define", "delete", "data", "data_query"), {"name"}),
}


class Profile(Section):
    """One instrument on one bench."""

    title: str = Field("", max_length=500)
    identity: IdentitySection
    link: LinkSection = Field(default_factory=lambda: LinkSection.model_validate({}))
    memory: MemorySection
    data: DataSection
    names: NamesSection = Field(default_factory=lambda: NamesSection.model_validate({}))
    outputs: OutputSection
    limits: LimitSection
    marker: MarkerSection | None = None
    commands: CommandSection = Field(default_factory=CommandSection)
    check: list[CheckSection] = Field(default_factory=list, max_length=100)
    cautions: list[str] = Field(default_factory=list, max_length=100)

    @model_validator(mode="after")
    def _together(self):
        free = WORD_BITS - self.data.bits if self.data.justify == "left" else 0
        if self.marker is not None and self.marker.bit >= free:
            raise ValueError(
                f"marker.bit: expected one of the {free} free low bits "
                f"(justify = {self.data.justify!r}, bits = {self.data.bits}), got {self.marker.bit}"
            )
        if self.data.layout == "apart":
            if self.names.suffix_i.upper() == self.names.suffix_q.upper():
                raise ValueError(
                    f"names.suffix_q: expected another than suffix_i, got {self.names.suffix_q!r}"
                )
            if self.outputs.i == self.outputs.q:
                raise ValueError(
                    "outputs.q: expected another output than i when I and Q lie apart, "
                    f"got {self.outputs.q}"
                )
        return self


def read_profile(path: str | Path) -> tuple[Profile, str]:
    """Read and check an instrument profile.

    Returns:
        The profile and the sha256 of the file.
    Raises:
        InputError: one line per fault, each with the key's path.
    """
    try:
        raw = read_file(Path(path), _MAX_PROFILE_BYTES)
    except FileError as error:
        raise InputError(str(error)) from error
    try:
        return parse_profile(raw.decode("utf-8"), str(path)), sha256(raw)
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: expected UTF-8 text: {error.reason}") from error


def parse_profile(text: str, name: str = "profile") -> Profile:
    """Check the text of a profile; ``name`` says where it came from, for the messages."""
    try:
        return Profile.model_validate(tomllib.loads(text))
    except (tomllib.TOMLDecodeError, RecursionError) as error:
        raise InputError(f"{name}: not valid TOML: {error}") from error
    except ValidationError as error:
        raise InputError(*(f"{name}: {_fault(fault)}" for fault in error.errors())) from error


_UNION_BRANCHES = {"float", "str", "constrained-float", "literal['high']"}  # no keys of a file


def _fault(fault: Any) -> str:
    """Place, what was expected, what came, the nearest known key."""
    loc = [part for part in fault["loc"] if part not in _UNION_BRANCHES]
    place = ".".join(str(part) for part in loc)
    came = repr(fault["input"])
    came = came if len(came) <= 60 else came[:57] + "..."
    if fault["type"] == "extra_forbidden":
        known = list(_section(loc[:-1]).model_fields)
        near = difflib.get_close_matches(str(loc[-1]), known, n=1, cutoff=0.5)
        hint = f"nearest known key: {near[0]}" if near else f"known: {', '.join(known)}"
        return f"{place}: unknown key, got {came}; {hint}"
    if fault["type"] == "missing":
        return f"{place}: expected this key, got none"
    if fault["type"] == "value_error":
        return f"{place}.{fault['ctx']['error']}" if place else str(fault["ctx"]["error"])
    return f"{place}: expected {fault['msg'].removeprefix('Input should be ')}, got {came}"


def _section(loc: list) -> type[BaseModel]:
    """The model in which a key stands."""
    model: type[BaseModel] = Profile
    for part in loc:
        if part in model.model_fields:
            inner = model.model_fields[part].annotation
            options = [inner, *getattr(inner, "__args__", ())]
            model = next(o for o in options if isinstance(o, type) and issubclass(o, BaseModel))
    return model
