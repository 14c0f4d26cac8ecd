"""The published composite rotations, one entry each: angles in closed form, source, what for.

A composite stands in for one rotation by ``angle`` about an axis in the xy plane. How a whole
target is made of such rotations is the business of ``shaper.composite.compose``.

To add one: write its turns about x in time order as a function of the angle, and an entry below
with its source, the errors it corrects and the leading powers of its infidelity. The tests
check every entry of this table: the rotation, and both orders, by series.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from shaper.composite.sequence import Sequence

PI = math.pi
Turns = list[tuple[float, float]]  # (angle, phase) in time order, rad


@dataclass(frozen=True)
class Composite:
    """One entry of the library.

    Attributes:
        name: as published, fit for a file.
        turns: from the angle (rad, in (0, pi]) to the turns that make ``+-R_x(angle)``.
        source: citation.
        corrects: "nothing", "amplitude", "detuning" or "amplitude and detuning".
        amplitude_order: leading power of the infidelity in the relative amplitude error.
        detuning_order: leading power of the infidelity in the detuning.
        only_half_turn: True if published for 180 degrees alone.
    """

    name: str
    turns: Callable[[float], Turns]
    source: str
    corrects: str
    amplitude_order: int
    detuning_order: int
    only_half_turn: bool = False

    def rotation(self, angle: float, phase: float) -> Sequence | None:
        """The composite that turns by ``angle`` (rad) about the axis at ``phase`` (rad).

        The angle is wrapped to the shortest turn. None if the entry has no such rotation.
        """
        angle = math.remainder(angle, 2 * PI)
        if self.only_half_turn and abs(abs(angle) - PI) > 1e-9:
            return None
        if angle < 0:
            angle, phase = -angle, phase + PI
        turns = self.turns(angle) if angle > 0 else []
        return Sequence(
            np.array([a for a, _ in turns]),
            np.array([math.remainder(p + phase, 2 * PI) for _, p in turns]),
            self.source,
            self.name,
            uniform=self.detuning_order > 2,
        )


def _wimperis_phase(angle: float) -> float:
    """The phase at which turns by 2 pi undo the amplitude error of ``angle`` to first order."""
    return math.acos(-angle / (4 * PI))


def _plain(angle: float) -> Turns:
    return [(angle, 0.0)]


def _bb1_correction(angle: float) -> Turns:
    phase = _wimperis_phase(angle)
    return [(PI, phase), (2 * PI, 3 * phase), (PI, phase)]


def _bb1(angle: float) -> Turns:
    return [*_bb1_correction(angle), (angle, 0.0)]


def _bb1_symmetric(angle: float) -> Turns:
    return [(angle / 2, 0.0), *_bb1_correction(angle), (angle / 2, 0.0)]


def _sk1(angle: float) -> Turns:
    phase = _wimperis_phase(angle)
    return [(angle, 0.0), (2 * PI, phase), (2 * PI, -phase)]


def _corpse(angle: float) -> Turns:
    k = math.asin(math.sin(angle / 2) / 2)
    return [(2 * PI + angle / 2 - k, 0.0), (2 * PI - 2 * k, PI), (angle / 2 - k, 0.0)]


def _short_corpse(angle: float) -> Turns:
    k = math.asin(math.sin(angle / 2) / 2)
    return [(angle / 2 - k, 0.0), (2 * PI - 2 * k, PI), (angle / 2 - k, 0.0)]


def _scrofulous(angle: float) -> Turns:
    ratio = 2 * math.cos(angle / 2) / PI  # sin(outer)/outer, falling from 2/pi at pi/2 to 0 at pi
    outer = brentq(lambda a: math.sin(a) - ratio * a, PI / 2, PI, xtol=1e-15, rtol=1e-15)
    p = math.acos(-PI * math.cos(outer) / (2 * outer * math.sin(angle / 2)))
    return [(outer, p), (PI, p - math.acos(-PI / (2 * outer))), (outer, p)]


def _levitt_freeman(angle: float) -> Turns:
    return [(PI / 2, -PI / 2), (PI, 0.0), (PI / 2, -PI / 2)]


def _knill(angle: float) -> Turns:
    return [(PI, p - 5 * PI / 6) for p in (PI / 6, 0.0, PI / 2, 0.0, PI / 6)]


def _corpse_in_bb1(angle: float) -> Turns:
    return [*_bb1_correction(angle), *_corpse(angle)]


def _corpse_in_sk1(angle: float) -> Turns:
    return [*_corpse(angle), *_sk1(angle)[1:]]


_CUMMINS = "Cummins, Llewellyn and Jones, Phys. Rev. A 67, 042308 (2003)"
_BANDO = "Bando, Ichikawa, Kondo and Nakahara, J. Phys. Soc. Jpn. 82, 014004 (2013)"

# fmt: off
LIBRARY: dict[str, Composite] = {entry.name: entry for entry in (
    Composite("plain", _plain, "", "nothing", 2, 2),
    Composite("BB1", _bb1, "Wimperis, J. Magn. Reson. A 109, 221 (1994)", "amplitude", 6, 2),
    Composite("BB1-symmetric", _bb1_symmetric,
              "Wimperis, J. Magn. Reson. A 109, 221 (1994); placement: " + _CUMMINS,
              "amplitude", 6, 2),
    Composite("SK1", _sk1, "Brown, Harrow and Chuang, Phys. Rev. A 70, 052318 (2004)",
              "amplitude", 4, 2),
    Composite("CORPSE", _corpse, _CUMMINS, "detuning", 2, 4),
    Composite("short-CORPSE", _short_corpse, _CUMMINS, "detuning", 2, 4),
    Composite("SCROFULOUS", _scrofulous, _CUMMINS, "amplitude", 4, 2),
    Composite("90-180-90", _levitt_freeman,
              "Levitt and Freeman, J. Magn. Reson. 33, 473 (1979)",
              "amplitude (inversion only)", 2, 2, only_half_turn=True),
    Composite("Knill", _knill,
              "E. Knill, reported in Ryan, Hodges and Cory, Phys. Rev. Lett. 105, 200402 (2010)",
              "amplitude and detuning", 4, 4, only_half_turn=True),
    Composite("CORPSE-in-BB1", _corpse_in_bb1, _BANDO, "amplitude and detuning", 6, 4),
    Composite("CORPSE-in-SK1", _corpse_in_sk1, _BANDO, "amplitude and detuning", 4, 4),
)}
# fmt: on
