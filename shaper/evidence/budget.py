"""The error budget: what each effect costs alone, what all cost together, and what to change.

Every entry is the infidelity that this effect alone would give a perfect pulse. Coherent effects
shift the rotation error by a vector ``v`` and cost ``scale |v|^2``; vectors add before they are
squared, so two effects that push the same way cost more together than apart, by ``2 scale v1.v2``.
Those cross terms are what keeps a sum of entries from the full simulation.

All figures start from the integer codes and come from ``evidence.independent``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from shaper.drive import dac
from shaper.drive.path import Path
from shaper.evidence import independent
from shaper.physics.carrier import propagate_with_carrier
from shaper.physics.noise import Spectrum, colored_infidelity
from shaper.pulse import Pulse
from shaper.rotation import matrix
from shaper.target import Target

AGREES = 0.2  # relative; sum of the entries against the full simulation
SOURCES = (
    "search",
    "quantization",
    "mixer",
    "line",
    "grid",
    "leakage",
    "decay",
    "slow noise",
    "colored noise",
    "rotating wave",
    "tolerance",
)
REMEDIES = {
    "search": "more starts or iterations, or a longer pulse",
    "quantization": "the code polish, or more bits",
    "mixer": "a lower intermediate frequency, or a faster clock: samples turn while held",
    "line": "the line in the model of the search",
    "grid": "more cells a slice",
    "leakage": "a search on the ladder, or a longer, smoother pulse",
    "decay": "a shorter pulse: nothing else shortens the exposure",
    "slow noise": "a pulse searched over a wider detuning tolerance",
    "colored noise": "a shorter pulse, or one whose filter function is low where the noise is",
    "rotating wave": "edges that rise and fall smoothly, then a carrier moved by the "
    "Bloch-Siegert shift",
    "tolerance": "a longer pulse, or a tighter calibration",
}
_GRID_POINTS = 9  # per axis of the tolerance box
_NOISE_NODES = 7  # of the Gauss-Hermite rule in the full simulation
_FINER = 8  # times the cells, where no integrator follows the waveform itself


@dataclass(frozen=True)
class Effects:
    """What the budget reckons with; None or zero: the effect is not asked for.

    Attributes:
        path: from the samples to the qubit.
        correction: how the line is met: "model" (the search saw it), "inverse" (the codes are
            predistorted: what the file calls the drive is wanted behind the line) or "none".
        cells: per sample, of the model's grid.
        anharmonicity: rad/s.
        levels: of the ladder.
        on_ladder: whether the search saw the ladder; then the file claims what three levels make
            of the pulse, and the leakage entry is the population outside alone.
        t1, t2: s.
        detuning_sigma: rad/s; amplitude_sigma: relative. Of errors that stand still.
        detuning_spectrum, amplitude_spectrum: of errors that do not.
        carrier: rad/s.
        amplitude_tolerance: relative; detuning_tolerance: rad/s. Half sides of the box.
        detuning: rad/s. The middle of the box.
    """

    path: Path = Path()
    correction: str = "model"
    cells: int = 4
    anharmonicity: float | None = None
    levels: int = 3
    on_ladder: bool = False
    t1: float | None = None
    t2: float | None = None
    detuning_sigma: float = 0.0
    amplitude_sigma: float = 0.0
    detuning_spectrum: Spectrum | None = None
    amplitude_spectrum: Spectrum | None = None
    carrier: float | None = None
    amplitude_tolerance: float = 0.0
    detuning_tolerance: float = 0.0
    detuning: float = 0.0


@dataclass(frozen=True)
class Budget:
    """Where the infidelity of one pulse comes from.

    Attributes:
        alone: source to infidelity; only the sources that were asked for.
        together: infidelity of the full simulation, at the worst point of the tolerance box.
        leakage: population outside in the full simulation.
        seepage: population that would return from outside in the full simulation, decay included:
            no part of the infidelity, but of what a pulse before this one has leaked. None on two
            levels.
        crossed: (source, source) to what the pair adds to the sum of its entries.
    """

    alone: dict[str, float]
    together: float
    leakage: float
    seepage: float | None
    crossed: dict[tuple[str, str], float]

    @property
    def total(self) -> float:
        """Sum of the entries."""
        return sum(self.alone.values())

    @property
    def dominating(self) -> str:
        """The largest entry."""
        return max(self.alone, key=self.alone.get)

    @property
    def adds_up(self) -> bool:
        """Whether the entries sum to the full simulation within ``AGREES``."""
        return abs(self.total - self.together) <= AGREES * max(self.together, self.total)

    @property
    def note(self) -> str:
        """One sentence on the sum, and on who interacts if it does not add up."""
        sums = f"the entries sum to {self.total:.3g}, the full simulation gives {self.together:.3g}"
        if self.adds_up:
            return f"{sums}: they add up within {AGREES:.0%}."
        pairs = sorted(self.crossed.items(), key=lambda item: -abs(item[1]))
        telling = [
            f"{a} and {b} ({value:+.2g})"
            for (a, b), value in pairs[:3]
            if abs(value) > 0.05 * abs(self.together - self.total)
        ]
        if not telling:
            return f"{sums}: the rest is second order in the errors."
        return (
            f"{sums}: rotation errors add before they are squared, and these share a direction: "
            f"{', '.join(telling)}."
        )

    @property
    def advice(self) -> str:
        """What dominates and what to change first."""
        name = self.dominating
        share = self.alone[name] / self.total if self.total else 0.0
        return f"{name} dominates ({share:.0%} of the sum): change first {REMEDIES[name]}."


def error_budget(pulse: Pulse, target: Target, effects: Effects) -> Budget:
    """The budget of one pulse, from its codes.

    Args:
        pulse: on the sample grid.
        target: what it must do.
        effects: what to reckon with.
    """
    return _Bench(pulse, target, effects).budget()


class _Bench:
    """One pulse under all effects; the waveforms at the qubit are made once."""

    def __init__(self, pulse: Pulse, target: Target, effects: Effects):
        self.pulse, self.target, self.effects = pulse, target, effects
        self.rate = pulse.sample_rate
        self.samples = dac.decode(pulse.codes, pulse.full_scale, pulse.bits)
        floats = np.repeat(pulse.drive, pulse.samples, axis=0)
        path = effects.path
        behind_inverse = effects.correction == "inverse" and path.line is not None
        self.mixes = not behind_inverse and not replace(path, line=None).straight
        self.seen = path if effects.correction == "model" else replace(path, line=None)
        self.arrived = self.through(path, self.samples, effects.cells)
        if behind_inverse:
            self.unmixed = self.wanted = self.through(Path(), floats, effects.cells)
        else:
            self.unmixed = self.through(Path(line=self.seen.line), floats, effects.cells)
            played = path.to_play(floats, self.rate)
            self.wanted = self.through(self.seen, played, effects.cells)

    def through(self, path, samples, cells):
        """(drive, durations) at the qubit; equal neighbors as one segment."""
        if path.straight:
            changes = np.flatnonzero(np.any(np.diff(samples, axis=0) != 0, axis=1)) + 1
            starts = np.concatenate([[0], changes])
            lengths = np.diff(np.append(starts, len(samples)))
            return samples[starts], lengths / self.rate
        drive, cell = path.at_qubit(samples, self.rate, cells)
        return drive, np.full(len(drive), cell)

    def gate(self, drive, durations, eps=0.0, delta=0.0):
        """Unitary of the model that the search had: two levels, or the ladder."""
        effects = self.effects
        ladder = (effects.levels, effects.anharmonicity) if effects.on_ladder else (2, 0.0)
        return independent.gate(drive, durations, eps, effects.detuning + delta, *ladder)

    def vector(self, drive, durations, eps=0.0, delta=0.0):
        return independent.rotation_error(self.gate(drive, durations, eps, delta), self.target)

    def cost(self, vector) -> float:
        """Infidelity of a rotation error alone."""
        if self.target.kind == "state":
            return float(np.sum(vector**2))
        return float(self.target.scale * np.sum(vector**2))

    def budget(self) -> Budget:
        effects = self.effects
        vectors, alone = {}, {}
        arrived = self.vector(*self.arrived)
        seen = self.vector(*self.wanted)
        vectors["search"] = seen
        if self.mixes:
            unmixed = self.vector(*self.unmixed)
            bent = effects.path.ripples and self.cost(seen) <= self.cost(unmixed)
            if not bent:  # else it was made for this mixer: what is left is the search's
                vectors["search"], vectors["mixer"] = unmixed, seen - unmixed
        if effects.path.line is None or effects.correction == "model":
            vectors["quantization"] = arrived - seen
        elif effects.correction == "inverse":
            vectors["line"] = arrived - seen  # with the rounding of its codes
        else:
            codes = self.vector(*self.through(self.seen, self.samples, effects.cells))
            vectors["quantization"] = codes - seen
            vectors["line"] = arrived - codes
        if not effects.path.straight:
            vectors["grid"] = self.continuous() - arrived
        if effects.carrier is not None:
            self.beyond_rotating_wave = self.lab_frame()
            block = self.gate(*self.arrived)[:2, :2]
            moved = independent.rotation_error(self.beyond_rotating_wave @ block, self.target)
            vectors["rotating wave"] = moved - arrived
        else:
            self.beyond_rotating_wave = np.eye(2)
        alone.update({name: self.cost(v) for name, v in vectors.items()})
        if effects.anharmonicity is not None:
            alone["leakage"], vectors["leakage"] = self.ladder()
        if effects.t1 is not None or effects.t2 is not None:
            alone["decay"] = self.decay()
        alone.update(self.noise())
        worst = (0.0, 0.0)
        if effects.amplitude_tolerance or effects.detuning_tolerance:
            alone["tolerance"], vectors["tolerance"], worst = self.tolerance()
        together, outside, returned = self.full(worst, alone.get("colored noise", 0.0))
        crossed = {}
        names = list(vectors)
        for k, a in enumerate(names):
            for b in names[k + 1 :]:
                both = self.cost(vectors[a] + vectors[b])
                crossed[a, b] = both - self.cost(vectors[a]) - self.cost(vectors[b])
        ordered = {name: alone[name] for name in SOURCES if name in alone}
        return Budget(ordered, together, outside, returned, crossed)

    def continuous(self):
        """Rotation error without a grid: the integrator, or a much finer grid."""
        path = self.effects.path
        followed = path.line is not None and path.calibration is None
        if followed and not path.intermediate_frequency and not self.effects.on_ladder:
            before, after = path.margins(self.rate)
            unitary = independent.integrated(
                path.line,
                self.samples,
                self.rate,
                -before / self.rate,
                (len(self.samples) + after) / self.rate,
                0.0,
                self.effects.detuning,
            )
            return independent.rotation_error(unitary, self.target)
        if path.line is None and path.ripples and not self.effects.on_ladder:
            unitary = independent.integrated_mixer(
                path, self.samples, self.rate, 0.0, self.effects.detuning
            )
            return independent.rotation_error(unitary, self.target)
        return self.vector(*self.through(path, self.samples, _FINER * self.effects.cells))

    def lab_frame(self):
        """[2, 2]: what the carrier does beyond the rotating-wave approximation, afterwards."""
        drive, durations = self.arrived
        lab = propagate_with_carrier(
            drive, durations, self.effects.carrier, delta=self.effects.detuning
        )
        rotating = independent.gate(drive, durations, 0.0, self.effects.detuning)
        return matrix(lab) @ rotating.conj().T

    def ladder(self):
        """Leakage and the phase error that the upper levels cause; and that error's vector."""
        effects, (drive, durations) = self.effects, self.arrived
        unitary = independent.gate(
            drive, durations, 0.0, effects.detuning, effects.levels, effects.anharmonicity
        )
        vector = independent.rotation_error(unitary, self.target) - self.vector(drive, durations)
        # zero where the search was on the ladder: then its phase errors are the search's
        lost = independent.leakage(independent.superoperator(unitary))
        return lost + self.cost(vector), vector

    def decay(self) -> float:
        effects, (drive, durations) = self.effects, self.arrived
        values = [
            independent.infidelity(
                independent.open_gate(drive, durations, 0.0, effects.detuning, 2, 0.0, t1, t2),
                self.target,
            )
            for t1, t2 in ((effects.t1, effects.t2), (None, None))
        ]
        return values[0] - values[1]

    def noise(self) -> dict[str, float]:
        """Slow and colored noise, each as the mean cost of the rotation errors it causes."""
        effects, (drive, durations) = self.effects, self.arrived
        found = {}
        if effects.detuning_sigma or effects.amplitude_sigma:
            still = self.vector(drive, durations)
            found["slow noise"] = sum(
                weight * self.cost(self.vector(drive, durations, eps, delta) - still)
                for eps, delta, weight in self.nodes()
            )
        spectra = (
            ("detuning", effects.detuning_spectrum),
            ("amplitude", effects.amplitude_spectrum),
        )
        if any(spectrum is not None for _, spectrum in spectra):
            found["colored noise"] = sum(
                colored_infidelity(drive, durations, spectrum, kind=kind, delta=effects.detuning)
                for kind, spectrum in spectra
                if spectrum is not None
            )
        return found

    def nodes(self):
        """(eps, delta, weight) of the Gaussian errors."""
        effects = self.effects
        x, w = np.polynomial.hermite_e.hermegauss(_NOISE_NODES)
        w = w / np.sum(w)
        along = [(s * x, w) if s else ([0.0], [1.0]) for s in _sigmas(effects)]
        return [
            (eps, delta, a * b)
            for eps, a in zip(*along[0], strict=True)
            for delta, b in zip(*along[1], strict=True)
        ]

    def tolerance(self):
        """Largest cost over the box, its vector, and the point (eps, delta) of the largest."""
        effects, (drive, durations) = self.effects, self.arrived
        sides = (effects.amplitude_tolerance, effects.detuning_tolerance)
        axes = [np.linspace(-h, h, _GRID_POINTS) if h else np.zeros(1) for h in sides]
        still = self.vector(drive, durations)
        points = [(eps, delta) for eps in axes[0] for delta in axes[1]]
        moved = [self.vector(drive, durations, *point) for point in points]
        worst = int(np.argmax([self.cost(v) for v in moved]))
        shifts = [self.cost(v - still) for v in moved]
        return max(shifts), moved[worst] - still, points[worst]

    def full(self, point, colored) -> tuple[float, float, float | None]:
        """Everything at once: ladder, decay and path from the codes, at the worst point.

        Infidelity, leakage and, where there is a level outside, seepage.
        Slow noise by quadrature; the rotating-wave error as a rotation afterwards; colored noise,
        known to first order only, is added.
        """
        effects = self.effects
        line = effects.path.line
        cells = effects.cells if line is None else 2 * effects.cells
        drive, durations = self.through(effects.path, self.samples, cells)
        levels = 2 if effects.anharmonicity is None else effects.levels
        after = np.eye(levels, dtype=complex)
        after[:2, :2] = self.beyond_rotating_wave
        lost = outside = returned = 0.0
        for eps, delta, weight in self.nodes():
            operator = independent.open_gate(
                drive,
                durations,
                point[0] + eps,
                effects.detuning + point[1] + delta,
                levels,
                effects.anharmonicity or 0.0,
                effects.t1,
                effects.t2,
            )
            operator = independent.superoperator(after) @ operator
            lost += weight * independent.infidelity(operator, self.target)
            outside += weight * independent.leakage(operator)
            if levels > 2:
                returned += weight * independent.seepage(operator)
        return float(lost + colored), float(outside), float(returned) if levels > 2 else None


def _sigmas(effects: Effects) -> tuple[float, float]:
    return effects.amplitude_sigma, effects.detuning_sigma
