"""From a waveform file to the data of its report; figures and page are drawn elsewhere."""

from __future__ import annotations

import os
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from shaper import figures
from shaper.drive.dac import largest_code
from shaper.evidence import tables
from shaper.evidence.verdict import sentence
from shaper.job import Job
from shaper.physics.leakage import qubit_rows
from shaper.pulse import Pulse, Waveform
from shaper.readable import rate, time
from shaper.report import Report, report_page
from shaper.store.atomic import replace_file
from shaper.units import DEG, MHZ
from shaper.wiring import arriving, path_of
from shaper.workflow.check import check_job
from shaper.workflow.compare import Comparison, as_json, compare
from shaper.workflow.pictures import figure_tables, pictures, start_states

_MOST_SEGMENTS = 200_000  # of a pulse in the live panel: tens of megabytes, a tenth of a second
_SLIDER_REACH = 5  # tolerances
_SLIDER_DEFAULT = 0.1  # of the drive, where there is no tolerance
_CAUTIONS = (
    "Look at the waveform on an oscilloscope before it reaches a sample. Nothing here switches an "
    "output on; that is for the person at the bench.",
    "Infidelities are those of the model in the job: what the line, the levels and the noise do "
    "beyond it is not in them unless the job says so.",
    "For laboratory samples only, not for anything on or around a person.",
)


def make_report(
    waveform: Waveform,
    name: str = "",
    against: Sequence[str] = (),
    folder: str | os.PathLike = ".",
) -> str:
    """The report of a waveform file as one HTML page.

    Args:
        waveform: as ``shaper.load_waveform`` gives it.
        name: of the file, for the heading where the job has no title.
        against: names of the composite library to set beside the file's own pulses, or "all".
        folder: where the files that the job names lie.
    Raises:
        InputError: if the job that the file carries is not valid, or a file it names is not there.
    """
    comparison = compare(waveform, against, folder)
    job = comparison.job
    numbers = as_json(comparison)
    facts = check_job(job)
    return report_page(
        Report(
            title=job.title or name or "Untitled job",
            verdict=sentence(comparison.verdict, job),
            rows=numbers["pulses"],
            facts=_facts(comparison, facts),
            pictures=pictures(figure_tables(waveform, comparison), job, comparison.shortest),
            measure=job.target.measure,
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


def write_report(
    waveform: Waveform,
    path: str | os.PathLike,
    against: Sequence[str] = (),
    folder: str | os.PathLike = ".",
) -> None:
    """The page as a file; arguments as of ``make_report``. The old file stays whole.

    Raises:
        InputError: as ``make_report``.
        FileError: if the file cannot be written.
    """
    page = make_report(waveform, Path(path).stem, against, folder)
    replace_file(path, page.encode("utf-8"))


def report_json(
    waveform: Waveform, against: Sequence[str] = (), folder: str | os.PathLike = "."
) -> dict:
    """Everything the report shows, as plain data: comparison, figures' tables, live panel."""
    comparison = compare(waveform, against, folder)
    return {
        "comparison": as_json(comparison),
        "check": check_job(comparison.job),
        "figures": tables.plain(figure_tables(waveform, comparison)),
        "live": live_data(comparison),
    }


def _facts(comparison: Comparison, facts: dict) -> dict[str, str]:
    job = comparison.job
    limited = facts["coherence_limited_infidelity"]
    box = (
        f"amplitude ±{100 * job.amplitude_tolerance:g} %, detuning ±{rate(job.detuning_tolerance)}"
    )
    terms = {
        "target": job.target_name,
        "drive": f"Rabi frequency at most {rate(job.rabi_max)} ({job.bound}), "
        f"{job.dac_bits} bits, {job.sample_rate / 1e6:g} MSps",
        "tolerance box": box if job.has_tolerance else "none asked for",
        "shortest possible": f"{time(comparison.shortest, 5)} ({facts['shortest_duration_is']})",
    }
    if limited is not None:
        terms["T1 and T2 cost"] = (
            f"at least {figures.scientific(limited)} in {time(job.duration, 5)}"
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


def live_data(comparison: Comparison) -> dict | None:
    """What the script in the page computes from, SI inside, JSON-ready.

    ``pulses`` as the codes arrive at the qubit (``rates`` [run][2] rad/s, ``durations`` [run] s,
    line and mixer included where the job has them), the target of each qubit as error rows and
    scale, the drive, start states, and the reach of each slider. Pulses of more segments than a
    page can follow are left out; None if no pulse is left, or if a job with more levels than two
    wants something else than one exact gate, which the page does not follow.
    """
    job = comparison.job
    ladder = None
    if job.anharmonicity is not None:
        if job.target.kind != "gate" or job.target.free_axis is not None or job.others:
            return None
        rows = qubit_rows(job.target)
        ladder = {
            "levels": job.levels,
            "anharmonicity": job.anharmonicity,
            "rows": np.stack([rows.real, rows.imag], axis=-1),
        }
    pulses = [_arriving(job, name, pulse) for name, pulse in comparison.pulses.items()]
    pulses = [pulse for pulse in pulses if len(pulse["durations"]) <= _MOST_SEGMENTS]
    if not pulses:
        return None
    target = job.target
    angle = target.z_angle if target.kind == "gate" and target.free_axis is None else None
    unit, unit_name = (MHZ, "MHz") if job.rabi_max >= MHZ else (MHZ / 1e3, "kHz")
    percent = _slider(100 * (_SLIDER_REACH * job.amplitude_tolerance or _SLIDER_DEFAULT))
    reach = _SLIDER_REACH * job.detuning_tolerance or _SLIDER_DEFAULT * job.rabi_max
    has_sandwich = "sandwich" in [pulse["name"] for pulse in pulses]
    straight = path_of(job).straight and ladder is None
    degrees = None if angle is None else float(f"{angle / DEG:.9g}")
    return tables.plain(
        {
            "qubits": [
                {
                    "name": group.name,
                    "measure": group.target.measure,
                    "error_rows": group.target.error_rows,
                    "scale": group.target.scale,
                    "detuning": group.detuning,
                }
                for group in job.groups
            ],
            "ladder": ladder,
            "z_angle_deg": degrees,
            "drive": {
                "rabi_max": job.rabi_max,
                "bound": job.bound,
                "sample_rate": job.sample_rate,
                "largest_code": largest_code(job.dac_bits),
            },
            "detuning_unit": unit,
            "detuning_unit_name": unit_name,
            "amplitude_slider": percent,
            "detuning_slider": _slider(reach / unit),
            "theta_slider": (
                {"min": -180.0, "max": 180.0, "step": _theta_step(degrees)}
                if degrees is not None and has_sandwich and straight
                else None
            ),
            "starts": [{"label": k, "bloch": v} for k, v in start_states(job).items()],
            "pulses": pulses,
        }
    )


def _arriving(job: Job, name: str, pulse: Pulse) -> dict:
    rates, durations = arriving(job, pulse)
    return {"name": name, "rates": rates, "durations": durations}


def _slider(reach: float) -> dict:
    """Symmetric, a hundred steps to either side, with two digits at the end."""
    end = float(f"{reach:.2g}")
    return {"min": -end, "max": end, "step": float(f"{end / 100:.6g}")}


def _theta_step(degrees: float) -> float:
    """One degree, unless the job's own angle would then fall between two steps."""
    return 1.0 if float(degrees).is_integer() else 0.1 if (10 * degrees).is_integer() else 0.01
