"""What the pulse must do: a gate, a gate up to a final z, or a state carried into another.

All three are one thing: linear rows ``E`` that vanish on the accepted set. For the propagator
``q`` of a pulse, ``E q`` is its rotation error (half the error angle, to first order), and
the infidelity is ``scale |E q|^2``. Computed so, and not as ``1 - w^2``, it keeps its digits down
to 1e-30.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from shaper.rotation import canonical, conjugate, from_axis_angle, product

GATE_SCALE = 2 / 3  # average gate infidelity of a unitary error (Horodecki 1999, Nielsen 2002)
STATE_SCALE = 1.0  # 1 - |<to|U|from>|^2


@dataclass(frozen=True)
class Target:
    """The accepted rotations: ``quaternion``, then any turn about ``free_axis`` (or none).

    Attributes:
        quaternion: [4] unitless. A rotation that meets the target.
        free_axis: [3] unit vector, or None. A turn about it afterwards is accepted: z for a
            frame update, the final Bloch vector for a state-to-state target.
        kind: "gate" or "state"; decides what the infidelity is (average gate, or transfer).
    """

    quaternion: np.ndarray
    free_axis: np.ndarray | None = None
    kind: str = "gate"

    @property
    def scale(self) -> float:
        """Infidelity per squared rotation error."""
        return STATE_SCALE if self.kind == "state" else GATE_SCALE

    @property
    def measure(self) -> str:
        """What the infidelity is called."""
        return "One minus transfer" if self.kind == "state" else "Average gate infidelity"

    @property
    def error_rows(self) -> np.ndarray:
        """[k, 4], k = 3 (exact) or 2 (free axis): orthonormal rows, zero on the accepted set."""
        inverse = conjugate(self.quaternion)
        # product(q, inverse) is linear in q: column j is what the j-th unit quaternion gives
        linear = np.stack([product(unit, inverse) for unit in np.eye(4)], axis=-1)[1:]
        if self.free_axis is None:
            return linear
        across = np.linalg.svd(self.free_axis[None, :])[2][1:]  # two vectors normal to the axis
        return across @ linear

    def member(self, angle: float) -> np.ndarray:
        """[4]: the accepted rotation with a final turn by ``angle`` (rad) about the free axis."""
        if self.free_axis is None:
            return self.quaternion
        return product(from_axis_angle(self.free_axis, angle), self.quaternion)

    @property
    def needs_no_pulse(self) -> bool:
        """True if doing nothing at all meets the target (a z gate that a frame update absorbs)."""
        return bool(np.sum((self.error_rows @ np.eye(4)[0]) ** 2) < 1e-24)

    @property
    def z_angle(self) -> float | None:
        """The angle (rad, in (-pi, pi]) if the target is a pure z rotation, else None."""
        w, x, y, z = canonical(self.quaternion)
        return 2 * float(np.arctan2(z, w)) if np.hypot(x, y) < 1e-12 else None


def infidelity(q: np.ndarray, target: Target) -> np.ndarray:
    """Average gate infidelity (or one minus the transfer probability) of propagators.

    Args:
        q: [*batch, 4] unit quaternions.
    Returns:
        [*batch] unitless, >= 0: ``scale * |E q|^2``.
    """
    return target.scale * np.sum((np.asarray(q) @ target.error_rows.T) ** 2, axis=-1)
