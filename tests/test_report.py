"""The report page without a browser: whole, closed, escaped, the same bytes twice."""

import base64
import hashlib
import json
import re
from html.parser import HTMLParser

import numpy as np
import pytest
from report_case import make_case

from shaper.cli import main
from shaper.evidence.budget import Budget
from shaper.figures import DARK, LIGHT, budget_figure
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.pulse import Table
from shaper.report.parts import pulse_table, typeset
from shaper.store import save_waveform
from shaper.target import infidelity
from shaper.workflow.compare import as_json, compare, cuts
from shaper.workflow.notebook import attach, comparison_html, waveform_html
from shaper.workflow.pictures import budget_table, duration_table, figure_tables, pictures
from shaper.workflow.report import live_data, make_report
from shaper.workflow.verify import Claim, Verification, with_evidence

ROUND_OFF = 1e-14  # both sides compute the same sum of squares of unit quaternions


class Page(HTMLParser):
    """Tags with attributes, the text of scripts and styles, the ids."""

    def __init__(self, text):
        super().__init__()
        self.tags, self.inner, self._open = [], {"script": [], "style": []}, None
        self.text = ""
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        self._open = tag if tag in self.inner else None
        if self._open:
            self.inner[tag].append("")

    def handle_endtag(self, tag):
        self._open = None

    def handle_data(self, data):
        if self._open:
            self.inner[self._open][-1] += data
        else:
            self.text += data


@pytest.fixture(scope="module")
def page():
    return make_report(make_case())


def test_the_policy_names_exactly_this_script_and_this_style(page):
    parsed = Page(page)
    policy = next(a["content"] for t, a in parsed.tags if a.get("http-equiv"))
    rules = dict(rule.strip().split(" ", 1) for rule in policy.split(";"))
    assert rules.pop("default-src") == "'none'"
    assert rules.pop("img-src") == "data:"
    assert rules.pop("base-uri") == rules.pop("form-action") == "'none'"
    (style,), (data, script) = parsed.inner["style"], parsed.inner["script"]
    for directive, text in (("script-src", script), ("style-src", style)):
        digest = base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
        assert rules.pop(directive) == f"'sha256-{digest}'"
    assert rules == {}
    assert json.loads(data)["pulses"][0]["name"] == "shaped"


def test_nothing_points_outside_and_nothing_is_styled_in_place(page):
    for tag, attributes in Page(page).tags:
        for name in ("src", "href", "srcset", "action", "poster"):
            assert attributes.get(name, "data:").startswith("data:"), (tag, name)
        assert not [name for name in attributes if name == "style" or name.startswith("on")]


@pytest.fixture
def without_pictures(monkeypatch):
    """Drawing takes seconds; where pictures do not matter there are none."""
    monkeypatch.setattr("shaper.workflow.report.pictures", lambda *found: [])


def test_text_of_the_job_is_shown_as_text(page, without_pictures):
    assert "<&>" not in page.split("<script")[0]
    assert "alder-1 <&>" in Page(page).text  # after parsing: as typed
    evil = make_case()
    object.__setattr__(evil, "pulses", {"</script><b>": evil.pulses["shaped"]})
    object.__setattr__(evil, "scores", {"</script><b>": evil.scores["shaped"]})
    assert "</script><b>" not in make_report(evil)


def test_ids_are_unique_and_labels_point_at_controls(page):
    tags = Page(page).tags
    ids = [a["id"] for _, a in tags if "id" in a]
    assert len(ids) == len(set(ids))
    for tag, attributes in tags:
        if tag == "label":
            assert attributes["for"] in ids
        if "aria-labelledby" in attributes:
            assert attributes["aria-labelledby"] in ids
        if tag == "img":
            assert len(attributes["alt"]) > 20


def test_pictures_come_for_both_kinds_of_paper(page):
    tags = Page(page).tags
    light = [a["src"] for t, a in tags if t == "img"]
    dark = [a["srcset"] for t, a in tags if t == "source"]
    assert len(light) == len(dark) == 6
    for sources, theme in ((light, LIGHT), (dark, DARK)):
        for source in sources:
            svg = base64.b64decode(source.split(",")[1]).decode()
            assert svg.startswith("<?xml") and theme.paper in svg and "http" in svg
            assert 'xlink:href="http' not in svg


def test_live_data_holds_what_the_codes_play():
    comparison = compare(make_case())
    data = json.loads(json.dumps(live_data(comparison)))
    (qubit,) = data["qubits"]
    rows, scale = np.array(qubit["error_rows"]), qubit["scale"]
    for stored in data["pulses"]:
        q = propagate(np.array(stored["rates"]), stored["durations"], 0.03, qubit["detuning"])
        pulse = comparison.pulses[stored["name"]]
        here = infidelity(
            propagate(*pulse.played, 0.03, comparison.job.detuning), comparison.job.target
        )
        assert scale * np.sum((rows @ q) ** 2) == pytest.approx(float(here), abs=ROUND_OFF)
    for slider in ("amplitude_slider", "detuning_slider"):
        size = data[slider]
        assert size["min"] == -size["max"]
        assert size["max"] / size["step"] == pytest.approx(100)
    box = comparison.job
    assert data["amplitude_slider"]["max"] >= 100 * box.amplitude_tolerance


@pytest.mark.parametrize(
    ("target", "has_theta"),
    [
        ('gate = "z"\nangle_deg = 37.5', True),
        ('gate = "hadamard"', False),
        ('gate = "z"\nangle_deg = 90.0\nequivalence = "up_to_final_z"', False),
        ("from_state = [0.0, 0.0, 1.0]\nto_state = [1.0, 0.0, 0.0]", False),
    ],
)
def test_every_kind_of_target_has_a_page(target, has_theta, without_pictures):
    comparison = compare(make_case(target=target))
    data = live_data(comparison)
    assert (data["theta_slider"] is not None) == has_theta
    if has_theta:  # the job's own angle must be one the slider can stand at
        steps = (data["z_angle_deg"] + 180) / data["theta_slider"]["step"]
        assert steps == pytest.approx(round(steps), abs=1e-6)
    parsed = Page(make_report(make_case(target=target)))
    assert any(a.get("id") == "live" for _, a in parsed.tags)


def test_a_state_target_is_drawn_too():
    target = "from_state = [0.0, 0.0, 1.0]\nto_state = [1.0, 0.0, 0.0]"
    case = make_case(target=target)
    start = live_data(compare(case))["starts"][0]
    assert start["label"] == "from_state"
    np.testing.assert_allclose(start["bloch"], (0, 0, 1), atol=ROUND_OFF)
    text = make_report(case)
    assert ">Over both errors<" in text
    assert "One minus transfer, recomputed" in text
    assert "Average gate infidelity" not in text


def test_a_file_with_one_pulse_and_no_history_has_a_page():
    case = make_case()
    for name in ("pulses", "scores"):
        object.__setattr__(case, name, {"shaped": getattr(case, name)["shaped"]})
    object.__setattr__(case, "history", {})
    text = make_report(case)
    assert ">Search<" not in text


def test_the_stored_budget_is_drawn_and_the_second_opinion_told(without_pictures):
    case = make_case()
    assert budget_table(case) is None
    assert "verified</dt><dd>not yet" in make_report(case)
    claims = (Claim("codes, worst", 1e-3, 2e-3, False),)
    found = {
        "shaped": Verification((), Budget({"line": 1e-5, "decay": 2e-4}, 3e-4, 0.0, None, {})),
        "bb1": Verification(claims, Budget({"line": 3e-5, "leakage": 1e-6}, 5e-5, 0.0, 0.0, {})),
    }
    checked = with_evidence(case, found)
    table = budget_table(checked)
    assert table["source"] == ["line", "leakage", "decay", "all together"]
    np.testing.assert_array_equal(table["pulses"]["shaped"], [1e-5, np.nan, 2e-4, 3e-4])
    np.testing.assert_array_equal(table["pulses"]["bb1"], [3e-5, 1e-6, np.nan, 5e-5])
    assert "NOT CONFIRMED" in make_report(checked)
    del found["bb1"]
    assert "found again" in make_report(with_evidence(case, found))
    budget_figure(table)


def test_a_job_with_levels_shows_what_all_levels_make_of_it(without_pictures):
    case = make_case(anharmonicity_MHz=-210.0)
    comparison = compare(case)
    assert "discs" not in figure_tables(case, comparison)
    table = cuts(comparison)
    for row in comparison.rows:
        middle = table["pulses"][row.name]["against_amplitude"][len(table["amplitude_error"]) // 2]
        assert middle == pytest.approx(row.levels.nominal, rel=1e-9)
        assert abs(row.nominal - row.levels.nominal) > 1e-5  # not what two levels give
    text = make_report(case)
    head = re.findall(r'<th scope="col">(.*?)</th>', text)
    assert {"leakage", "seepage"} <= set(head) and "infidelity, nominal" not in head
    assert "on 3 levels" in text
    free = 'gate = "x"\nangle_deg = 90.0\nequivalence = "up_to_final_z"'
    assert live_data(compare(make_case(target=free, anharmonicity_MHz=-210.0))) is None


def test_pulses_too_long_for_a_page_have_no_panel(without_pictures, monkeypatch):
    monkeypatch.setattr("shaper.workflow.report._MOST_SEGMENTS", 10)
    names = [pulse["name"] for pulse in live_data(compare(make_case()))["pulses"]]
    assert names == ["sandwich", "bb1"]
    monkeypatch.setattr("shaper.workflow.report._MOST_SEGMENTS", 0)
    text = make_report(make_case())
    assert "<script" not in text and "script-src 'none'" in text
    assert "No live panel" in text


def test_the_curve_of_the_shortest_duration_is_drawn():
    case = make_case()
    axes = ("duration_s",)
    case.history["duration_s"] = Table(np.array([3e-8, 4e-8]), axes, "s", "tried")
    case.history["best_infidelity"] = Table(np.array([1e-3, 1e-5]), axes, "1", "best")
    table = duration_table(case)
    np.testing.assert_allclose(table["duration_ns"], [30, 40])
    drawn = pictures(figure_tables(case, compare(case)), parse_job(case.job_text), 2.6e-8)
    assert "Shortest duration" in [picture.heading for picture in drawn]


def test_the_verdict_stands_first(page):
    comparison = compare(make_case())
    said = as_json(comparison)["verdict"]["sentence"]
    text = Page(page).text
    subject = said.split(" ")[0]
    assert text.index(f"{subject} wins") < text.index("All pulses on one grid")


def test_numbers_are_set_as_people_write_them():
    assert typeset("8.16e-04 = +-2 % <b>, 45 us") == (
        "8.16&#8239;×&#8239;10<sup>−4</sup> = ±2 % &lt;b&gt;, 45 µs"
    )
    assert typeset("1.5e+03 usual") == "1.5&#8239;×&#8239;10<sup>3</sup> usual"


def test_composites_of_the_library_can_stand_beside(without_pictures):
    text = make_report(make_case(), against=["CORPSE"])
    assert [row for row in re.findall(r'<th scope="row">(.*?)</th>', text)] == [
        "shaped",
        "sandwich",
        "bb1",
        "CORPSE",
    ]


def test_the_table_is_the_comparison(page):
    comparison = compare(make_case())
    cells = re.findall(r"<td>(.*?)</td>", page)
    digits, power = f"{comparison.rows[0].worst:.2e}".split("e")
    assert any(
        cell.startswith(digits) and f"<sup>{int(power)}</sup>".replace("-", "−") in cell
        for cell in cells
    )
    assert "62" in cells  # ns
    slow = [{"name": "a", "duration_ns": 1e5, "peak_MHz": 0.02}]
    assert "duration (µs)" in pulse_table(slow) and "<td>100</td>" in pulse_table(slow)
    assert "peak Rabi (kHz)" in pulse_table(slow) and "<td>20</td>" in pulse_table(slow)


def test_the_command_writes_the_same_page_again(tmp_path, capsys, page):
    save_waveform(tmp_path / "a.h5", make_case())
    assert main(["report", str(tmp_path / "a.h5")]) == 0
    assert capsys.readouterr().out.strip() == str(tmp_path / "a.html")
    assert (tmp_path / "a.html").read_text(encoding="utf-8") == page


def test_the_command_prints_or_fails_clearly(tmp_path, capsys, without_pictures):
    save_waveform(tmp_path / "a.h5", make_case())
    assert main(["report", str(tmp_path / "a.h5"), "--output", "-"]) == 0
    assert capsys.readouterr().out.startswith("<!doctype html>")
    assert main(["report", str(tmp_path / "a.h5"), "--json"]) == 0
    data = json.loads(capsys.readouterr().out)
    assert set(data) == {"comparison", "check", "figures", "live"}
    assert set(data["figures"]) == {"waveform", "cuts", "map", "spectrum", "discs", "history"}
    assert data["figures"]["history"]["infidelity"][1][3] is None  # a start that had ended
    assert main(["report", str(tmp_path / "none.h5")]) in (1, 2)
    assert "none.h5" in capsys.readouterr().err
    assert [p.name for p in tmp_path.iterdir()] == ["a.h5"]


def test_records_show_themselves_in_a_notebook():
    case = make_case()
    comparison = compare(case)
    attach()
    for shown in (case._repr_html_(), comparison._repr_html_()):
        parsed = Page(shown)
        assert [t for t, _ in parsed.tags].count("tr") == 4
        assert any(a.get("src", "").startswith("data:image/svg+xml") for _, a in parsed.tags)
        assert "<&>" not in shown
    assert waveform_html(case).endswith(comparison_html(comparison))
    assert parse_job(case.job_text).title == case.title
