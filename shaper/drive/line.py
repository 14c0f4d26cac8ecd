"""The drive line: what cable, filter and amplifier make of the DAC's staircase.

A line is linear and does not change in time, so its step response says all: a staircase ``u`` with
edges at ``t_k`` arrives as ``sum_k (u_k - u_(k-1)) step(t - t_k)``. The staircase itself is the
zero-order hold of the DAC; its sinc needs no further model. Responses are complex where upper and
lower sideband differ: the real part keeps a quadrature, the imaginary part turns one into the
other. Gain and delay at the carrier are taken out: the Rabi rate and the start of the clock hold
them.

The propagators take the mean over cells finer than a slice, from the exact integral of the step
response.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.special import erf

from shaper.errors import InputError
from shaper.physics.propagate import propagate
from shaper.rotation import conjugate, product

SETTLED = 1e-6  # share of a step still missing where the tail is cut
HALF_POWER = np.log(2) / 2  # |H|^2 = 1/2 at the bandwidth of a Gaussian line
CHANGE_WHEN_DOUBLED = 1e-9  # infidelity; what a finer grid may still change
FINEST = 256  # cells per slice at most
_BLOCK = 32  # slices whose slopes are gathered by one matrix product
_GAUSSIAN_REACH = 5.0  # standard deviations; the error function misses 3e-7 beyond


@dataclass(frozen=True)
class Line:
    """A drive line.

    Attributes:
        name: for people.
        step: s -> unitless complex. Step response at times after the edge; 1 at rest.
        ramp: s -> s. Its integral from before the edge.
        response: Hz from the carrier -> complex transfer function, 1 at zero.
        lead: s before the edge at which the response begins (zero if causal).
        reach: s after the edge at which all but ``SETTLED`` has arrived.
        bandwidth: Hz, half-power point of the weaker sideband; infinite without a line.
    """

    name: str
    step: Callable[[np.ndarray], np.ndarray]
    ramp: Callable[[np.ndarray], np.ndarray]
    response: Callable[[np.ndarray], np.ndarray]
    lead: float
    reach: float
    bandwidth: float


def none() -> Line:
    """A line that changes nothing."""
    return Line(
        "none",
        lambda t: np.heaviside(t, 0.5),
        lambda t: np.maximum(t, 0.0),
        lambda f: np.ones_like(f, dtype=complex),
        0.0,
        0.0,
        np.inf,
    )


def first_order(bandwidth: float) -> Line:
    """One pole at ``bandwidth`` (Hz, -3 dB)."""
    _positive("bandwidth", bandwidth)
    tau = 1 / (2 * np.pi * bandwidth)

    def ramp(t):
        after = np.maximum(t, 0.0)
        return after + tau * np.expm1(-after / tau)

    return Line(
        f"first-order low-pass, {bandwidth / 1e6:g} MHz",
        lambda t: -np.expm1(-np.maximum(t, 0.0) / tau),
        ramp,
        lambda f: 1 / (1 + 1j * np.asarray(f) / bandwidth),
        0.0,
        -tau * np.log(SETTLED),
        bandwidth,
    )


def gaussian(bandwidth: float) -> Line:
    """Gaussian response of half-power ``bandwidth`` (Hz), its delay taken out.

    ``|H| = exp(-(ln 2/2)(f/bandwidth)^2)``: no overshoot, symmetric in time about the edge.
    """
    _positive("bandwidth", bandwidth)
    sigma = np.sqrt(2 * HALF_POWER) / (2 * np.pi * bandwidth)

    def step(t):
        return 0.5 * (1 + erf(t / sigma / np.sqrt(2)))

    def ramp(t):
        return t * step(t) + sigma / np.sqrt(2 * np.pi) * np.exp(-0.5 * (t / sigma) ** 2)

    reach = _GAUSSIAN_REACH * sigma
    return Line(
        f"Gaussian low-pass, {bandwidth / 1e6:g} MHz",
        step,
        ramp,
        lambda f: np.exp(-HALF_POWER * (np.asarray(f) / bandwidth) ** 2) + 0j,
        reach,
        reach,
        bandwidth,
    )


def tabulated(name: str, start: float, spacing: float, step: np.ndarray) -> Line:
    """A line from samples of its step response, straight in between.

    Args:
        start: s. Time of the first sample after the edge (negative: before it).
        spacing: s.
        step: [sample] complex, ending at 1; zero before the first sample.
    """
    step = np.asarray(step, dtype=complex)
    times = start + spacing * np.arange(len(step))
    area = np.concatenate([[0], np.cumsum((step[1:] + step[:-1]) / 2)]) * spacing

    def at(t):
        return np.interp(t, times, step, left=0.0, right=step[-1])

    def ramp(t):
        inside = np.clip(np.floor((np.asarray(t) - start) / spacing), 0, len(step) - 2)
        k = inside.astype(int)
        past = np.asarray(t) - times[k]
        slope = (step[k + 1] - step[k]) / spacing
        curve = area[k] + step[k] * past + 0.5 * slope * past**2
        after = area[-1] + step[-1] * (np.asarray(t) - times[-1])
        return np.where(t < times[0], 0.0, np.where(t > times[-1], after, curve))

    def response(f):
        # the straight pieces transform exactly: jumps of the slope over (2 pi i f)^2, here summed
        # as increments spread over one spacing each
        f = np.atleast_1d(np.asarray(f, dtype=float))
        middle = times[:-1] + spacing / 2
        waves = np.exp(-2j * np.pi * f[:, None] * middle) @ np.diff(step)
        jump = step[0] * np.exp(-2j * np.pi * f * times[0])
        return jump + waves * np.sinc(f * spacing)

    missing = np.flatnonzero(np.abs(step - step[-1]) > SETTLED)
    reach = times[missing[-1] + 1] if len(missing) else times[0]
    return Line(
        name,
        at,
        ramp,
        response,
        max(0.0, -start),
        max(float(reach), 0.0),
        _half_power(response, spacing),
    )


@dataclass(frozen=True)
class Taps:
    """A line on the slice clock: linear, banded, ready for the engine.

    Attributes:
        kernel: [tap, cell] complex. What one slice of unit drive gives in the cells of the slices
            ``tap - lead`` after it.
        lead: slices that the answer begins before the first slice.
    """

    kernel: np.ndarray
    lead: int

    @property
    def cells(self) -> int:
        """Cells per slice."""
        return self.kernel.shape[1]

    @property
    def added(self) -> int:
        """Slices by which the answer is longer than the waveform: lead and tail."""
        return self.kernel.shape[0] - 1


def taps(line: Line, slice_duration: float, cells: int) -> Taps:
    """The line's answer to one slice, as means over ``cells`` equal cells a slice."""
    lead, tail = whole(line.lead / slice_duration), whole(line.reach / slice_duration)
    edges = np.arange((lead + tail + 1) * cells + 1) / cells - lead
    area = line.ramp(edges * slice_duration) - line.ramp((edges - 1) * slice_duration)
    kernel = np.diff(area) * cells / slice_duration
    kernel = kernel if np.any(np.imag(kernel)) else np.real(kernel)
    return Taps(kernel.reshape(-1, cells), lead)


def whole(count: float) -> int:
    """Rounded up, but for round-off."""
    return int(np.ceil(count - 1e-9))


def filtered(kernel: np.ndarray, drive: np.ndarray) -> np.ndarray:
    """The drive at the qubit, as cell means; linear, for NumPy and JAX arrays alike.

    Args:
        kernel: [tap, cell], of ``Taps``.
        drive: [slice, 2] rad/s.
    Returns:
        [(slice + tap - 1) * cell, 2] rad/s; begins ``lead`` slices before the waveform.
    """
    xp = drive.__array_namespace__()
    count, slices = kernel.shape[0], drive.shape[0]
    # row: output slice; column: tap; the slice that this tap answers to, or the zero at the end
    source = np.arange(slices + count - 1)[:, None] - np.arange(count)[None, :]
    source = np.where((source >= 0) & (source < slices), source, slices)
    padded = xp.concatenate([drive, xp.zeros((1, 2), dtype=drive.dtype)])
    windows = padded[source]  # [output slice, tap, 2]
    keep = xp.asarray(kernel.real)
    x, y = windows[..., 0] @ keep, windows[..., 1] @ keep
    if np.issubdtype(kernel.dtype, np.complexfloating):
        swap = xp.asarray(kernel.imag)
        x, y = x - windows[..., 1] @ swap, y + windows[..., 0] @ swap
    return xp.stack([xp.reshape(x, (-1,)), xp.reshape(y, (-1,))], axis=-1)


def fourth_order(kernel: np.ndarray) -> np.ndarray:
    """The kernel with which a chain of constant cells is right to fourth order in their length.

    Means alone leave an error of second order: within a cell the drive still turns. Two cells with
    means ``m -+ d`` stand for the straight line through them if they are taken as ``m -+ 4/3 d``
    (commutator-free Magnus expansion). For propagation only: they are no means any more.

    Args:
        kernel: [tap, cell], of ``Taps``; left as it is if its cells have no pairs.
    Source:
        S. Blanes and P. C. Moan, Appl. Numer. Math. 56, 1519 (2006) (from memory); the two halves
        in terms of means: derived here.
    """
    if kernel.shape[1] % 2:
        return kernel
    pairs = kernel.reshape(len(kernel), -1, 2)
    middle = pairs.mean(axis=2, keepdims=True)
    return (middle + 4 / 3 * (pairs - middle)).reshape(kernel.shape)


def gathered(kernel: np.ndarray, slope: np.ndarray) -> np.ndarray:
    """The transpose of ``filtered``: slopes by cells to slopes by slices, many at once.

    Block by block, for a block's slices answer to the same few cells by the same matrix.

    Args:
        kernel: [tap, cell], of ``Taps``; real if the line turns no quadrature into the other.
        slope: [(slice + tap - 1) * cell, 2, ...] of anything by the drive at the qubit.
    Returns:
        [slice, 2, ...] of it by what is played.
    """
    xp = slope.__array_namespace__()
    count, cells = kernel.shape
    slices = slope.shape[0] // cells - count + 1
    blocks = -(-slices // _BLOCK)
    size = -(-slices // blocks)
    width = size + count - 1
    tap = np.arange(width)[None, :] - np.arange(size)[:, None]
    tap = np.where((tap >= 0) & (tap < count), tap, count)  # the last stands for none
    matrix = xp.concatenate([kernel, xp.zeros((1, cells), dtype=kernel.dtype)])[tap]
    matrix = xp.reshape(matrix, (size, width * cells))
    missing = (blocks * size - slices) * cells
    slope = xp.concatenate([slope, xp.zeros((missing, *slope.shape[1:]), dtype=slope.dtype)])
    turns = np.issubdtype(kernel.dtype, np.complexfloating)
    parts = []
    for first in range(0, blocks * size, size):
        window = slope[first * cells : (first + width) * cells]
        flat = xp.reshape(window, (width * cells, -1))
        part = xp.reshape(matrix.real @ flat, (size, *slope.shape[1:]))
        if turns:
            swapped = xp.reshape(matrix.imag @ flat, (size, *slope.shape[1:]))
            part = part + xp.stack([swapped[:, 1], -swapped[:, 0]], axis=1)
        parts.append(part)
    return xp.concatenate(parts)[:slices]


def cells_needed(
    line: Line, drive: np.ndarray, slice_duration: float, infidelity: Callable | None = None
) -> int:
    """Fewest cells per slice (a power of two) at which twice as many change next to nothing.

    Args:
        drive: [slice, 2] rad/s. The pulse, or one like it at the bound.
        infidelity: propagator quaternion [4] -> infidelity. None: the infidelity of the coarse
            propagator against the fine one, what a perfect pulse would show.
    Raises:
        InputError: if even the finest grid is too coarse.
    """
    cells, last = 1, _at_qubit(line, drive, slice_duration, 1)
    while cells <= FINEST:
        finer = _at_qubit(line, drive, slice_duration, 2 * cells)
        if infidelity is None:
            change = 2 / 3 * np.sum(product(conjugate(finer), last)[1:] ** 2)
        else:
            change = abs(infidelity(finer) - infidelity(last))
        if change < CHANGE_WHEN_DOUBLED:
            return cells
        cells, last = 2 * cells, finer
    raise InputError(
        f"line: expected slices short enough for {FINEST} cells each, "
        f"got {slice_duration:g} s with a line of {line.bandwidth:g} Hz"
    )


def inverse(
    line: Line, drive: np.ndarray, slice_duration: float, extra: int, ridge: float = 1e-4
) -> np.ndarray:
    """Predistortion: what to play so that ``drive`` arrives, as nearly as the clock allows.

    Least squares over the whole waveform on four cells a slice; ``ridge`` keeps the played
    amplitudes finite where the line passes nothing. Linear in the drive; no bound is applied, so
    the codes are to be checked afterwards.

    Args:
        drive: [slice, 2] rad/s, wanted at the qubit.
        extra: slices played after the last one, to cut the tail short.
        ridge: weight of the played power against the squared error.
    Returns:
        [slice + extra, 2] rad/s.
    Source:
        Tikhonov regularization: A. N. Tikhonov, V. Y. Arsenin, Solutions of Ill-posed Problems.
    """
    step = taps(line, slice_duration, 4)
    played = len(drive) + extra
    length = (played + step.added) * step.cells
    matrix = np.zeros((length, played), dtype=complex)
    column = step.kernel.ravel()
    for k in range(played):
        matrix[k * step.cells : k * step.cells + len(column), k] = column
    wanted = np.zeros(length, dtype=complex)
    begin = step.lead * step.cells
    wanted[begin : begin + len(drive) * step.cells] = np.repeat(
        np.asarray(drive) @ np.array([1, 1j]), step.cells
    )
    normal = matrix.conj().T @ matrix / step.cells + ridge * np.eye(played)
    best = np.linalg.solve(normal, matrix.conj().T @ wanted / step.cells)
    return np.stack([best.real, best.imag], axis=-1)


def hold_response(frequency: np.ndarray, sample_rate: float) -> np.ndarray:
    """Transfer function of the DAC's zero-order hold: a sinc and half a sample of delay."""
    share = np.asarray(frequency, dtype=float) / sample_rate
    return np.sinc(share) * np.exp(-1j * np.pi * share)


def require_band(line: Line, duration: float) -> None:
    """Refuse a line too slow for a pulse of ``duration`` (s).

    Raises:
        InputError: if its bandwidth is below ``1/duration``.
    """
    if line.bandwidth < 1 / duration:
        raise InputError(
            f"line: expected a bandwidth of at least 1/duration = {1e-6 / duration:.4g} MHz, "
            f"got {line.bandwidth / 1e6:.4g} MHz"
        )


def _at_qubit(line: Line, drive: np.ndarray, slice_duration: float, cells: int) -> np.ndarray:
    fine = filtered(taps(line, slice_duration, cells).kernel, np.asarray(drive, dtype=float))
    return propagate(fine, np.full(len(fine), slice_duration / cells), 0.0, 0.0)


def _half_power(response: Callable, spacing: float) -> float:
    """Lowest frequency (Hz) at which a sideband has lost half its power."""
    f = np.linspace(0, 0.5 / spacing, 2001)
    weaker = np.minimum(np.abs(response(f)), np.abs(response(-f))) ** 2
    below = np.flatnonzero(weaker < 0.5)
    return float(f[below[0]]) if len(below) else np.inf


def _positive(name: str, value: float) -> None:
    if not (np.isfinite(value) and value > 0):
        raise InputError(f"line: expected a positive {name}, got {value:g} Hz")
