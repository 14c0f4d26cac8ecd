"""Measured lines: a step response as CSV, a transmission as a Touchstone file."""

from __future__ import annotations

import csv
import os
from pathlib import Path

import numpy as np

from shaper.drive.line import Line, tabulated
from shaper.errors import InputError

_MOST_ROWS = 1_000_000
_EVEN = 1e-3  # relative; how far a time step may be off its neighbors
_AT_REST = 0.02  # how far the last tenth of a step response may still move
_NOISE = 4.0  # standard deviations of the last tenth; closer to rest than that is at rest
_TAPER = 0.25  # of the covered half band, over which the response falls to zero beyond it
_QUIET = 1e-4  # share of the step that counts as not there, on both sides of a Touchstone answer
_POINTS = 4096  # of the Fourier transform; its period is many times any line's memory


def read_step_response(path: str | os.PathLike, sample_rate: float) -> Line:
    """A line from a measured step response.

    The file: a header ``time_ns,response``, then rows evenly spaced in time; the edge is at time
    zero, and what stands before it is the base line. Scaled to 1 at rest; the tail ends where it
    sinks into the noise of the last tenth.

    Args:
        sample_rate: of the DAC, samples/s; the time base has to resolve its sample.
    Raises:
        InputError: one line: unreadable, wrong columns, uneven time base, too coarse for the
            samples, too short to come to rest.
    """
    rows = _read_rows(path, ("time_ns", "response"))
    time, value = rows[:, 0] * 1e-9, rows[:, 1]
    spacing = np.diff(time)
    mean = float(np.mean(spacing))
    if mean <= 0 or np.max(np.abs(spacing - mean)) > _EVEN * mean:
        raise InputError(
            f"{path}: time_ns: expected an even, rising time base, got steps from "
            f"{np.min(spacing) * 1e9:.6g} to {np.max(spacing) * 1e9:.6g} ns"
        )
    sample = 1 / sample_rate
    if mean > sample * (1 + _EVEN):
        raise InputError(
            f"{path}: time_ns: expected steps of at most one DAC sample = {sample * 1e9:.6g} ns, "
            f"got {mean * 1e9:.6g} ns"
        )
    if time[-1] < sample or time[0] > mean:
        raise InputError(
            f"{path}: time_ns: expected a range from the edge at 0 over at least one DAC sample = "
            f"{sample * 1e9:.6g} ns, got {time[0] * 1e9:.6g} to {time[-1] * 1e9:.6g} ns"
        )
    before = time < -mean / 2
    value = value - (np.mean(value[before]) if np.any(before) else 0.0)
    last = value[-max(2, len(value) // 10) :]
    final = float(np.mean(last))
    if not final > 0 or np.ptp(last) > _AT_REST * final:
        raise InputError(
            f"{path}: response: expected it at rest within {_AT_REST:.0%} over its last tenth, "
            f"got {np.min(last):.6g} to {np.max(last):.6g}"
        )
    step = value[~before] / final
    moving = np.flatnonzero(np.abs(step - 1) > _NOISE * np.std(last) / final)
    step = np.append(step[: moving[-1] + 1], 1.0)
    start = float(time[~before][0])
    return tabulated(f"step response {Path(path).name}", start, mean, step)


def read_touchstone(
    path: str | os.PathLike,
    carrier: float,
    sample_rate: float,
    ports: tuple[int, int] = (2, 1),
) -> Line:
    """A line from the transmission of a Touchstone file around the carrier.

    Gain, phase and group delay at the carrier are taken out. Beyond the band that the file covers
    on both sides the response falls smoothly to zero: nothing is known of it.

    Args:
        carrier: Hz. Must lie inside the file, with half the sample rate on both sides.
        sample_rate: of the DAC, samples/s.
        ports: (to, from), counted from 1.
    Raises:
        InputError: one line; also if scikit-rf (extra ``touchstone``) is missing.
    Source:
        Touchstone File Format Specification, EIA/IBIS Open Forum.
    """
    frequency, value = _read_network(path, ports)
    half = sample_rate / 2
    if not frequency[0] <= carrier - half <= carrier + half <= frequency[-1]:
        raise InputError(
            f"{path}: expected data over the carrier and half the sample rate on both sides, "
            f"{(carrier - half) / 1e9:.6g} to {(carrier + half) / 1e9:.6g} GHz, "
            f"got {frequency[0] / 1e9:.6g} to {frequency[-1] / 1e9:.6g} GHz"
        )
    offset, relative = around_carrier(frequency, value, carrier)
    edge = min(-offset[0], offset[-1])
    period = 1 / np.max(np.diff(frequency))  # longer answers than this alias in the file itself
    spacing = period / _POINTS
    f = np.fft.fftfreq(_POINTS, spacing)
    inside = np.interp(f, offset, relative)
    beyond = np.clip((np.abs(f) - edge) / (_TAPER * edge), 0, 1)
    spectrum = inside * np.cos(np.pi / 2 * beyond) ** 2
    impulse = np.fft.fftshift(np.fft.ifft(spectrum))
    # half a cell earlier: the running sum reaches each impulse in the middle of its rise
    step = np.concatenate([[0], np.cumsum(impulse)])
    step = step / step[-1]
    begin, end = _quiet_ends(step)
    step[end - 1] = 1.0
    name = f"Touchstone {Path(path).name} at {carrier / 1e9:g} GHz"
    start = (begin - _POINTS // 2 - 0.5) * spacing
    return tabulated(name, start, spacing, step[begin:end])


def around_carrier(
    frequency: np.ndarray, value: np.ndarray, carrier: float
) -> tuple[np.ndarray, np.ndarray]:
    """Transmission relative to the carrier, its gain, phase and group delay there removed.

    Args:
        frequency: [point] Hz; value: [point] complex.
    Returns:
        Offset from the carrier (Hz) and relative transmission, both [point].
    """
    offset = frequency - carrier
    size, phase = np.abs(value), np.unwrap(np.angle(value))
    near = np.argsort(np.abs(offset))[: max(5, len(offset) // 50)]
    slope, at_zero = np.polyfit(offset[near], phase[near], 1)
    gain = np.interp(0.0, offset, size)
    if not gain > 0:
        raise InputError(f"transmission: expected it above zero at the carrier, got {gain:g}")
    return offset, size / gain * np.exp(1j * (phase - at_zero - slope * offset))


def _quiet_ends(step: np.ndarray) -> tuple[int, int]:
    """Where the answer begins and where it has come to rest."""
    begin = int(np.argmax(np.abs(step) > _QUIET)) - 1
    end = int(np.flatnonzero(np.abs(step - step[-1]) > _QUIET)[-1]) + 2
    return max(0, begin), min(len(step), end)


def _read_network(path, ports) -> tuple[np.ndarray, np.ndarray]:
    try:
        import skrf
    except ImportError as error:
        raise InputError(
            f"{path}: reading Touchstone files needs scikit-rf: pip install 'shaper[touchstone]'"
        ) from error
    try:
        network = skrf.Network(os.fspath(path))
    except Exception as error:  # the reader raises what it likes on a broken file
        reason = str(error).splitlines()[0] if str(error) else type(error).__name__
        raise InputError(f"{path}: not a readable Touchstone file: {reason}") from error
    to, begin = ports
    if not (1 <= to <= network.nports and 1 <= begin <= network.nports):
        raise InputError(f"{path}: ports: expected 1 to {network.nports}, got {to} and {begin}")
    frequency, value = np.asarray(network.f), np.asarray(network.s[:, to - 1, begin - 1])
    if len(frequency) < 5 or not np.all(np.isfinite(value)):
        raise InputError(f"{path}: expected at least 5 finite points, got {len(frequency)}")
    return frequency, value


def _read_rows(path, columns: tuple[str, str]) -> np.ndarray:
    """[row, 2] of a CSV file whose header names the columns."""
    try:
        with open(path, newline="", encoding="utf-8") as file:
            rows = []
            for row in csv.reader(file):
                if row and not row[0].startswith("#"):
                    rows.append([cell.strip() for cell in row])
                if len(rows) > _MOST_ROWS:
                    raise InputError(f"{path}: expected at most {_MOST_ROWS} rows")
    except (OSError, UnicodeDecodeError, csv.Error) as error:
        raise InputError(f"{path}: cannot read the file: {error}") from error
    if not rows or tuple(rows[0]) != columns:
        came = ",".join(rows[0]) if rows else "an empty file"
        raise InputError(f"{path}: expected the header {','.join(columns)}, got {came[:60]}")
    try:
        table = np.array([[float(cell) for cell in row] for row in rows[1:]], dtype=float)
    except ValueError as error:
        raise InputError(f"{path}: expected numbers below the header: {error}") from error
    if table.ndim != 2 or table.shape[1:] != (2,) or len(table) < 3:
        raise InputError(f"{path}: expected at least 3 rows of 2 numbers, got {table.shape}")
    if not np.all(np.isfinite(table)):
        raise InputError(f"{path}: expected finite numbers, got nan or infinity")
    return table
