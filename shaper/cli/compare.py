"""``shaper compare``: the pulses of a waveform file side by side."""

from __future__ import annotations

import json
import sys
from pathlib import Path

from shaper.cli.arguments import add_against, add_data

_WIDTH = 100  # columns of running text
# by levels: the balance that ``physics.leakage.seepage`` gives, in words
_SEEPAGE = {3: "twice as much", 4: "as much", 5: "2/3 as much"}
FRAME_UPDATE = {
    "enough": "the target as stated needs no pulse: shift the phase of all later pulses by the z "
    "angle instead. It takes no time and has no error.",
    "instead": "shifting the phase of all later pulses does the same in no time and without error. "
    "It cannot replace the pulse where the rotation must happen on the qubit itself: next to a "
    "drive or coupling whose phase cannot be shifted with it, between parts of a sequence that "
    "refocuses, or where others read the qubit in their own frame.",
}


def add(commands):
    """Declare the command's arguments."""
    command = commands.add_parser(
        "compare",
        help="measure the pulses of a waveform file side by side, and against composites",
        description="Measure every pulse of a waveform file on one grid over the tolerance box of "
        "its job, as the DAC codes play it: duration and its ratio to the shortest possible, "
        "peak, rms, energy, average gate infidelity without errors, mean, worst and guaranteed, "
        "tolerance windows, error orders, and what T1 and T2 take; with a verdict.",
        epilog="Example: shaper compare z90_robust.h5 --against all --figure compare.png",
    )
    command.add_argument("file", metavar="FILE.h5", help="waveform file")
    add_against(command)
    add_data(command)
    command.add_argument("--json", action="store_true", help="print one JSON object")
    command.add_argument(
        "--figure", metavar="FILE", help="draw waveforms and cuts (.png, .svg, .pdf)"
    )
    command.add_argument("--maps", metavar="FILE", help="draw maps over both errors")
    return command


def run(args) -> int:
    """Run it; returns the exit code."""
    from shaper.store import load_waveform
    from shaper.workflow.compare import as_json, compare, draw, draw_maps

    folder = Path(args.file).parent if args.data is None else Path(args.data)
    comparison = compare(load_waveform(args.file), args.against, folder)
    for path, picture in ((args.figure, draw), (args.maps, draw_maps)):
        if path:
            for written in picture(comparison, path):
                print(f"shaper: figure in {written}", file=sys.stderr)
    print(json.dumps(as_json(comparison)) if args.json else text(comparison))
    return 0


def text(comparison) -> str:
    """The comparison as people read it: what was asked, two tables, the verdict."""
    from textwrap import TextWrapper

    from shaper.evidence.verdict import sentence
    from shaper.readable import rate, time

    fill = TextWrapper(_WIDTH, break_on_hyphens=False).fill
    job = comparison.job
    proved = job.has_tolerance
    kind = "time-optimal" if job.bound == "circle" else "best known"
    sides = _sides(job.groups[0])
    none = "none" if job.others else "none: nominal, mean and worst are one"
    alone = ", for the addressed qubit alone" if job.others else ""
    decay = [
        f"{name} {time(value, 6)}" for name, value in (("T1", job.t1), ("T2", job.t2)) if value
    ]
    measure = "Average gate infidelity" if job.target.kind == "gate" else "One minus the transfer"
    lines = [
        *([job.title] if job.title else []),
        f"target     {job.target_name}",
        f"drive      {rate(job.rabi_max, 6)} Rabi ({job.bound}), {job.dac_bits} bits",
        f"tolerance  {sides or none}",
        *(_qubit_line(job, group) for group in job.others),
        *([f"decay      {', '.join(decay)}"] if decay else []),
        f"limit      {time(comparison.shortest, 6)} ({kind}, without errors{alone})",
        "",
        _main_table(comparison),
        "",
        fill(
            f"{measure}, from the DAC codes. Mean and worst: over the tolerance box"
            + (" on one grid; guaranteed: proved for every point of it." if proved else ".")
            + (" The largest of all qubits; mean: by weight." if job.others else ""),
        ),
        "",
        *([_qubit_table(comparison), ""] if job.others else []),
        _robustness_table(comparison),
        "",
        fill(
            "On paper: worst case of the sequence itself, before sample grid and codes. Windows: "
            "largest +- error with infidelity below that, the other error zero. Leading terms: of "
            "the infidelity in the amplitude error e and in f = detuning / W_max. "
            + (
                f"{job.levels} levels: infidelity without errors and worst on a ladder of so many, "
                "leakage counted; the verdict goes by it, all other figures are those of two "
                "levels. Leakage is that without decay; seepage, what returns from outside, then "
                f"is {_SEEPAGE[job.levels]}. "
                if job.anharmonicity
                else ""
            )
            + "Decay: infidelity of idling as long (T1, T2); total: worst plus decay."
            + (
                " Windows are those of all qubits, leading terms of the addressed one."
                if job.others
                else ""
            ),
        ),
    ]
    if comparison.frame_update:
        lines += ["", fill("Frame update: " + FRAME_UPDATE[comparison.frame_update])]
    return "\n".join([*lines, "", fill(f"Verdict: {sentence(comparison.verdict, job)}")])


def _sides(group) -> str:
    """The tolerance box of one qubit in words, or nothing."""
    from shaper.readable import rate

    sides = []
    if group.amplitude_tolerance:
        sides.append(f"amplitude +-{100 * group.amplitude_tolerance:g} %")
    if group.detuning_tolerance:
        sides.append(f"detuning +-{rate(group.detuning_tolerance, 6)}")
    return ", ".join(sides)


def _qubit_line(job, group) -> str:
    """What is asked of a further qubit."""
    from shaper.readable import rate

    offset = group.detuning - job.detuning
    where = f"{rate(abs(offset), 6)} {'above' if offset >= 0 else 'below'} the addressed one"
    return (
        f"qubit      {group.name}, {where}: {group.target_name}; {_sides(group) or 'no tolerance'}"
    )


def _qubit_table(comparison) -> str:
    """Every qubit under the pulses worth showing."""
    from shaper.cli.table import aligned, small
    from shaper.workflow.compare import worth_showing

    job, shown = comparison.job, worth_showing(comparison)
    proved = job.has_tolerance
    header = ["pulse", "qubit", "target", "nominal", "mean", "worst"] + ["guaranteed"] * proved
    table = [
        [row.name, group.name, group.target_name]
        + [small(value) for value in (found.nominal, found.mean, found.worst)]
        + [small(found.guaranteed)] * proved
        for row in comparison.rows
        if row.name in shown
        for group, found in zip(job.groups, row.groups, strict=True)
    ]
    return aligned(header, table, text_columns=(0, 1, 2))


def _main_table(comparison) -> str:
    from shaper.cli.table import aligned, plain, small
    from shaper.readable import rate_unit, time_unit

    job, rows = comparison.job, comparison.rows
    time, second = time_unit(max(row.duration for row in rows))
    rate, hertz = rate_unit(job.rabi_max)
    proved = job.has_tolerance
    header = ["pulse", f"duration {time}", "/ limit", f"peak {rate}", f"rms {rate}"]
    header += ["energy rad^2/" + time, "nominal", "mean", "worst"] + ["guaranteed"] * proved
    table = [
        [
            row.name,
            plain(row.duration / second, 6),
            plain(row.over_limit),
            plain(row.peak / hertz),
            plain(row.rms / hertz),
            plain(row.energy * second),
            small(row.nominal),
            small(row.mean),
            small(row.worst),
        ]
        + [small(row.guaranteed)] * proved
        for row in rows
    ]
    if comparison.frame_update:
        table.append(["(frame update)", "0", "-", "0", "0", "0"] + ["0"] * (3 + proved))
    return aligned(header, table)


def _on_levels(found) -> tuple[float, float, float]:
    return found.nominal, found.worst, found.leakage


def _robustness_table(comparison) -> str:
    from shaper.cli.table import aligned, plain, small
    from shaper.readable import rate_unit

    job, rows = comparison.job, comparison.rows
    rate, hertz = rate_unit(max(row.detuning_windows[-1] for row in rows))
    header = ["pulse", "on paper", "e < 1e-4", "e < 1e-3", f"f < 1e-4 {rate}", f"f < 1e-3 {rate}"]
    header += ["leading in e", "leading in f"]
    laddered = rows[0].levels is not None
    header += [f"{job.levels} levels", "worst", "leakage"] * laddered + ["decay", "total"]

    def term(found, letter: str) -> str:
        return f"{found.coefficient:.2g} {letter}^{found.order}" if found.order else "0"

    return aligned(
        header,
        [
            [
                row.name,
                small(row.ideal_worst),
                *(f"{100 * window:.3g} %" for window in row.amplitude_windows),
                *(plain(window / hertz, 3) for window in row.detuning_windows),
                term(row.amplitude_order, "e"),
                term(row.detuning_order, "f"),
                *(map(small, _on_levels(row.levels)) if laddered else ()),
                small(row.coherence),
                small(row.total),
            ]
            for row in rows
        ],
    )
