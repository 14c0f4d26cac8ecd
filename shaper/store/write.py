"""From the record to the bytes of a waveform file."""

from __future__ import annotations

import io
import os
from collections.abc import Mapping

import h5py
import numpy as np

from shaper.errors import FileError
from shaper.pulse import Pulse, Score, Table, Waveform
from shaper.store import layout
from shaper.store.atomic import replace_file
from shaper.store.read import decode_waveform

_COMPRESS_ABOVE = 64 * 1024  # bytes; below, chunks cost more than they save


def save_waveform(path: str | os.PathLike, waveform: Waveform) -> None:
    """Write a waveform file, format version 1, whole or not at all.

    The bytes are made and read back in memory before anything touches the disk: what
    ``load_waveform`` would refuse is not written. The same record gives the same bytes.

    Raises:
        FileError: if the record is not one that a file may hold, or the disk refuses. A file that
            was there before is then untouched.
    """
    data = _encode(path, waveform)
    decode_waveform(data, f"{path}: not written")
    replace_file(path, data)


def _encode(path: str | os.PathLike, waveform: Waveform) -> bytes:
    buffer = io.BytesIO()
    with h5py.File(buffer, "w") as file:
        try:
            _write_root(file, waveform)
        except (TypeError, ValueError) as error:
            reason = " ".join(str(error).split())
            raise FileError(f"{path}: not written: {reason}") from error
    return buffer.getvalue()


def _write_root(file: h5py.File, waveform: Waveform) -> None:
    file.attrs["format"] = layout.FORMAT
    file.attrs["format_version"] = layout.VERSION
    file.attrs["title"] = waveform.title
    file.attrs["job"] = waveform.job_text
    file.attrs["created"] = waveform.created
    file.attrs["software"] = waveform.software
    file.attrs["seed"] = int(waveform.seed)
    file.attrs["status"] = waveform.status
    if waveform.notes:
        file.attrs["notes"] = waveform.notes
    _write_target(file.create_group("target"), waveform)
    if set(waveform.pulses) != set(waveform.scores):
        raise ValueError(
            f"scores: expected one for each of the pulses {sorted(waveform.pulses)}, "
            f"got {sorted(waveform.scores)}"
        )
    pulses = file.create_group("pulses", track_order=True)  # read in the order written
    for name, pulse in waveform.pulses.items():
        group = pulses.create_group(_checked_name("pulses", name))
        _write_pulse(group, pulse, waveform.scores[name])
    for place in layout.TABLE_GROUPS:
        tables = getattr(waveform, place)
        if tables:
            _write_tables(file.create_group(place, track_order=True), tables)
    for name, value in waveform.history_attrs.items():
        group = file.require_group("history")
        group.attrs[_checked_name("history", name)] = _checked_attribute(name, value)


def _write_target(group: h5py.Group, waveform: Waveform) -> None:
    component = _dataset(group, "component", np.arange(4), "1", "quaternion component: w, x, y, z")
    component.make_scale("component")
    quaternion = np.asarray(waveform.target, dtype=np.float64)
    _attach(
        _dataset(group, "quaternion", quaternion, "1", "target rotation, quaternion w, x, y, z"),
        component,
    )
    rows = np.asarray(waveform.error_rows, dtype=np.float64)
    row = _dataset(group, "row", np.arange(len(rows)), "1", "number of the error row")
    row.make_scale("row")
    error_rows = _dataset(
        group, "error_rows", rows, "1", "rows E; infidelity of q is scale * |E q|^2"
    )
    _attach(error_rows, row, component)
    error_rows.attrs["scale"] = float(waveform.error_scale)


def _write_pulse(group: h5py.Group, pulse: Pulse, score: Score) -> None:
    group.attrs["origin"] = pulse.origin
    group.attrs["source"] = pulse.source
    group.attrs["duration_s"] = float(pulse.duration)
    group.attrs["sample_rate_Hz"] = float(pulse.sample_rate)
    group.attrs["dac_bits"] = int(pulse.bits)
    group.attrs["full_scale_rad_per_s"] = float(pulse.full_scale)
    for attribute, field in layout.SCORES.items():
        value = getattr(score, field)
        missing = value is None or (attribute in layout.OPTIONAL_SCORES and np.isnan(value))
        if not missing:
            group.attrs[attribute] = float(value)
    samples = np.asarray(pulse.samples, dtype=np.int64)
    start = (np.cumsum(samples) - samples) / pulse.sample_rate
    drive = np.asarray(pulse.drive, dtype=np.float64)
    codes = np.asarray(pulse.codes)
    if codes.dtype != np.int16:
        raise ValueError(f"codes: expected int16, got {codes.dtype}")
    clock = np.arange(len(codes)) / pulse.sample_rate

    segments = _dataset(group, "segment_start_s", start, "s", "start of the segment")
    segments.make_scale("segment_start_s")
    for name, values, units, long_name in (
        ("segment_s", samples / pulse.sample_rate, "s", "length of the segment"),
        ("drive_x", drive[:, 0], "rad/s", "Rabi rate about x, constant over the segment"),
        ("drive_y", drive[:, 1], "rad/s", "Rabi rate about y, constant over the segment"),
    ):
        _attach(_dataset(group, name, values, units, long_name), segments)
    sample = _dataset(group, "sample_s", clock, "s", "start of the DAC sample")
    sample.make_scale("sample_s")
    _attach(_dataset(group, "dac_i", codes[:, 0], "1", "DAC code of the x quadrature"), sample)
    _attach(_dataset(group, "dac_q", codes[:, 1], "1", "DAC code of the y quadrature"), sample)


def _write_tables(group: h5py.Group, tables: Mapping[str, Table]) -> None:
    """Tables and, beside them, one scale per axis.

    A table called like its only axis holds the coordinates of that axis; an axis without such a
    table gets its indices. Axes of one name have one length within the group.
    """
    place = group.name.strip("/")
    lengths: dict[str, int] = {}
    for name, table in tables.items():
        _checked_name(place, name)
        shape = np.shape(table.values)
        if len(shape) != len(table.axes) or len(set(table.axes)) != len(table.axes):
            raise ValueError(
                f"{place}/{name}: expected {len(shape)} different axis names for an array of "
                f"shape {shape}, got {table.axes}"
            )
        for axis, length in zip(table.axes, shape, strict=True):
            known = lengths.setdefault(_checked_name(place, axis), length)
            if known != length:
                raise ValueError(
                    f"{place}/{name}: axis {axis} is {length} long, in another table {known}; "
                    "give one of them another name"
                )
    items = {name: _table_dataset(group, name, table) for name, table in tables.items()}
    for axis, length in lengths.items():
        if axis not in items:
            items[axis] = _dataset(group, axis, np.arange(length), "1", f"number of the {axis}")
            items[axis].attrs["index"] = 1  # made for the axis, not a table
        elif tables[axis].axes != (axis,):
            raise ValueError(f"{place}/{axis}: also an axis; expected axes ({axis!r},)")
        items[axis].make_scale(axis)
    for name, table in tables.items():
        if name not in lengths:
            _attach(items[name], *(items[axis] for axis in table.axes))


def _table_dataset(group: h5py.Group, name: str, table: Table) -> h5py.Dataset:
    values = np.asarray(table.values)
    if values.dtype.kind not in "iuf":
        raise ValueError(f"{group.name}/{name}: expected real numbers, got {values.dtype}")
    values = values.astype(np.float64 if values.dtype.kind == "f" else np.int64)
    return _dataset(group, name, values, table.units, table.long_name)


def _dataset(
    group: h5py.Group, name: str, values: np.ndarray, units: str, long_name: str
) -> h5py.Dataset:
    values = np.asarray(values)
    packed = {}
    if values.nbytes > _COMPRESS_ABOVE:
        packed = {"compression": "gzip", "compression_opts": 1, "fletcher32": True}
    dataset = group.create_dataset(name, data=values, **packed)
    dataset.attrs["units"] = units
    dataset.attrs["long_name"] = long_name
    dataset.attrs["sha256"] = layout.digest(values)
    return dataset


def _attach(dataset: h5py.Dataset, *scales: h5py.Dataset) -> None:
    for axis, scale in enumerate(scales):
        dataset.dims[axis].attach_scale(scale)


def _checked_name(place: str, name: str) -> str:
    if not layout.is_name(name):
        raise ValueError(f"{place}: expected a name of letters, digits and _ + -, got {name!r}")
    return name


def _checked_attribute(name: str, value: str | int | float) -> str | int | float:
    if not isinstance(value, str | int | float) or isinstance(value, bool):
        raise ValueError(f"history: attribute {name}: expected text or a number, got {value!r}")
    return value
