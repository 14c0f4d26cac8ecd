"""The report in a real browser: quiet, alone, usable by keyboard, and right to the last digit."""

import re
from pathlib import Path

import numpy as np
import pytest
from browser import CHROMIUM, DRIVER, KEYS, browser
from report_case import LINE_AND_NEIGHBOR, make_case

from shaper.composite import place, sandwich
from shaper.evidence.levels import level_infidelity, qubit_columns
from shaper.evidence.tables import path_table
from shaper.figures.discs import on_disc
from shaper.job import parse_job
from shaper.physics.propagate import propagate
from shaper.rotation import about_z, bloch_matrix
from shaper.store import load_waveform, save_waveform
from shaper.target import Target, infidelity
from shaper.units import DEG, MHZ
from shaper.wiring import arriving
from shaper.workflow.pictures import START_STATES
from shaper.workflow.report import make_report

pytestmark = pytest.mark.skipif(
    CHROMIUM is None or DRIVER is None, reason="no chromium and chromedriver on this machine"
)

AXE = Path(__file__).parent / "node_modules" / "axe-core" / "axe.min.js"
SETTINGS = 50
FOUR_DECIMALS = 5.1e-5  # how finely the page writes its points
SAME = {"rel": 1e-9, "abs": 1e-15}  # double precision in both; below 1e-15 only round-off is left


@pytest.fixture(scope="module")
def chromium():
    with browser() as session:
        yield session


@pytest.fixture(scope="module", params=["circle", "box"])
def case(request, tmp_path_factory):
    folder = tmp_path_factory.mktemp("page")
    save_waveform(folder / "a.h5", make_case(request.param))
    waveform = load_waveform(folder / "a.h5")
    page = folder / "a.html"
    page.write_text(make_report(waveform), encoding="utf-8")
    return waveform, page


def test_opens_without_a_word_and_asks_nobody(chromium, case):
    chromium.console(), chromium.requests()
    chromium.open(case[1])
    assert [entry["message"] for entry in chromium.console()] == []
    assert {url.split(":")[0] for url in chromium.requests()} <= {"file", "data"}
    # the guard itself: the policy of the page stops a request that a script tries to make
    stopped = chromium.run_async(
        "const done = arguments[0];"
        "fetch('http://127.0.0.1:9/').then(() => done('sent'), () => done('stopped'))"
    )
    assert stopped == "stopped"
    assert any("Content Security Policy" in entry["message"] for entry in chromium.console())


def walk(chromium, rng, name):
    """Moves one slider by random keys; returns where it stands."""
    keys = rng.choice(["PageUp", "PageDown", "Left", "Right", "Up", "Down"], rng.integers(1, 9))
    if rng.random() < 0.1:
        keys = [*keys, rng.choice(["Home", "End"])]
    chromium.type(f"#{name}", "".join(KEYS[key] for key in keys))
    return float(chromium.run("return document.getElementById(arguments[0]).value", name))


def test_sliders_by_keyboard_show_what_python_computes(chromium, case, rng):
    waveform, page = case
    job = parse_job(waveform.job_text)
    chromium.open(page)
    seen = set()
    for _ in range(SETTINGS):
        eps = walk(chromium, rng, "amplitude") / 100
        delta = job.detuning + walk(chromium, rng, "detuning") * MHZ
        theta = walk(chromium, rng, "theta") * DEG
        shown = [float(chromium.text(f"#{side}-digits")) for side in ("first", "second")]
        first = infidelity(propagate(*waveform.pulses["shaped"].played, eps, delta), job.target)
        target = Target(about_z(theta))
        baseline = place(sandwich(target, job.bound), job)
        second = infidelity(propagate(*baseline.played, eps, delta), target)
        assert shown[0] == pytest.approx(float(first), **SAME), (eps, delta)
        assert shown[1] == pytest.approx(float(second), **SAME), (eps, delta, theta)
        seen.add((eps, delta, theta))
    assert len(seen) > SETTINGS * 0.9  # the keys did move the sliders


def test_behind_a_line_the_panel_shows_what_arrives_at_each_qubit(chromium, tmp_path, rng):
    case = make_case(more=LINE_AND_NEIGHBOR)
    job = parse_job(case.job_text)
    (tmp_path / "a.html").write_text(make_report(case), encoding="utf-8")
    chromium.open(tmp_path / "a.html")
    assert chromium.run("return document.getElementById('theta')") is None  # not through a line
    drive, durations = arriving(job, case.pulses["shaped"])
    assert len(drive) > job.slices
    for index, group in enumerate(job.groups):
        choose(chromium, "qubit", index)
        eps = walk(chromium, rng, "amplitude") / 100
        delta = group.detuning + walk(chromium, rng, "detuning") * MHZ
        wanted = infidelity(propagate(drive, durations, eps, delta), group.target)
        assert float(chromium.text("#first-digits")) == pytest.approx(float(wanted), **SAME)


def test_on_a_ladder_the_panel_counts_leakage(chromium, tmp_path, rng):
    case = make_case(target='gate = "x"\nangle_deg = 90.0', anharmonicity_MHz=-210.0)
    job = parse_job(case.job_text)
    (tmp_path / "a.html").write_text(make_report(case), encoding="utf-8")
    chromium.open(tmp_path / "a.html")
    for _ in range(5):
        eps = walk(chromium, rng, "amplitude") / 100
        delta = job.detuning + walk(chromium, rng, "detuning") * MHZ
        for side, name in (("first", "shaped"), ("second", "sandwich")):
            errors = np.array([eps]), np.array([delta])
            segments = case.pulses[name].played
            wanted = level_infidelity(*segments, job, *errors)[0]
            assert float(chromium.text(f"#{side}-digits")) == pytest.approx(wanted, **SAME)
    state = qubit_columns(*case.pulses["sandwich"].played, job, *errors)[0, :2, 0]  # from |0>
    choose(chromium, "start", list(START_STATES).index("|0⟩"))
    a, b = state / np.linalg.norm(state)
    bloch = [2 * (a.conj() * b).real, 2 * (a.conj() * b).imag, abs(a) ** 2 - abs(b) ** 2]
    shown = chromium.text("#second-end").strip("()").replace("−", "-").split(",")
    np.testing.assert_allclose([float(part) for part in shown], bloch, atol=5.1e-4)


def test_the_panel_starts_with_the_pulses_of_the_file(chromium, case):
    waveform, page = case
    chromium.open(page)
    for side, name in (("first", "shaped"), ("second", "sandwich")):
        assert chromium.text(f"#{side}-name") == name
        stored = waveform.scores[name].dac
        assert float(chromium.text(f"#{side}-digits")) == pytest.approx(stored, **SAME)


def test_the_end_of_the_way_is_the_rotated_start(chromium, case):
    waveform, page = case
    chromium.open(page)
    chromium.type("#amplitude", KEYS["PageUp"])
    eps = float(chromium.run("return document.getElementById('amplitude').value")) / 100
    assert eps > 0
    q = propagate(*waveform.pulses["shaped"].played, eps, parse_job(waveform.job_text).detuning)
    for index, start in enumerate(START_STATES.values()):
        choose(chromium, "start", index)
        shown = chromium.text("#first-end").strip("()").replace("−", "-")
        np.testing.assert_allclose(
            [float(part) for part in shown.split(",")], bloch_matrix(q) @ start, atol=5.1e-4
        )
    ways = chromium.run(
        "return [...document.querySelectorAll('.way')].map(p => p.getAttribute('d').length)"
    )
    assert len(ways) == 4 and max(ways) > 100


def test_the_drawn_way_is_the_projected_path(chromium, case):
    waveform, page = case
    chromium.open(page)
    detuning = parse_job(waveform.job_text).detuning
    pulse = {"shaped": waveform.pulses["shaped"]}
    for index, (label, start) in enumerate(START_STATES.items()):
        choose(chromium, "start", index)
        path = path_table(pulse, {label: start}, 0.0, detuning)["shaped"][label]["bloch"]
        for half, sign in (("north", 1), ("south", -1)):
            drawn = chromium.run(
                "return document.querySelector(arguments[0] + ' .way').getAttribute('d')",
                f"#first-{half}",
            )
            points = [[float(c) for c in p.split()] for p in re.split("[ML]", drawn)[1:]]
            wanted = on_disc(path[sign * path[:, 2] >= -1e-9], north=sign > 0) * [1, -1]  # y is up
            np.testing.assert_allclose(np.reshape(points, (-1, 2)), wanted, atol=FOUR_DECIMALS)
            mark = chromium.run(
                "const c = document.querySelector(arguments[0] + ' .start');"
                "return c && [c.getAttribute('cx'), c.getAttribute('cy')].map(Number)",
                f"#first-{half}",
            )
            if sign * start[2] < 0:
                assert mark is None
            else:
                np.testing.assert_allclose(mark, on_disc(np.array(start), sign > 0) * [1, -1])


def choose(chromium, control, index):
    """Picks an entry of a list."""
    chromium.run(
        "const s = document.getElementById(arguments[0]); s.value = arguments[1];"
        "s.dispatchEvent(new Event('input'))",
        control,
        str(index),
    )


def test_reset_and_the_other_pulse(chromium, case):
    waveform, page = case
    chromium.open(page)
    chromium.type("#detuning", KEYS["End"])
    chromium.type("#theta", KEYS["Home"])
    assert chromium.text("#second-name") == "sandwich, z(-180)"
    chromium.type("#reset", " ")
    assert chromium.text("#second-name") == "sandwich"
    chromium.type("#other", KEYS["Down"])
    assert chromium.text("#second-name") == "bb1"
    assert chromium.run("return document.getElementById('theta').disabled")
    stored = waveform.scores["bb1"].dac
    assert float(chromium.text("#second-digits")) == pytest.approx(stored, **SAME)


def test_everything_is_reached_by_the_tab_key(chromium, case):
    chromium.open(case[1])
    reached = []
    for _ in range(40):
        chromium.press(KEYS["Tab"])
        reached.append(chromium.run("return document.activeElement.id"))
    for name in ("amplitude", "detuning", "theta", "start", "other", "reset"):
        assert name in reached
    assert chromium.run(
        "return document.getElementById('amplitude').ariaValueText "
        "|| document.getElementById('amplitude').getAttribute('aria-valuetext')"
    ).endswith("%")


@pytest.mark.parametrize("scheme", ["light", "dark"])
@pytest.mark.parametrize("width", [1200, 360])
def test_fits_and_has_no_serious_accessibility_finding(chromium, case, scheme, width):
    chromium.size(width, 800)
    chromium.media(scheme)
    chromium.open(case[1])
    try:
        wide = chromium.run("return document.scrollingElement.scrollWidth")
        assert wide <= width
        paper = chromium.run("return getComputedStyle(document.body).backgroundColor")
        assert (sum(map(int, re.findall(r"\d+", paper)[:3])) < 200) == (scheme == "dark")
        if not AXE.exists():
            pytest.skip("axe-core is not installed: npm install --prefix tests/page")
        chromium.run(AXE.read_text(encoding="utf-8") + "; window.axe = axe")
        found = chromium.run_async(
            "axe.run().then(r => arguments[0](r.violations.map(v => "
            "[v.impact, v.id, v.nodes.map(n => n.html.slice(0, 120))])))"
        )
        assert found == []
    finally:
        chromium.size(1200, 800)
        chromium.media("light")


def test_prints_on_two_pages(chromium, case):
    chromium.open(case[1])
    chromium.media("dark")  # a person who likes it dark still prints on white paper
    pdf = chromium.printed()
    chromium.media("light")
    assert len(re.findall(rb"/Type\s*/Page\b(?!s)", pdf)) == 2
