"""Any target from rotations about axes in the xy plane, each played by a composite of the library.

Ways to a target: one rotation, where its axis lies in the xy plane; else the sandwich, or two
rotations, the second by 180 degrees (for z(theta) both). Every rotation on the way is replaced by
the same composite, so the whole inherits its compensation. Beside them stand the
shortest drives: the geodesic under the circle, the best known sequence in the box.
"""

from __future__ import annotations

import dataclasses
import difflib
import math

import numpy as np

from shaper.composite.box import shortest_box
from shaper.composite.geodesic import stepped_on_grid
from shaper.composite.library import LIBRARY, Composite
from shaper.composite.sandwich import sandwich
from shaper.composite.sequence import Sequence, concatenate, from_turns, length, place
from shaper.composite.smooth import smooth_pulses
from shaper.errors import InputError
from shaper.job import Job
from shaper.pulse import Pulse
from shaper.rotation import canonical
from shaper.target import Target

_IN_PLANE = 1e-12  # z component of a rotation whose axis is taken to lie in the xy plane
_SHARED_TURNS = 360  # turns of all phases tried in a quarter turn: the box repeats after it
_TWO_PULSE = "two half turns make a turn: O. Rodrigues, J. Math. Pures Appl. 5, 380 (1840)"


def single(target: Target, bound: str) -> Sequence:
    """The uncorrected way: one turn about an axis in the xy plane if that does, or the sandwich."""
    return dataclasses.replace(sandwich(target, bound), name="plain")


def two_pulse(target: Target, reversed_half_turn: bool = False) -> Sequence | None:
    """Any gate as two turns about axes in the xy plane, the second one by 180 degrees.

    With the target written as a turn by ``a`` about the axis at ``p`` and then ``z(f)``, it is
    ``180 - a`` about the axis opposite to p, then 180 about the axis at ``p + 180 + f/2``, or,
    which is the same gate, about the opposite one. For z(f): 180 about x, then 180 about ``f/2``,
    2 pi long for every angle. The reversed half turn takes back some of the amplitude error of
    the first turn, the other one some of its detuning error.

    None where the target is one such turn by itself, or has a free axis, so that one is enough.
    Source:
        Two half turns about axes at an angle ``f/2`` make a turn by ``f``: O. Rodrigues, J. Math.
        Pures Appl. 5, 380 (1840). The first of them joined with the turn by ``a``: own.
    """
    w, x, y, z = canonical(target.quaternion)
    if target.free_axis is not None or abs(z) < _IN_PLANE:
        return None
    a, f = 2 * math.atan2(math.hypot(x, y), math.hypot(w, z)), 2 * math.atan2(z, w)
    first = math.atan2(y, x) - f / 2 + math.pi if math.hypot(x, y) > _IN_PLANE else 0.0
    second = first + f / 2 + (math.pi if reversed_half_turn else 0.0)
    return from_turns([(math.pi - a, first), (math.pi, second)], _TWO_PULSE, "two-pulse")


def replaced(way: Sequence, entry: Composite, name: str) -> Sequence | None:
    """Every rotation of a way played by one composite; None if the entry lacks one of them."""
    parts = []
    for angle, phase in zip(way.angles, way.phases, strict=True):
        part = entry.rotation(angle, phase)
        if part is None:
            return None
        parts.append(part)
    sources = [source for source in (entry.source, way.source) if source]
    whole = concatenate(parts, "; ".join(sources), name)
    return dataclasses.replace(whole, uniform=any(part.uniform for part in parts))


def compositions(job: Job) -> dict[str, Sequence]:
    """Every sequence that the library has for the job's target, by name.

    Composites of the single way (or sandwich) carry the entry's own name, those of the two-pulse
    ways have ``two-pulse-`` or ``two-pulse-reversed-`` before it. In the box a z rotation is turned
    as a whole to where it is shortest. Empty for a target that needs no pulse.
    """
    target, bound = job.target, job.bound
    if target.needs_no_pulse:
        return {}
    if bound == "circle":
        found = {"geodesic": stepped_on_grid(target, job)}
    else:
        found = {"shortest-box": shortest_box(target)}
    ways = {
        "": single(target, bound),
        "two-pulse": two_pulse(target),
        "two-pulse-reversed": two_pulse(target, reversed_half_turn=True),
    }
    for prefix, way in ways.items():
        if way is None:
            continue
        for entry in LIBRARY.values():
            own = "" if prefix and entry.name == "plain" else entry.name
            name = "-".join(part for part in (prefix, own) if part)
            whole = replaced(way, entry, name)
            if whole is not None:
                found[name] = _turned_to_shortest(whole, target, bound)
    return found


def _turned_to_shortest(sequence: Sequence, target: Target, bound: str) -> Sequence:
    """All phases shifted alike where that is shorter and the target does not feel it."""
    if bound == "circle" or target.z_angle is None:
        return sequence

    def turned(by: float) -> Sequence:
        return dataclasses.replace(sequence, phases=sequence.phases + by)

    # the shortest has an arc along an axis or a diagonal of the box: kinks of the length
    kinks = np.concatenate([-sequence.phases, math.pi / 4 - sequence.phases, [0.0]])
    grid = np.arange(_SHARED_TURNS) / _SHARED_TURNS * math.pi / 2
    return min((turned(by) for by in np.concatenate([kinks, grid])), key=_by_length)


def _by_length(sequence: Sequence) -> float:
    return round(length(sequence, "box"), 12)


@dataclasses.dataclass(frozen=True)
class Loadable:
    """One pulse of the library for a job.

    Attributes:
        pulse: on the sample grid, as it would be loaded.
        sequence: on paper; None for smooth pulses, which are samples from the start.
    """

    pulse: Pulse
    sequence: Sequence | None


def library_pulses(job: Job, names: list[str] | None = None) -> dict[str, Loadable]:
    """Pulses of the library for the job's target, by name.

    Args:
        names: which ones, in this order; None for all.
    Raises:
        InputError: for a name that the library does not have for this target.
    """
    sequences = compositions(job)
    found = {name: Loadable(place(sequence, job), sequence) for name, sequence in sequences.items()}
    if sequences:
        smooth = smooth_pulses(single(job.target, job.bound), job)
        found |= {name: Loadable(pulse, None) for name, pulse in smooth.items()}
    if names is None:
        return found
    for name in names:
        if name not in found:
            raise InputError(_unknown(name, found, job))
    return {name: found[name] for name in names}


def _unknown(name: str, found: dict, job: Job) -> str:
    """What is wrong with a name that was asked for."""
    if not found:
        return f"{name}: {job.target_name} needs no pulse, so the library has none for it"
    by_letters = {known.lower(): known for known in found}
    near = difflib.get_close_matches(name.lower(), by_letters, n=1, cutoff=0.5)
    hint = f"; nearest: {by_letters[near[0]]}" if near else ""
    return f"{name}: expected one of {', '.join(found)}, got {name!r}{hint}"
