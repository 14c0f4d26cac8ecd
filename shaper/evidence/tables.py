"""The tables that figures are drawn from and that ``--json`` prints: plain dicts of arrays.

Unit in each key, as in every file for people. What has no value (the phase of silence) is nan
here and null in JSON.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence

import numpy as np

from shaper.physics.propagate import propagate, segment_quaternions
from shaper.pulse import Pulse
from shaper.rotation import bloch_matrix, product
from shaper.target import Target, infidelity
from shaper.units import DEG, MHZ, NS

_FOURIER_TERMS = 2**20  # terms of the Fourier integral at a time: some ten megabytes
_TURN_PER_POINT = math.radians(3)  # largest turn between two points of a drawn path


Segments = tuple[np.ndarray, np.ndarray]  # drive [segment, 2] rad/s and durations [segment] s


# drive, durations, eps [grid], delta [grid] rad/s -> infidelity [grid]
Model = Callable[[np.ndarray, np.ndarray, np.ndarray, np.ndarray], np.ndarray]


def _model(target: Target, model: Model | None) -> Model:
    """The model asked for, else two levels without decay."""
    if model is not None:
        return model
    return lambda drive, durations, eps, delta: infidelity(
        propagate(drive, durations, eps, delta), target
    )


def _segments(pulse: Pulse | Segments) -> Segments:
    """What acts on the qubit: of a pulse what its codes play, else as given."""
    return pulse.played if isinstance(pulse, Pulse) else pulse


def waveform_table(pulse: Pulse) -> dict:
    """What the DAC holds, in runs of equal codes.

    Returns:
        ``edge_ns`` [run + 1]; ``drive_x_MHz``, ``drive_y_MHz``, ``amplitude_MHz``, ``phase_deg``
        [run], the phase in (-180, 180] and nan where the drive is silent; ``full_scale_MHz``.
    """
    drive, durations = pulse.played
    x, y = (drive / MHZ).T
    amplitude = np.hypot(x, y)
    phase = np.where(amplitude > 0, np.arctan2(y, x) / DEG, np.nan)
    return {
        "edge_ns": np.concatenate([[0.0], np.cumsum(durations)]) / NS,
        "drive_x_MHz": x,
        "drive_y_MHz": y,
        "amplitude_MHz": amplitude,
        "phase_deg": phase,
        "full_scale_MHz": pulse.full_scale / MHZ,
    }


def cut_table(
    pulses: Mapping[str, Pulse | Segments],
    target: Target,
    amplitude_error: Sequence[float],
    detuning: Sequence[float],
    offset: float = 0.0,
    model: Model | None = None,
) -> dict:
    """Infidelity of what the codes play along each error, the other one being zero.

    Args:
        pulses: by name; behind a line as the segments that arrive at the qubit.
        target: what they should do.
        amplitude_error: [k] unitless, relative.
        detuning: [m] rad/s, counted from ``offset``.
        offset: rad/s, the job's own detuning.
        model: gives the infidelity where two levels are not enough.
    Returns:
        ``amplitude_error`` [k], ``detuning_MHz`` [m], and by pulse
        ``against_amplitude`` [k], ``against_detuning`` [m].
    """
    eps, delta = np.asarray(amplitude_error, float), np.asarray(detuning, float)
    found = _model(target, model)
    table = {"amplitude_error": eps, "detuning_MHz": delta / MHZ, "pulses": {}}
    for name, pulse in pulses.items():
        drive, durations = _segments(pulse)
        table["pulses"][name] = {
            "against_amplitude": found(drive, durations, eps, np.full(len(eps), offset)),
            "against_detuning": found(drive, durations, np.zeros(len(delta)), offset + delta),
        }
    return table


def map_table(
    pulses: Mapping[str, Pulse | Segments],
    target: Target,
    amplitude_error: Sequence[float],
    detuning: Sequence[float],
    offset: float = 0.0,
    model: Model | None = None,
) -> dict:
    """Infidelity of what the codes play over the plane of both errors; arguments as in a cut.

    Returns:
        ``amplitude_error`` [k], ``detuning_MHz`` [m], ``infidelity`` by pulse [k, m].
    """
    eps, delta = np.asarray(amplitude_error, float), np.asarray(detuning, float)
    e, d = np.meshgrid(eps, delta, indexing="ij")
    found = _model(target, model)
    table = {"amplitude_error": eps, "detuning_MHz": delta / MHZ, "infidelity": {}}
    for name, pulse in pulses.items():
        values = found(*_segments(pulse), e.ravel(), offset + d.ravel())
        table["infidelity"][name] = values.reshape(e.shape)
    return table


def path_table(
    pulses: Mapping[str, Pulse | Segments],
    starts: Mapping[str, Sequence[float]],
    amplitude_error: float = 0.0,
    detuning: float = 0.0,
) -> dict:
    """The way of Bloch vectors while a pulse plays.

    Args:
        pulses: by name.
        starts: label to Bloch vector at time zero.
        amplitude_error: unitless, relative.
        detuning: rad/s.
    Returns:
        By pulse and start label, ``bloch`` [point, 3] and ``time_ns`` [point], no step turning
        by more than three degrees.
    """
    table: dict = {}
    for name, pulse in pulses.items():
        drive, durations = _segments(pulse)
        rate = np.hypot(np.hypot(*drive.T) * (1 + amplitude_error), detuning)
        cut = np.maximum(1, np.ceil(rate * durations / _TURN_PER_POINT)).astype(int)
        fine_drive, fine = np.repeat(drive, cut, axis=0), np.repeat(durations / cut, cut)
        errors = np.array([amplitude_error]), np.array([detuning])
        steps = segment_quaternions(fine_drive, fine, *errors)[:, 0]
        matrices = bloch_matrix(_running_products(steps))
        time_ns = np.concatenate([[0.0], np.cumsum(fine)]) / NS
        table[name] = {
            label: {"bloch": matrices @ np.asarray(start, float), "time_ns": time_ns}
            for label, start in starts.items()
        }
    return table


def _running_products(steps: np.ndarray) -> np.ndarray:
    """[step + 1, 4]: the propagator up to each point, the identity first.

    Doubling: after k rounds every entry holds the product of the last 2^k steps before it.
    """
    total = np.concatenate([[[1.0, 0.0, 0.0, 0.0]], steps])
    reach = 1
    while reach < len(total):
        total[reach:] = product(total[reach:], total[:-reach])
        reach *= 2
    return total


def spectrum_table(pulses: Mapping[str, Pulse], frequency: Sequence[float]) -> dict:
    """Energy density of the steps that the DAC holds, against frequency from the carrier.

    The Fourier integral of every step in closed form; relative to the largest value shown.

    Args:
        frequency: [k] rad/s.
    Returns:
        ``frequency_MHz`` [k] and by pulse ``density_dB`` [k].
    """
    omega = np.asarray(frequency, float)
    density = {}
    for name, pulse in pulses.items():
        drive, durations = pulse.played
        middle = np.cumsum(durations) - durations / 2
        envelope = drive[:, 0] + 1j * drive[:, 1]
        amplitude = np.zeros(len(omega), complex)
        at_once = max(1, _FOURIER_TERMS // len(omega))  # runs
        for first in range(0, len(durations), at_once):
            part = slice(first, first + at_once)
            held = durations[part] * np.sinc(np.outer(omega, durations[part]) / (2 * np.pi))
            turn = np.exp(-1j * np.outer(omega, middle[part]))
            amplitude += (held * turn) @ envelope[part]
        density[name] = np.abs(amplitude) ** 2
    largest = max((float(np.max(d)) for d in density.values()), default=0.0) or 1.0
    floor = 1e-12  # of the largest: 120 dB down, below what any line passes on
    return {
        "frequency_MHz": omega / MHZ,
        "pulses": {
            name: {"density_dB": 10 * np.log10(np.maximum(d / largest, floor))}
            for name, d in density.items()
        },
    }


def plain(table):
    """The table as JSON takes it: arrays to lists, nan to None.

    >>> plain({"phase_deg": np.array([90.0, np.nan]), "samples": np.int64(4)})
    {'phase_deg': [90.0, None], 'samples': 4}
    """
    if isinstance(table, Mapping):
        return {key: plain(value) for key, value in table.items()}
    if isinstance(table, np.ndarray):
        return plain(table.tolist())
    if isinstance(table, (list, tuple)):
        return [plain(value) for value in table]
    if isinstance(table, np.generic):
        return plain(table.item())
    if isinstance(table, float) and not math.isfinite(table):
        return None
    return table
