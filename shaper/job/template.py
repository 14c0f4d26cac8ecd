"""A commented job file, written from the schema itself so that no key and no comment can drift."""

from __future__ import annotations

import types
from collections.abc import Mapping
from typing import Any, Literal, Union, get_args, get_origin

from pydantic import BaseModel
from pydantic.fields import FieldInfo
from pydantic_core import PydanticUndefined

from shaper.job.schema import JobFile

_WIDTH = 34  # columns before a comment, where the line is shorter
# What a key may look like that has no default; shown commented out.
_EXAMPLES: dict[str, Any] = {
    "t1_us": 60.0,
    "t2_us": 45.0,
    "anharmonicity_MHz": -210.0,
    "angle_deg": 90.0,
    "axis": [1.0, 2.0, 3.0],
    "euler_deg": [90.0, 90.0, -90.0],
    "unitary": [[[0.0, 0.0], [1.0, 0.0]], [[1.0, 0.0], [0.0, 0.0]]],
    "from_state": [0.0, 0.0, 1.0],
    "to_state": [1.0, 0.0, 0.0],
    "gate": "z",
    "stop_infidelity": 1e-6,
    "bandwidth_MHz": 120.0,
    "max_bandwidth_MHz": 100.0,
    "carrier_GHz": 5.0,
    "file": "line.csv",
    "detuning_psd_file": "drift.csv",
    "name": "neighbor",
    "offset_MHz": 12.0,
    "target": {"gate": "identity", "equivalence": "up_to_final_z"},
}


def job_text(values: Mapping[str, Any], schema_path: str | None = None) -> str:
    """A job file with every key that there is, each with its comment.

    Keys given are set; those with a default are set to it; the others are there commented out.

    Args:
        values: ``{"title": ..., "drive": {...}, ...}`` in the units of the job file.
        schema_path: for the editor's directive in the first line, or None.
    Returns:
        TOML text. Whether it is a valid job, ``parse_job`` says.
    """
    lines = [f"#:schema {schema_path}"] if schema_path else []
    tables = []
    for name, field in JobFile.model_fields.items():
        section, many = _section(field)
        if section is None:
            lines.append(_key_line(name, field, values))
        else:
            tables += _section_lines(name, section, many, values.get(name))
    return "\n".join(lines + tables) + "\n"


def _section_lines(
    name: str, section: type[BaseModel], many: bool, given: Mapping[str, Any] | None
) -> list[str]:
    heading = f"[[{name}]]" if many else f"[{name}]"
    required = any(field.is_required() for field in section.model_fields.values())
    idle = given is None and (many or required)  # it would not be valid with nothing given
    summary = (section.__doc__ or "").strip().splitlines()[0] if section.__doc__ else ""
    lines = ["", _commented(("# " if idle else "") + heading, summary)]
    for key, field in section.model_fields.items():
        line = _key_line(key, field, given or {})
        lines.append(line if not idle or line.startswith("#") else "# " + line)
    return lines


def _section(field: FieldInfo) -> tuple[type[BaseModel] | None, bool]:
    """The model of a section and whether there may be several of it; None for a plain key."""
    kinds = [field.annotation]
    if get_origin(field.annotation) in (Union, types.UnionType):
        kinds = list(get_args(field.annotation))
    for kind in kinds:
        many = get_origin(kind) is list
        inner = get_args(kind)[0] if many else kind
        if isinstance(inner, type) and issubclass(inner, BaseModel):
            return inner, many
    return None, False


def _key_line(key: str, field: FieldInfo, given: Mapping[str, Any]) -> str:
    comment = field.description or ""
    words = [word for word in _choices(field.annotation) if word not in comment]
    if words:
        comment += f" ({', '.join(_choices(field.annotation))})"
    if given.get(key) is not None:
        return _commented(f"{key} = {toml_value(given[key])}", comment)
    default = field.get_default(call_default_factory=True, validated_data={})
    if default is not None and default is not PydanticUndefined:
        return _commented(f"{key} = {toml_value(default)}", comment)
    example = field.examples[0] if field.examples else _EXAMPLES.get(key)
    shown = toml_value(example) if example is not None else "..."
    return _commented(f"# {key} = {shown}", comment)


def _choices(annotation: Any) -> list[str]:
    """The words that a key may take, where it takes words of a list."""
    if get_origin(annotation) is Literal:
        return [str(word) for word in get_args(annotation)]
    return [word for part in get_args(annotation) for word in _choices(part)]


def _commented(text: str, comment: str) -> str:
    return f"{text:<{_WIDTH}}  # {comment}" if comment else text


def toml_value(value: Any) -> str:
    """A string, number, truth value, list or table of such as TOML writes it.

    >>> toml_value(["z", 90.0, True])
    '["z", 90.0, true]'

    Raises:
        TypeError: for anything else.
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        escaped = value.replace("\\", "\\\\").replace('"', '\\"')
        return (
            '"'
            + "".join(c if c >= " " and c != "\x7f" else f"\\u{ord(c):04x}" for c in escaped)
            + '"'
        )
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, (list, tuple)):
        return "[" + ", ".join(toml_value(item) for item in value) + "]"
    if isinstance(value, Mapping):
        return "{ " + ", ".join(f"{k} = {toml_value(v)}" for k, v in value.items()) + " }"
    raise TypeError(
        f"expected a string, number, truth value, list or table, got {type(value).__name__}"
    )
