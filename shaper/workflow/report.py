"""From a waveform file to the data of its report; figures and page are drawn elsewhere."""

from __future__ import annotations

import re
from collections.abc import Callable, Sequence

import numpy as np

from shaper import figures
from shaper.drive.dac import largest_code
from shaper.evidence import tables
from shaper.evidence.verdict import sentence
from shaper.pulse import Pulse, Table, Waveform
from shaper.report import Picture, Report, report_page
from shaper.units import DEG, MHZ
from shaper.workflow.check import check_job
from shaper.workflow.compare import Comparison, as_json, compare, cuts, maps

STARTS = {
    "|+⟩": (1.0, 0.0, 0.0),
    "|0⟩": (0.0, 0.0, 1.0),
    "|1⟩": (0.0, 0.0, -1.0),
    "|+i⟩": (0.0, 1.0, 0.0),
}
_SPECTRUM_POINTS = 1201
_SPECTRUM_REACH = 12  # Rabi frequencies to either side
_SLIDER_REACH = 5  # tolerances
_SLIDER_DEFAULT = 0.1  # of the drive, where there is no tolerance
_CAUTIONS = (
    "Look at the waveform on an oscilloscope before it reaches a sample. Nothing here switches an "
    "output on; that is for the person at the bench.",
    "Infidelities are those of the model in the job: what the line, the levels and the noise do "
    "beyond it is not in them unless the job says so.",
    "For laboratory samples only, not for anything on or around a person.",
)


def make_report(waveform: Waveform, name: str = "", against: Sequence[str] = ()) -> str:
    """The report of a waveform file as one HTML page.

    Args:
        waveform: as ``shaper.load_waveform`` gives it.
        name: of the file, for the heading where the job has no title.
        against: names of the composite library to set beside the file's own pulses, or "all".
    Raises:
        InputError: if the job that the file carries is not valid.
    """
    comparison = compare(waveform, against)
    job = comparison.job
    numbers = as_json(comparison)
    facts = check_job(job)
    return report_page(
        Report(
            title=job.title or name or "Untitled job",
            verdict=sentence(comparison.verdict, job),
            rows=numbers["pulses"],
            facts=_facts(comparison, facts),
            pictures=_pictures(waveform, comparison),
            live=live_data(comparison),
            cautions=[*_CAUTIONS, *facts["warnings"]],
            job_text=waveform.job_text,
            provenance={
                "made": waveform.created,
                "software": waveform.software,
                "seed": str(waveform.seed),
                "search ended": waveform.status,
                **_verified(waveform),
            },
        )
    )


def _facts(comparison: Comparison, facts: dict) -> dict[str, str]:
    job = comparison.job
    limited = facts["coherence_limited_infidelity"]
    box = (
        f"amplitude ±{100 * job.amplitude_tolerance:g} %, "
        f"detuning ±{job.detuning_tolerance / MHZ:g} MHz"
    )
    terms = {
        "target": job.target_name,
        "drive": f"Rabi frequency at most {job.rabi_max / MHZ:g} MHz ({job.bound}), "
        f"{job.dac_bits} bits, {job.sample_rate / 1e6:g} MSps",
        "tolerance box": box if job.has_tolerance else "none asked for",
        "shortest possible": f"{facts['shortest_duration_ns']:.5g} ns "
        f"({facts['shortest_duration_is']})",
    }
    if limited is not None:
        terms["T1 and T2 cost"] = (
            f"at least {figures.scientific(limited)} in {facts['duration_ns']:g} ns"
        )
    return terms


def _verified(waveform: Waveform) -> dict[str, str]:
    """What ``verify`` found, if it was run on this file."""
    table = waveform.evidence.get("verified")
    if table is None:
        return {"verified": "not yet: shaper verify recomputes the file by independent means"}
    if np.all(np.asarray(table.values) == 1):
        return {"verified": "every figure found again by independent means"}
    return {"verified": "NOT CONFIRMED: figures in the file do not hold"}


# --- the live panel ---------------------------------------------------------------------------


def live_data(comparison: Comparison) -> dict:
    """What the script in the page computes from, SI inside, JSON-ready.

    ``pulses`` as the codes play them (``rates`` [run][2] rad/s, ``durations`` [run] s), the target
    as error rows and scale, the drive, start states, and the reach of each slider.
    """
    job = comparison.job
    target = job.target
    angle = target.z_angle if target.kind == "gate" and target.free_axis is None else None
    unit, unit_name = (MHZ, "MHz") if job.rabi_max >= MHZ else (MHZ / 1e3, "kHz")
    percent = _slider(100 * (_SLIDER_REACH * job.amplitude_tolerance or _SLIDER_DEFAULT))
    reach = _SLIDER_REACH * job.detuning_tolerance or _SLIDER_DEFAULT * job.rabi_max
    has_sandwich = "sandwich" in comparison.pulses
    degrees = None if angle is None else float(f"{angle / DEG:.9g}")
    return tables.plain(
        {
            "target": {
                "error_rows": target.error_rows,
                "scale": target.scale,
                "z_angle_deg": degrees,
            },
            "drive": {
                "rabi_max": job.rabi_max,
                "bound": job.bound,
                "sample_rate": job.sample_rate,
                "largest_code": largest_code(job.dac_bits),
            },
            "detuning": job.detuning,
            "detuning_unit": unit,
            "detuning_unit_name": unit_name,
            "amplitude_slider": percent,
            "detuning_slider": _slider(reach / unit),
            "theta_slider": (
                {"min": -180.0, "max": 180.0, "step": _theta_step(degrees)}
                if degrees is not None and has_sandwich
                else None
            ),
            "starts": [{"label": k, "bloch": v} for k, v in STARTS.items()],
            "pulses": [_played(name, pulse) for name, pulse in comparison.pulses.items()],
        }
    )


def _played(name: str, pulse: Pulse) -> dict:
    rates, durations = pulse.played
    return {"name": name, "rates": rates, "durations": durations}


def _slider(reach: float) -> dict:
    """Symmetric, a hundred steps to either side, with two digits at the end."""
    end = float(f"{reach:.2g}")
    return {"min": -end, "max": end, "step": float(f"{end / 100:.6g}")}


def _theta_step(degrees: float) -> float:
    """One degree, unless the job's own angle would then fall between two steps."""
    return 1.0 if float(degrees).is_integer() else 0.1 if (10 * degrees).is_integer() else 0.01


# --- pictures ---------------------------------------------------------------------------------


def _pictures(waveform: Waveform, comparison: Comparison) -> list[Picture]:
    job, pulses = comparison.job, comparison.pulses
    names = list(pulses)
    both = {name: pulses[name] for name in [names[0], *(n for n in names[1:] if n == "sandwich")]}
    box = {
        "amplitude_tolerance": job.amplitude_tolerance,
        "detuning_tolerance_MHz": job.detuning_tolerance / MHZ,
    }
    waveforms = {name: tables.waveform_table(pulse) for name, pulse in both.items()}
    plane = maps(comparison)
    shown = list(plane["infidelity"])  # of many pulses the ones worth a picture
    lines = cuts(comparison)
    lines["pulses"] = {name: lines["pulses"][name] for name in shown}
    frequency = np.linspace(-1, 1, _SPECTRUM_POINTS) * _SPECTRUM_REACH * job.rabi_max
    spectrum = tables.spectrum_table(both, frequency)
    marks = {}
    if job.anharmonicity and abs(job.anharmonicity) < frequency[-1]:
        marks["second transition"] = job.anharmonicity / MHZ
    paths = tables.path_table(both, {k: STARTS[k] for k in ("|0⟩", "|+⟩")}, 0.0, job.detuning)
    listed = ", ".join(shown)
    pictures = [
        _drawn(
            "Waveform",
            "I, Q, amplitude and phase, step by step as the DAC holds them; dotted: the bound.",
            f"Drive against time of {' and '.join(both)}, within the bound throughout.",
            lambda theme: figures.waveform_figure(
                waveforms, rabi_max_MHz=job.rabi_max / MHZ, bound=job.bound, theme=theme
            ),
        ),
        _drawn(
            "Along each error",
            "Infidelity when only one error is on; shaded: the tolerance of the job.",
            f"Infidelity against detuning and against amplitude error of {listed}; "
            "the figures at the edge of the tolerance are in the table above as the worst case.",
            lambda theme: figures.cuts_figure(lines, **box, theme=theme),
        ),
        _drawn(
            "Over both errors",
            "Dark is good. Lines at 1e-3 (solid), 1e-4 (dashed), 1e-5 (dotted).",
            f"Maps of the infidelity over amplitude error and detuning of {listed}.",
            lambda theme: figures.map_figure(plane, **box, theme=theme),
        ),
        _drawn(
            "Spectrum",
            "Energy of the steps against frequency, relative to the largest value shown.",
            f"Energy density of {' and '.join(both)} around the carrier.",
            lambda theme: figures.spectrum_figure(spectrum, marks_MHz=marks, theme=theme),
        ),
    ]
    history = _history(waveform)
    if history is not None:
        pictures.append(
            _drawn(
                "Search",
                "Best infidelity of every start against iteration.",
                f"The search ended with status {waveform.status}.",
                lambda theme: figures.history_figure(
                    history, stop_infidelity=job.stop_infidelity, theme=theme
                ),
            )
        )
    budget = budget_table(waveform)
    if budget is not None:
        pictures.append(
            _drawn(
                "Error budget",
                "Infidelity by each effect alone, and by all at once at the worst point of the "
                "tolerance box.",
                f"Error budget of {' and '.join(budget['pulses'])}, recomputed independently.",
                lambda theme: figures.budget_figure(budget, theme=theme),
            )
        )
    pictures.append(
        _drawn(
            "Way of the Bloch vector",
            "Lambert's equal-area discs, one a hemisphere, without errors.",
            f"Bloch vectors from |0⟩ and |+⟩ during {' and '.join(both)}.",
            lambda theme: figures.disc_figure(paths, theme=theme),
            paper_only=True,
        )
    )
    return pictures


def _drawn(
    heading: str,
    caption: str,
    alternative: str,
    draw: Callable[[figures.Theme], object],
    paper_only: bool = False,
) -> Picture:
    light, dark = (
        figures.encoded(draw(theme), ".svg", theme) for theme in (figures.LIGHT, figures.DARK)
    )
    return Picture(heading, caption, alternative, light, dark, paper_only)


def budget_table(waveform: Waveform) -> dict | None:
    """The budget that ``verify`` stored, as ``figures.budget_figure`` takes it; None: not there.

    Rows and columns are named in the table's own description.
    """
    table, together = (waveform.evidence.get(k) for k in ("budget", "budget_together"))
    named = table and re.search(r"pulses: (.*); sources: (.*)$", table.long_name)
    if not named or together is None:
        return None
    pulses, sources = (part.split(", ") for part in named.groups())
    values = np.asarray(table.values, dtype=float)
    if values.shape != (len(pulses), len(sources)):
        return None
    asked = [k for k in range(len(sources)) if not np.all(np.isnan(values[:, k]))]
    return {
        "source": [*(sources[k] for k in asked), "all together"],
        "pulses": {
            name: [*row[asked], whole]
            for name, row, whole in zip(pulses, values, together.values, strict=True)
        },
    }


def _history(waveform: Waveform) -> dict | None:
    """The table of infidelity by start and iteration, if the file holds one with any number."""
    for name, table in waveform.history.items():
        if _is_history(name, table) and np.any(np.asarray(table.values) > 0):
            return {"infidelity": np.asarray(table.values, dtype=float)}
    return None


def _is_history(name: str, table: Table) -> bool:
    return tuple(table.axes) == ("start", "iteration") and ("infidelity" in name or name == "cost")
