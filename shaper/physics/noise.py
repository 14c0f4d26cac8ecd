"""Slow and colored noise: quasi-static averages and first-order filter functions, in NumPy."""

from __future__ import annotations

import csv
import os
from dataclasses import dataclass

import numpy as np

from shaper.errors import InputError
from shaper.physics.propagate import propagate
from shaper.rotation import bloch_matrix
from shaper.target import Target, infidelity

KINDS = ("detuning", "amplitude")
_PER_SQUARED_ANGLE = 1 / 6  # average gate infidelity of a small turn by angle: (2/3)(angle/2)^2
_POINTS_PER_DECADE = 400  # of the spectral integral; the trapezoid in log f is then at 1e-6
_SLICE_BLOCK = 64  # frequencies at a time


@dataclass(frozen=True)
class Spectrum:
    """One-sided power spectral density on a frequency axis, log-log in between.

    Attributes:
        frequency: [point] Hz, rising, positive.
        density: [point] (rad/s)^2/Hz for detuning, 1/Hz for relative amplitude.
    """

    frequency: np.ndarray
    density: np.ndarray

    def __post_init__(self):
        f, s = self.frequency, self.density
        if f.ndim != 1 or f.shape != s.shape or len(f) < 2:
            raise InputError(f"spectrum: expected two columns of at least 2 rows, got {f.shape}")
        if not (np.all(np.isfinite(f)) and f[0] > 0 and np.all(np.diff(f) > 0)):
            raise InputError("spectrum: expected frequencies that are positive and rise")
        if not (np.all(np.isfinite(s)) and np.all(s > 0)):
            raise InputError("spectrum: expected densities that are finite and positive")

    def at(self, frequency: np.ndarray) -> np.ndarray:
        """Density at ``frequency`` (Hz) inside the range; zero outside."""
        logs = np.interp(np.log(frequency), np.log(self.frequency), np.log(self.density))
        inside = (frequency >= self.frequency[0]) & (frequency <= self.frequency[-1])
        return np.where(inside, np.exp(logs), 0.0)


def power_law(
    density: float, at: float, exponent: float, lowest: float, highest: float
) -> Spectrum:
    """``S(f) = density (at/f)^exponent`` between ``lowest`` and ``highest`` (Hz)."""
    if not (density > 0 and at > 0 and 0 < lowest < highest):
        raise InputError(
            "spectrum: expected density > 0, at > 0 and 0 < lowest < highest, "
            f"got {density:g}, {at:g}, {lowest:g}, {highest:g}"
        )
    ends = np.array([lowest, highest])
    return Spectrum(ends, density * (at / ends) ** exponent)


def read_spectrum(path: str | os.PathLike, unit: float = 1.0) -> Spectrum:
    """A spectrum from a CSV file: a header line, then frequency in Hz and one-sided density.

    Args:
        unit: what one unit of the second column is in (rad/s)^2/Hz or 1/Hz.
    Raises:
        InputError: with the line at fault.
    """
    try:
        with open(path, newline="", encoding="utf-8") as file:
            rows = [row for row in csv.reader(file) if row and not row[0].startswith("#")]
    except (OSError, UnicodeDecodeError) as error:
        raise InputError(f"{path}: cannot read the spectrum: {error}") from error
    values = []
    for number, row in enumerate(rows[1:], start=2):
        try:
            frequency, density = (float(cell) for cell in row)
        except ValueError as error:
            raise InputError(f"{path}: row {number}: expected two numbers, got {row}") from error
        values.append((frequency, density))
    table = np.array(values).reshape(-1, 2)
    try:
        return Spectrum(table[:, 0], table[:, 1] * unit)
    except InputError as error:
        raise InputError(f"{path}: {error}") from error


def quasi_static_infidelity(
    drive: np.ndarray,
    durations: np.ndarray,
    target: Target,
    sigma: float,
    *,
    kind: str = "detuning",
    delta: float = 0.0,
    nodes: int = 80,
) -> float:
    """Mean infidelity over a Gaussian error that stands still during one pulse.

    Args:
        drive: [segment, 2] rad/s; durations: [segment] s.
        sigma: standard deviation of the detuning (rad/s) or of the relative amplitude.
        kind: "detuning" or "amplitude".
        delta: rad/s. Detuning about which it scatters.
        nodes: of the Gauss-Hermite rule.
    Source:
        Gauss-Hermite quadrature: Abramowitz and Stegun, Handbook of Mathematical Functions,
        25.4.46.
    """
    _known(kind)
    x, weight = np.polynomial.hermite_e.hermegauss(nodes)
    eps = sigma * x if kind == "amplitude" else np.zeros(nodes)
    offset = delta + (sigma * x if kind == "detuning" else np.zeros(nodes))
    q = propagate(drive, durations, eps, offset)
    return float(weight @ infidelity(q, target) / np.sum(weight))


def control_spectrum(
    drive: np.ndarray,
    durations: np.ndarray,
    omega: np.ndarray,
    *,
    kind: str = "detuning",
    eps: float = 0.0,
    delta: float = 0.0,
) -> np.ndarray:
    """Fourier integral of the noise axis in the frame that turns with the pulse, exact.

    ``y(w) = int_0^T R(t)^T v(t) e^(i w t) dt`` with ``v = z`` for detuning noise and
    ``v = (Wx, Wy, 0)`` for relative amplitude noise. Each segment is integrated in closed form.

    Args:
        drive: [segment, 2] rad/s; durations: [segment] s.
        omega: [frequency] rad/s.
    Returns:
        [frequency, 3] complex; s for detuning, unitless for amplitude.
    Source:
        T. J. Green, J. Sastrawan, H. Uys, M. J. Biercuk, New J. Phys. 15, 095004 (2013),
        section 3; the segment integrals are derived here.
    """
    _known(kind)
    drive, durations = np.asarray(drive, dtype=float), np.asarray(durations, dtype=float)
    omega = np.asarray(omega, dtype=float)
    total = np.zeros((omega.size, 3), dtype=complex)
    frame = np.eye(3)  # R^T before the segment: from the turning frame back to the start
    start = 0.0
    for (wx, wy), duration in zip(drive, durations, strict=True):
        rate = np.array([(1 + eps) * wx, (1 + eps) * wy, delta])
        speed = np.linalg.norm(rate)
        n = rate / speed if speed > 0 else np.array([0.0, 0.0, 1.0])
        v = np.array([0.0, 0.0, 1.0]) if kind == "detuning" else np.array([wx, wy, 0.0])
        # R_segment(t)^T v = along + cos(speed t) across - sin(speed t) n x v
        along = (n @ v) * n
        across, normal = v - along, np.cross(n, v)
        still, plus, minus = (
            _segment_integral(omega + shift, duration) for shift in (0.0, speed, -speed)
        )
        inside = (
            still[:, None] * along
            + ((plus + minus) / 2)[:, None] * across
            - ((plus - minus) / 2j)[:, None] * normal
        )
        total += np.exp(1j * omega * start)[:, None] * (inside @ frame.T)
        angle = speed * duration / 2
        turn = bloch_matrix(np.concatenate([[np.cos(angle)], np.sin(angle) * n]))
        frame = frame @ turn.T
        start += duration
    return total


def filter_function(
    drive: np.ndarray, durations: np.ndarray, omega: np.ndarray, **options
) -> np.ndarray:
    """First-order filter function ``F(w) = |y(w)|^2``; arguments as ``control_spectrum``.

    Returns:
        [frequency]; s^2 for detuning, unitless for amplitude. ``infidelity = (1/6) int S(f)
        F(2 pi f) df`` over positive f with the one-sided density S.
    """
    omega = np.asarray(omega, dtype=float)
    parts = [
        np.sum(np.abs(control_spectrum(drive, durations, block, **options)) ** 2, axis=-1)
        for block in np.array_split(omega, max(1, omega.size // _SLICE_BLOCK))
    ]
    return np.concatenate(parts)


def colored_infidelity(
    drive: np.ndarray, durations: np.ndarray, spectrum: Spectrum, **options
) -> float:
    """Average gate infidelity from a noise spectrum, to first order in its power.

    Valid while the result is small; noise slower than the spectrum's lowest frequency belongs
    to the quasi-static average.
    """
    decades = np.log10(spectrum.frequency[-1] / spectrum.frequency[0])
    inner = np.geomspace(
        spectrum.frequency[0], spectrum.frequency[-1], int(_POINTS_PER_DECADE * decades) + 2
    )
    # the filter function swings once per 1/T: resolve that too, where it has weight
    swing = np.arange(1, 400) / (8 * np.sum(durations))
    swing = swing[(swing > inner[0]) & (swing < inner[-1])]
    f = np.unique(np.concatenate([inner, spectrum.frequency, swing]))
    weight = filter_function(drive, durations, 2 * np.pi * f, **options)
    integral = np.trapezoid(spectrum.at(f) * weight * f, np.log(f))
    return float(_PER_SQUARED_ANGLE * integral)


def _segment_integral(omega: np.ndarray, duration: float) -> np.ndarray:
    """``int_0^duration e^(i omega t) dt``, finite at omega = 0."""
    half = omega * duration / 2
    return duration * np.exp(1j * half) * np.sinc(half / np.pi)


def _known(kind: str) -> None:
    if kind not in KINDS:
        raise ValueError(f"kind: expected one of {', '.join(KINDS)}, got {kind!r}")
