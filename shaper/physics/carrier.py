"""The waveform in the laboratory frame, carrier and all: no rotating-wave approximation.

``H/hbar = (w_qubit/2) sz + (1 + eps) [Wx cos(w t) - Wy sin(w t)] sx`` with ``w`` the carrier and
``w_qubit = w + delta``. An adaptive integrator of SciPy follows every swing of the carrier; it
shares no code with the engine. The result is turned back into the rotating frame.
"""

from __future__ import annotations

import numpy as np
from scipy.integrate import solve_ivp

from shaper.physics.propagate import propagate
from shaper.rotation import about_z, product

RELATIVE_TOLERANCE = 1e-11  # of the integrator, per step
ABSOLUTE_TOLERANCE = 1e-13


def propagate_with_carrier(
    drive: np.ndarray,
    durations: np.ndarray,
    carrier: float,
    *,
    eps: float = 0.0,
    delta: float = 0.0,
    phase: float = 0.0,
    relative_tolerance: float = RELATIVE_TOLERANCE,
) -> np.ndarray:
    """Propagator of the waveform under the full oscillating drive, in the rotating frame.

    The integrator restarts at every jump of the drive.

    Args:
        drive: [segment, 2] rad/s; durations: [segment] s.
        carrier: rad/s, positive.
        eps, delta: relative amplitude error, detuning (rad/s).
        phase: rad. Phase of the carrier at the start; the frame turns with it, so in the
            rotating-wave approximation nothing depends on it.
    Returns:
        [4] unit quaternion.
    Raises:
        ValueError: if the carrier is not positive.
        RuntimeError: if the integrator gives up.
    Source:
        DOP853: E. Hairer, S. P. Norsett, G. Wanner, Solving Ordinary Differential Equations I,
        section II.5.
    """
    if not carrier > 0:
        raise ValueError(f"carrier: expected a positive rate, got {carrier:g} rad/s")
    half_qubit = (carrier + delta) / 2
    q = about_z(phase)  # the frame's z turn at t = 0, so that the result starts at the identity
    start = 0.0
    for (wx, wy), duration in zip(drive, durations, strict=True):
        gain_x, gain_y = (1 + eps) * float(wx), (1 + eps) * float(wy)

        def slope(t, y, gain_x=gain_x, gain_y=gain_y):
            angle = carrier * t + phase
            hx = gain_x * np.cos(angle) - gain_y * np.sin(angle)
            # dq/dt = (0, hx, 0, half_qubit) q : the quaternion form of dU/dt = -i H U
            w, x, y_, z = y
            return (
                -hx * x - half_qubit * z,
                hx * w - half_qubit * y_,
                half_qubit * x - hx * z,
                hx * y_ + half_qubit * w,
            )

        solution = solve_ivp(
            slope,
            (start, start + duration),
            q,
            method="DOP853",
            rtol=relative_tolerance,
            atol=ABSOLUTE_TOLERANCE,
            max_step=np.pi / (2 * carrier),  # never steps over half a swing unseen
        )
        if not solution.success:
            raise RuntimeError(f"lab frame: the integrator stopped: {solution.message}")
        q = solution.y[:, -1]
        start += duration
    q = product(about_z(-(carrier * start + phase)), q)
    return q / np.linalg.norm(q)


def bloch_siegert_shift(rabi: np.ndarray | float, qubit: float) -> np.ndarray:
    """By how much a linear drive raises the resonance (rad/s), to sixth order.

    ``b^2/w0 + b^4/(4 w0^3) - 35 b^6/(32 w0^5)`` with ``b`` half the Rabi rate: the leading term
    is ``rabi^2/(4 qubit)``.

    Args:
        rabi: rad/s, in the rotating-wave approximation.
        qubit: rad/s.
    Source:
        F. Bloch, A. Siegert, Phys. Rev. 57, 522 (1940); next orders J. H. Shirley,
        Phys. Rev. 138, B979 (1965).
    """
    ratio = (np.asarray(rabi, dtype=float) / (2 * qubit)) ** 2
    return qubit * ratio * (1 + ratio * (0.25 - 35 / 32 * ratio))


def propagate_with_shift(
    drive: np.ndarray,
    durations: np.ndarray,
    carrier: float,
    *,
    eps: float = 0.0,
    delta: float = 0.0,
    phase: float = 0.0,
) -> np.ndarray:
    """What first-order theory says of the carrier: the Bloch-Siegert shift, and the kicks.

    The counter-rotating part ``V = (Z e^(2 i w t) s+ + h.c.)/2``, ``Z = Wx + i Wy``, averages out
    but for two things. Where the drive stands it shifts the resonance by ``|Z|^2/(4 w)``. Where it
    jumps, at both ends too, it kicks by ``exp(-i S)``, ``S = (Z e^(2 i w t)/(2 i w) s+ + h.c.)/2``.
    A pulse without jumps feels the shift only; what is left falls as ``1/w^2``.

    Args and returns: as ``propagate_with_carrier``.
    Source:
        F. Bloch, A. Siegert, Phys. Rev. 57, 522 (1940); the kicks are derived here.
    """
    total, start = np.array([1.0, 0.0, 0.0, 0.0]), 0.0
    for rate, duration in zip(np.asarray(drive, dtype=float), durations, strict=True):
        z = (1 + eps) * complex(*rate)
        shift = bloch_siegert_shift(abs(z), carrier)
        kicks = [
            _kick(z * np.exp(2j * (carrier * t + phase)) / (2j * carrier))
            for t in (start, start + duration)
        ]
        inside = propagate(rate[None], np.array([duration]), eps, delta + shift)
        for step in (kicks[0] * [1, -1, -1, -1], inside, kicks[1]):
            total = product(step, total)
        start += duration
    return total


def _kick(c: complex) -> np.ndarray:
    """Quaternion of ``exp(-i (c s+ + h.c.)/2)``: a turn by |c| about (Re c, -Im c, 0)."""
    half = abs(c) / 2
    sinc = np.sinc(half / np.pi) / 2
    return np.array([np.cos(half), sinc * c.real, -sinc * c.imag, 0.0])
