"""Results that show themselves in a notebook.

``attach`` gives ``Waveform`` and ``Comparison`` their ``_repr_html_``; the package calls it when
one of its public names is first used inside IPython, so that scripts pay nothing for it.
"""

from __future__ import annotations

from html import escape

from shaper.evidence.verdict import sentence
from shaper.pulse import Waveform
from shaper.workflow.compare import Comparison, as_json, compare, picture


def attach() -> None:
    """Let both records show themselves; calling it again changes nothing."""
    Waveform._repr_html_ = waveform_html
    Comparison._repr_html_ = comparison_html


def waveform_html(waveform: Waveform) -> str:
    """Title, how the search ended, the table of all pulses and their waveforms.

    Every figure is computed from the DAC codes, as ``compare`` does.
    """
    comparison = compare(waveform)
    ended = f"{waveform.status}, seed {waveform.seed}, {waveform.created}"
    return f"<p>{escape(ended)}</p>" + comparison_html(comparison)


def comparison_html(comparison: Comparison) -> str:
    """Verdict, the table of all pulses, waveforms and cuts."""
    from shaper.figures import encoded  # matplotlib: only when something is shown
    from shaper.report.parts import picture_source, pulse_table

    job = comparison.job
    source = picture_source(encoded(picture(comparison), ".svg"))
    names = ", ".join(comparison.pulses)
    return (
        f"<p><strong>{escape(job.title or job.target_name)}</strong></p>"
        + f"<p>{escape(sentence(comparison.verdict, job))}</p>"
        + pulse_table(as_json(comparison)["pulses"])
        + f'<img src="{source}" alt="Waveforms and infidelity cuts of {escape(names)}">'
    )
