"""Builds the page from plain data. No numbers are made here, no file is read but our own three."""

from __future__ import annotations

import base64
import hashlib
import json
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from html import escape
from importlib.resources import files

from shaper.figures.style import DARK, LIGHT, Theme
from shaper.report.parts import picture_source, pulse_table, typeset

_FEW = 6  # pulses whose sources are shown at once
_PIXELS_PER_POINT = 1.6  # on screen: text of a figure as large as the captions


@dataclass(frozen=True)
class Picture:
    """One figure of the report.

    Attributes:
        heading: above it.
        caption: what it shows and how to read it.
        alternative: what a person who cannot see it should know, in one or two sentences.
        light, dark: SVG files, for both kinds of paper.
        paper_only: shown in print only, because the page has a live form of it.
    """

    heading: str
    caption: str
    alternative: str
    light: bytes
    dark: bytes
    paper_only: bool = False


@dataclass(frozen=True)
class Report:
    """Everything the page says.

    Attributes:
        title: of the job, or the file's name.
        verdict: one sentence.
        rows: one dict a pulse, keys as in ``workflow.compare.as_json``.
        facts: term and description, in order: what was asked.
        pictures: in order.
        measure: what the infidelities are.
        live: the data of the live panel, see ``workflow.report.live_data``; None for no panel.
        cautions: sentences.
        job_text: TOML.
        provenance: term and description, in order.
    """

    title: str
    verdict: str
    rows: Sequence[Mapping]
    facts: Mapping[str, str]
    pictures: Sequence[Picture]
    measure: str
    live: Mapping | None
    cautions: Sequence[str]
    job_text: str
    provenance: Mapping[str, str]


def report_page(report: Report) -> str:
    """The page, complete: styles, script, data and pictures inside, nothing fetched.

    The content policy in its head allows this one script and this one style, by their hashes,
    pictures from within the page, and no connection at all.
    """
    style = _colors() + _own("page.css")
    script = _own("page.js") if report.live else ""
    allowed = f"'{_hash(script)}'" if script else "'none'"
    policy = (
        "default-src 'none'; "
        f"script-src {allowed}; style-src '{_hash(style)}'; "
        "img-src data:; base-uri 'none'; form-action 'none'"
    )
    pictures = "\n".join(_picture(picture) for picture in report.pictures)
    return f"""<!doctype html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="{policy}">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta name="color-scheme" content="light dark">
<title>{escape(report.title)}</title>
<style>{style}</style>
</head>
<body>
<header>
<p class="kind">Waveform report</p>
<h1>{escape(report.title)}</h1>
{_verdict(report.verdict)}
</header>
<main>
{_table(report)}
{_live(report.live)}
<div class="pictures">
{pictures}
</div>
<section aria-labelledby="cautions"><h2 id="cautions">Cautions</h2>
<ul class="cautions">{"".join(f"<li>{escape(text)}</li>" for text in report.cautions)}</ul>
</section>
<section aria-labelledby="provenance"><h2 id="provenance">Where it comes from</h2>
{_terms(report.provenance)}
</section>
<section aria-labelledby="job"><h2 id="job">The job</h2>
<pre tabindex="0" role="region" aria-label="Text of the job file">{escape(report.job_text)}</pre>
</section>
</main>
<footer>This page holds all its data and asks the network for nothing.</footer>
{_scripts(report.live, script)}</body>
</html>
"""


def _scripts(live: Mapping | None, script: str) -> str:
    if not live:
        return ""
    return f"""<script type="application/json" id="live-data">{_data(live)}</script>
<script>{script}</script>
"""


def _verdict(text: str) -> str:
    """The sentence; what follows its first semicolon is set smaller, the answer stands out."""
    answer, semicolon, rest = text.partition("; ")
    small = f'<span class="rest">; {typeset(rest)}</span>' if semicolon else ""
    return f'<p class="verdict">{typeset(answer)}{small}</p>'


def _own(name: str) -> str:
    return files("shaper.report").joinpath(name).read_text(encoding="utf-8")


def _hash(text: str) -> str:
    digest = hashlib.sha256(text.encode("utf-8")).digest()
    return "sha256-" + base64.b64encode(digest).decode("ascii")


def _data(value: Mapping) -> str:
    """JSON that cannot end the element it stands in."""
    return json.dumps(value, ensure_ascii=True, allow_nan=False).replace("<", "\\u003c")


def _colors() -> str:
    """The figures' own colors, so that page and pictures are of one piece."""

    def variables(theme: Theme) -> str:
        colors = {
            "paper": theme.paper,
            "ink": theme.ink,
            "quiet": theme.quiet,
            "rule": theme.rule,
            "first": theme.series[0],
            "second": theme.series[1],
        }
        return "".join(f"--{name}: {color}; " for name, color in colors.items())

    return (
        f":root {{ color-scheme: light dark; {variables(LIGHT)}}}\n"
        f"@media screen and (prefers-color-scheme: dark) {{ :root {{ {variables(DARK)}}} }}\n"
    )


def _table(report: Report) -> str:
    sources = "".join(
        f"<li>{escape(row['name'])}: {escape(row['source'])}</li>"
        for row in report.rows
        if row.get("source")
    )
    return f"""<section aria-labelledby="table"><h2 id="table">All pulses on one grid</h2>
{_terms(report.facts)}
<div class="wide" tabindex="0" role="region" aria-label="Table of all pulses">
{pulse_table(report.rows)}
</div>
<p class="note">{escape(report.measure)}, recomputed from the DAC codes; the
box is the tolerance of the job.</p>
<details class="note"{" open" if len(report.rows) <= _FEW else ""}><summary>Sources</summary>
<ul class="sources">{sources}</ul></details>
</section>"""


def _terms(terms: Mapping[str, str]) -> str:
    pairs = "".join(f"<dt>{escape(k)}</dt><dd>{escape(v)}</dd>" for k, v in terms.items())
    return f"<dl>{pairs}</dl>"


def _picture(picture: Picture) -> str:
    light, dark = picture_source(picture.light), picture_source(picture.dark)
    kind = ' class="paper-only"' if picture.paper_only else ""
    heading = escape(picture.heading)
    width = round(_PIXELS_PER_POINT * _points_wide(picture.light))
    return f"""<section{kind}><h2>{heading}</h2>
<figure><div class="wide" tabindex="0" role="region" aria-label="{heading}"><picture>
<source media="screen and (prefers-color-scheme: dark)" srcset="{dark}">
<img src="{light}" width="{width}" alt="{escape(picture.alternative)}"></picture></div>
<figcaption>{escape(picture.caption)}</figcaption></figure></section>"""


def _points_wide(svg: bytes) -> float:
    """Width that an SVG of ours states in its head, in points."""
    found = re.search(rb'<svg [^>]*?width="([0-9.]+)pt"', svg)
    if found is None:
        raise ValueError("picture: expected an SVG with its width in points")
    return float(found.group(1))


def _live(live: Mapping | None) -> str:
    """The panel; hidden until the script has drawn it."""
    if live is None:
        return (
            '<p class="note">No live panel: it follows exact gates and pulses of moderate length '
            "only.</p>"
        )
    options = "".join(
        f'<option value="{k}">{escape(pulse["name"])}</option>'
        for k, pulse in enumerate(live["pulses"])
        if k > 0 or len(live["pulses"]) == 1
    )
    starts = "".join(
        f'<option value="{k}">{escape(start["label"])}</option>'
        for k, start in enumerate(live["starts"])
    )
    sliders = [("amplitude", "Amplitude error", live["amplitude_slider"], 0.0)]
    sliders.append(("detuning", "Detuning", live["detuning_slider"], 0.0))
    if live["theta_slider"] is not None:
        angle = live["z_angle_deg"]
        sliders.append(("theta", "θ of the sandwich", live["theta_slider"], angle))
    controls = "".join(
        f'<div><label for="{name}"><span>{label}</span> <output id="{name}-shown" for="{name}">'
        f'</output></label><input type="range" id="{name}" min="{size["min"]!r}" '
        f'max="{size["max"]!r}" step="{size["step"]!r}" value="{value!r}" autocomplete="off"></div>'
        for name, label, size, value in sliders
    )
    qubits = "".join(
        f'<option value="{k}">{escape(qubit["name"])}</option>'
        for k, qubit in enumerate(live["qubits"])
    )
    if len(live["qubits"]) > 1:
        controls += (
            f'<div><label for="qubit">Qubit</label><select id="qubit" autocomplete="off">{qubits}'
            "</select></div>"
        )
    levels = live["ladder"]["levels"] if live["ladder"] else 2
    sides = "".join(_side(name) for name in ("first", "second"))
    return f"""<section id="live" class="screen-only" aria-labelledby="live-heading" hidden>
<h2 id="live-heading">Try an error</h2>
<p>Move the errors and see what they do to the Bloch vector and to the gate. Computed in this page
from the DAC codes, on {levels} levels and without decay. Circle: start, cross: end.</p>
<div class="controls">{controls}
<div><label for="start">Start state</label><select id="start" autocomplete="off">{starts}</select>
</div>
<div><label for="other">Compare with</label><select id="other" autocomplete="off">{options}</select>
</div>
<div><button type="button" id="reset">No errors</button></div>
</div>
<div class="sides">{sides}</div>
</section>
<noscript><p class="note">The live panel needs the script inside this page; everything else is
here without it.</p></noscript>"""


def _side(name: str) -> str:
    discs = "".join(
        f'<figure><svg id="{name}-{half}" viewBox="-1.25 -1.25 2.5 2.5" role="img" '
        f'aria-label="Way of the Bloch vector, {half} hemisphere"></svg>'
        f"<figcaption>{half}, |{ket}⟩ in the middle</figcaption></figure>"
        for half, ket in (("north", 0), ("south", 1))
    )
    return f"""<div class="side {name}"><h3 id="{name}-name"></h3>
<p class="value"><output id="{name}-infidelity" aria-label="Infidelity"></output></p>
<p class="note"><span class="measure"></span>; all digits:
<span class="digits" id="{name}-digits"></span><br>
end at <span class="digits" id="{name}-end"></span></p>
<div class="discs">{discs}</div></div>"""
