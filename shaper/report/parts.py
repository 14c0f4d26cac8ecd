"""Small pieces of HTML that page and notebook share."""

from __future__ import annotations

import base64
import re
from collections.abc import Mapping, Sequence
from html import escape

from shaper.figures.style import scaled

COLUMNS = (
    ("duration_ns", "duration", ".6g"),
    ("duration_over_shortest", "times the shortest", ".4g"),
    ("peak_MHz", "peak Rabi", ".4g"),
    ("rms_MHz", "rms Rabi", ".4g"),
    ("infidelity", "infidelity, nominal", ".2e"),
    ("infidelity_mean", "mean over the box", ".2e"),
    ("infidelity_worst", "worst over the box", ".2e"),
    ("infidelity_guaranteed", "guaranteed worst", ".2e"),
    ("infidelity_on_three_levels", "infidelity, nominal, on all levels", ".2e"),
    ("infidelity_worst_on_three_levels", "worst over the box, on all levels", ".2e"),
    ("leakage", "leakage", ".2e"),
    ("seepage", "seepage", ".2e"),
    ("infidelity_worst_with_decay", "worst with T1, T2", ".2e"),
)

_OF_TWO_LEVELS = (
    "infidelity",
    "infidelity_mean",
    "infidelity_worst",
    "infidelity_guaranteed",
)


def pulse_table(rows: Sequence[Mapping]) -> str:
    """One row a pulse, keys as in ``workflow.compare.as_json``; columns without a value are left
    out.
    """
    shown = [column for column in COLUMNS if any(row.get(column[0]) is not None for row in rows)]
    if any(row.get("leakage") is not None for row in rows):  # then two levels mean nothing
        shown = [column for column in shown if column[0] not in _OF_TWO_LEVELS]
    units = {key: _unit(key, rows) for key, _, _ in shown}
    head = "".join(
        f'<th scope="col">{escape(label)}{units[key][1]}</th>' for key, label, _ in shown
    )
    body = "".join(
        f'<tr><th scope="row">{escape(row["name"])}</th>'
        + "".join(f"<td>{number(row.get(key), form, units[key][0])}</td>" for key, _, form in shown)
        + "</tr>"
        for row in rows
    )
    return (
        f'<table><thead><tr><th scope="col">pulse</th>{head}</tr></thead>'
        f"<tbody>{body}</tbody></table>"
    )


def _unit(key: str, rows: Sequence[Mapping]) -> tuple[float, str]:
    """The factor for a column and what its heading says after the name."""
    unit = next((unit for unit in ("ns", "MHz") if key.endswith(f"_{unit}")), None)
    if unit is None:
        return 1.0, ""
    factor, shown = scaled(max(row.get(key) or 0.0 for row in rows), unit)
    return factor, f" ({shown})"


def number(value: float | None, form: str, factor: float = 1.0) -> str:
    """A number as people write it: 2.4 times a power of ten, a true minus, a dash for none."""
    if value is None:
        return "–"
    text = f"{factor * value:{form}}"
    if "e" in text:
        digits, power = text.split("e")
        return f"{digits}&#8239;×&#8239;10<sup>{int(power)}</sup>".replace("-", "−")
    return text.replace("-", "−")


def typeset(text: str) -> str:
    """Text of ours as HTML: powers of ten, plus-minus and micro as people write them.

    >>> typeset("+-2 % in 45 us")
    '±2 % in 45 µs'
    """
    text = escape(text).replace("+-", "±")
    text = re.sub(r"(?<=[0-9] )us\b", "µs", text)
    return re.sub(
        r"([0-9.]+)e([+-][0-9]+)",
        lambda found: f"{found[1]}&#8239;×&#8239;10<sup>{int(found[2])}</sup>".replace("-", "−"),
        text,
    )


def picture_source(svg: bytes) -> str:
    """An SVG file as the address of an image."""
    return "data:image/svg+xml;base64," + base64.b64encode(svg).decode("ascii")
