"""Figures: the tables behind them against plain formulas, the style against its promises."""

import ast
import itertools
import re
from pathlib import Path

import matplotlib
import numpy as np
import pytest
import reference
from matplotlib.colors import to_rgb

import shaper.figures
from shaper import figures, rotation
from shaper.errors import InputError
from shaper.evidence import tables
from shaper.figures import style
from shaper.figures.discs import on_disc
from shaper.pulse import make_pulse
from shaper.target import Target
from shaper.units import MHZ, NS

ROUND_OFF = 1e-12  # products of a few dozen unit quaternions or 2x2 matrices
RABI = 25 * MHZ
TARGET = Target(rotation.about_z(np.pi / 2))


def sandwich():
    """z(90) in three quarter turns of 10 ns at 25 MHz: y(+90), x(90), y(-90)."""
    drive = RABI * np.array([[0.0, 1.0], [1.0, 0.0], [0.0, -1.0]])
    return make_pulse(
        drive,
        [10, 10, 10],
        full_scale=RABI,
        bits=14,
        bound="circle",
        sample_rate=1e9,
        origin="composite",
    )


def wavy(rng, segments=24):
    """A pulse with every angle and many amplitudes."""
    phase, amplitude = rng.uniform(-np.pi, np.pi, segments), rng.uniform(0.2, 1, segments) * RABI
    drive = (amplitude * np.stack([np.cos(phase), np.sin(phase)])).T
    return make_pulse(
        drive,
        [2] * segments,
        full_scale=RABI,
        bits=14,
        bound="circle",
        sample_rate=1e9,
        origin="optimized",
    )


@pytest.fixture
def pulses(rng):
    return {"shaped": wavy(rng), "sandwich": sandwich(), "longer": wavy(rng, 40)}


def all_figures(pulses, theme=style.LIGHT):
    """Every figure once, by name."""
    two = {name: pulses[name] for name in ("shaped", "sandwich")}
    waveforms = {name: tables.waveform_table(pulse) for name, pulse in pulses.items()}
    eps, delta = np.linspace(-0.06, 0.06, 13), np.linspace(-1, 1, 11) * MHZ
    cuts = tables.cut_table(pulses, TARGET, eps, delta)
    box = {"amplitude_tolerance": 0.02, "detuning_tolerance_MHz": 0.5, "theme": theme}
    start = {"|0⟩": (0, 0, 1), "|+⟩": (1, 0, 0)}
    history = {"infidelity": np.array([[0.5, 1e-3, 1e-5], [0.6, 1e-2, np.nan]])}
    curve = {"duration_ns": np.array([30.0, 20.0, 40.0]), "infidelity": np.array([1e-4, 0.1, 0.0])}
    budget = {
        "source": ["detuning", "leakage"],
        "pulses": {"shaped": [1e-5, np.nan], "sandwich": [1e-3, 1e-4]},
    }
    spectrum = tables.spectrum_table(pulses, np.linspace(-300, 300, 201) * MHZ)
    return {
        "waveform": figures.waveform_figure(
            {n: waveforms[n] for n in two}, rabi_max_MHz=25.0, title="z(90)", theme=theme
        ),
        "box": figures.waveform_figure(waveforms, rabi_max_MHz=25.0, bound="box", theme=theme),
        "comparison": figures.comparison_figure(
            waveforms, cuts, rabi_max_MHz=25.0, title="z(90)", **box
        ),
        "cuts": figures.cuts_figure(cuts, **box),
        "maps": figures.map_figure(tables.map_table(pulses, TARGET, eps, delta), **box),
        "history": figures.history_figure(history, stop_infidelity=1e-6, theme=theme),
        "duration": figures.duration_figure(
            curve,
            limit_ns=26.5,
            stop_infidelity=1e-3,
            others={"sandwich": (30.0, 1e-2)},
            theme=theme,
        ),
        "spectrum": figures.spectrum_figure(
            spectrum, band_MHz=200.0, marks_MHz={"second transition": -210.0}, theme=theme
        ),
        "discs": figures.disc_figure(tables.path_table(two, start), theme=theme),
        "budget": figures.budget_figure(budget, theme=theme),
    }


# --- tables -----------------------------------------------------------------------------------


def test_waveform_table_is_what_the_codes_say(pulses):
    pulse = pulses["shaped"]
    table = tables.waveform_table(pulse)
    codes = pulse.codes / (2**13 - 1) * 25.0  # conventions: W = code / (2^(bits-1) - 1) full scale
    sample = np.arange(len(codes)) + 0.5  # the middle of each 1 ns sample
    run = np.searchsorted(table["edge_ns"], sample) - 1
    np.testing.assert_allclose(table["drive_x_MHz"][run], codes[:, 0], rtol=ROUND_OFF)
    np.testing.assert_allclose(table["drive_y_MHz"][run], codes[:, 1], rtol=ROUND_OFF)
    back = table["amplitude_MHz"] * np.exp(1j * np.radians(table["phase_deg"]))
    np.testing.assert_allclose(back.real, table["drive_x_MHz"], atol=ROUND_OFF * 25)
    assert table["edge_ns"][-1] == pytest.approx(len(codes))


def test_phase_of_silence_has_no_value():
    silent = make_pulse(
        [[0.0, 0.0]],
        [4],
        full_scale=RABI,
        bits=14,
        bound="circle",
        sample_rate=1e9,
        origin="optimized",
    )
    table = tables.waveform_table(silent)
    assert np.isnan(table["phase_deg"]).all()
    assert tables.plain(table)["phase_deg"] == [None]


def test_cuts_and_maps_equal_the_plain_implementation(pulses):
    eps, delta, offset = np.array([-0.05, 0.0, 0.03]), np.array([-0.7, 0.4]) * MHZ, 0.2 * MHZ
    cuts = tables.cut_table(pulses, TARGET, eps, delta, offset)
    maps = tables.map_table(pulses, TARGET, eps, delta, offset)
    wanted = reference.rotation((0, 0, 1), np.pi / 2)
    for name, pulse in pulses.items():
        drive, durations = pulse.played

        def plain(e, d, drive=drive, durations=durations):
            actual = reference.propagator(drive, durations, e, d)
            return reference.average_gate_infidelity(actual, wanted)

        np.testing.assert_allclose(
            cuts["pulses"][name]["against_amplitude"],
            [plain(e, offset) for e in eps],
            atol=ROUND_OFF,
        )
        np.testing.assert_allclose(
            cuts["pulses"][name]["against_detuning"],
            [plain(0, offset + d) for d in delta],
            atol=ROUND_OFF,
        )
        np.testing.assert_allclose(
            maps["infidelity"][name],
            [[plain(e, offset + d) for d in delta] for e in eps],
            atol=ROUND_OFF,
        )


def test_paths_end_where_the_plain_implementation_ends(pulses):
    start, eps, delta = (0.6, 0.0, 0.8), 0.03, 0.4 * MHZ
    table = tables.path_table(pulses, {"s": start}, eps, delta)
    paulis = (reference.SX, reference.SY, reference.SZ)
    for name, pulse in pulses.items():
        u = reference.propagator(*pulse.played, eps, delta)
        before = sum(v * s for v, s in zip(start, paulis, strict=True))
        after = [np.trace(s @ u @ before @ u.conj().T).real / 2 for s in paulis]
        path = table[name]["s"]["bloch"]
        np.testing.assert_allclose(path[-1], after, atol=ROUND_OFF)
        np.testing.assert_allclose(np.linalg.norm(path, axis=1), 1, atol=ROUND_OFF)
        steps = np.linalg.norm(np.diff(path, axis=0), axis=1)
        assert steps.max() <= 2 * np.sin(np.radians(1.5)) + ROUND_OFF  # three degrees at most
        assert table[name]["s"]["time_ns"][-1] == pytest.approx(pulse.duration / NS)


def test_spectrum_equals_a_fourier_integral_by_quadrature(pulses):
    frequency = np.array([-80.0, 0.0, 3.0, 45.0]) * MHZ
    table = tables.spectrum_table(pulses, frequency)
    plain = {}
    for name, pulse in pulses.items():
        fine = 400  # midpoints in each 1 ns sample; midpoint rule error ~ (w dt)^2 / 24 < 1e-7
        envelope = np.repeat((pulse.codes @ [1, 1j]) / (2**13 - 1) * RABI, fine)
        time = (np.arange(len(envelope)) + 0.5) / fine * NS
        integral = np.exp(-1j * np.outer(frequency, time)) @ envelope * NS / fine
        plain[name] = np.abs(integral) ** 2
    largest = max(v.max() for v in plain.values())
    for name in pulses:
        shown = 10 ** (table["pulses"][name]["density_dB"] / 10)
        np.testing.assert_allclose(shown, np.maximum(plain[name] / largest, 1e-12), rtol=1e-5)


# --- the projection ---------------------------------------------------------------------------


def test_discs_keep_areas_and_follow_lambert():
    # Lambert 1772 in its usual form: r = sqrt(2) sin(colatitude / 2), equator at r = 1
    colatitude = np.linspace(0, np.pi / 2, 19)
    points = np.stack([np.sin(colatitude), 0 * colatitude, np.cos(colatitude)], axis=-1)
    radius = on_disc(points, north=True)[:, 0]
    np.testing.assert_allclose(radius, np.sqrt(2) * np.sin(colatitude / 2), atol=ROUND_OFF)
    cap = 2 * np.pi * (1 - np.cos(colatitude))  # area of the cap on the sphere
    np.testing.assert_allclose(np.pi * radius**2 * 2, cap, atol=ROUND_OFF)  # one factor: 2


def test_the_two_discs_meet_on_the_equator(rng):
    angle = rng.uniform(0, 2 * np.pi, 20)
    equator = np.stack([np.cos(angle), np.sin(angle), 0 * angle], axis=-1)
    np.testing.assert_array_equal(on_disc(equator, True), on_disc(equator, False))
    np.testing.assert_allclose(on_disc(equator, True), equator[:, :2], atol=ROUND_OFF)


# --- what is drawn ----------------------------------------------------------------------------


def test_every_axis_names_its_unit(pulses):
    unitless = {"Average gate infidelity", "Infidelity that was lowered", "Iteration", ""}
    for name, figure in all_figures(pulses).items():
        labels = {ax.get_xlabel() for ax in figure.axes} | {ax.get_ylabel() for ax in figure.axes}
        for part in (figure, *figure.subfigs):
            labels |= {part.get_supylabel(), part.get_supxlabel()}
        assert len(labels - {""}) > 0 or name == "discs", name
        for label in labels - unitless:
            assert re.search(r"\((%|degrees|[numµ]?s|[kMG]?Hz|dB of the largest)\)", label), label


def test_the_drawn_steps_are_the_table(pulses):
    table = tables.waveform_table(pulses["shaped"])
    figure = figures.waveform_figure({"shaped": table}, rabi_max_MHz=25.0)
    for ax, key in zip(figure.axes, ("drive_x_MHz", "drive_y_MHz", "amplitude_MHz"), strict=False):
        (stairs,) = ax.patches
        values, edges, _ = stairs.get_data()
        np.testing.assert_allclose(values, table[key], rtol=ROUND_OFF)
        np.testing.assert_allclose(edges, table["edge_ns"], rtol=ROUND_OFF)


def test_the_drawn_phase_is_the_table_without_false_jumps(pulses):
    table = tables.waveform_table(pulses["shaped"])
    figure = figures.waveform_figure({"shaped": table}, rabi_max_MHz=25.0)
    time, phase = figure.axes[3].lines[-1].get_data()
    middle = (table["edge_ns"][1:] + table["edge_ns"][:-1]) / 2
    for when, value in zip(middle, table["phase_deg"], strict=True):
        after = np.flatnonzero(time > when)[0]
        assert phase[after] == pytest.approx(value)
        assert phase[after - 1] == pytest.approx(value)
    risers = np.abs(np.diff(phase))
    assert np.nanmax(risers) <= 180
    assert np.isnan(phase).sum() == np.sum(np.abs(np.diff(table["phase_deg"])) > 180)


def test_history_marks_stages_and_the_start_that_won():
    values = np.array([[0.5, 1e-5, np.nan, np.nan], [0.6, 1e-4, 2e-3, 1e-3]])
    figure = figures.history_figure({"infidelity": values, "stage": [0, 0, 1, 1]})
    (ax,) = figure.axes
    (legend,) = figure.legends
    assert [t.get_text() for t in legend.get_texts()][0] == "best start (2 of 2)"
    bold = max(ax.lines, key=lambda line: line.get_linewidth())
    np.testing.assert_array_equal(bold.get_xdata(), [0, 1, np.nan, 2, 3])
    np.testing.assert_array_equal(bold.get_ydata(), [0.6, 1e-4, np.nan, 2e-3, 1e-3])
    assert 1.5 in [line.get_xdata()[0] for line in ax.lines]


def test_slow_drive_is_labeled_in_kilohertz_and_milliseconds():
    slow = make_pulse(
        [[2 * np.pi * 5e3, 0.0]],
        [20_000],
        full_scale=2 * np.pi * 5e3,
        bits=14,
        bound="circle",
        sample_rate=1e6,
        origin="optimized",
    )
    figure = figures.waveform_figure({"shaped": tables.waveform_table(slow)}, rabi_max_MHz=5e-3)
    assert "(kHz)" in figure.axes[0].get_ylabel()
    assert figure.axes[3].get_xlabel() == "Time (ms)"
    assert figure.axes[3].get_xlim()[1] == pytest.approx(20)


def test_files_of_every_kind_and_the_same_bytes_twice(pulses, tmp_path):
    magic = {".png": b"\x89PNG\r\n\x1a\n", ".pdf": b"%PDF-", ".svg": b"<?xml"}
    before = dict(matplotlib.rcParams)
    kinds = itertools.cycle(style.SUFFIXES)
    for name, figure in all_figures(pulses).items():
        for kind in (next(kinds), next(kinds)):
            path = tmp_path / f"{name}{kind}"
            figures.save(figure, path)
            content = path.read_bytes()
            assert content.startswith(magic[kind])
            assert len(content) > 4_000
            if kind == ".svg":
                assert content == figures.encoded(figure, kind)
    assert dict(matplotlib.rcParams) == before
    assert not list(tmp_path.glob(".*"))  # no temporary file stays


def test_dark_figures_are_dark_all_over(pulses):
    cuts = tables.cut_table(pulses, TARGET, np.linspace(-0.1, 0.1, 5), np.linspace(-1, 1, 5) * MHZ)
    svg = figures.encoded(figures.cuts_figure(cuts, theme=style.DARK), ".svg", style.DARK).decode()
    assert style.DARK.paper in svg and style.DARK.series[0] in svg
    assert style.LIGHT.paper not in svg and style.LIGHT.ink not in svg


def test_unknown_suffix_and_missing_folder_are_refused(pulses, tmp_path):
    figure = figures.waveform_figure(
        {"shaped": tables.waveform_table(pulses["shaped"])}, rabi_max_MHz=25.0
    )
    with pytest.raises(InputError, match=r"\.svg, \.pdf, \.png, got \.bmp"):
        figures.save(figure, tmp_path / "a.bmp")
    with pytest.raises(InputError, match="no suffix"):
        figures.save(figure, tmp_path / "a")
    with pytest.raises(InputError, match="cannot write the figure"):
        figures.save(figure, tmp_path / "nowhere" / "a.png")
    assert list(tmp_path.iterdir()) == []


def test_the_old_file_stays_whole_when_writing_fails(pulses, tmp_path, monkeypatch):
    figure = figures.waveform_figure(
        {"shaped": tables.waveform_table(pulses["shaped"])}, rabi_max_MHz=25.0
    )
    path = tmp_path / "a.svg"
    path.write_text("old")

    def no_space(handle):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("os.fsync", no_space)
    with pytest.raises(InputError, match="No space left on device"):
        figures.save(figure, path)
    assert path.read_text() == "old"
    assert list(tmp_path.iterdir()) == [path]


# --- the style --------------------------------------------------------------------------------

# Machado, Oliveira and Fernandes, IEEE Trans. Vis. Comput. Graph. 15, 1291 (2009), severity 1
_EYES = {
    "usual": np.eye(3),
    "protanopia": [
        [0.152286, 1.052583, -0.204868],
        [0.114503, 0.786281, 0.099216],
        [-0.003882, -0.048116, 1.051998],
    ],
    "deuteranopia": [
        [0.367322, 0.860646, -0.227968],
        [0.280085, 0.672501, 0.047413],
        [-0.011820, 0.042940, 0.968881],
    ],
    "tritanopia": [
        [1.255528, -0.076749, -0.178779],
        [-0.078411, 0.930809, 0.147602],
        [0.004733, 0.691367, 0.303900],
    ],
}
_CLEARLY_APART = 25.0  # CIE 1976 color difference; about ten times the just noticeable one


def linear(color):
    c = np.array(to_rgb(color))
    return np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)  # IEC 61966-2-1


def luminance(color):
    return float(linear(color) @ [0.2126, 0.7152, 0.0722])


def contrast(a, b):
    high, low = sorted((luminance(a), luminance(b)), reverse=True)
    return (high + 0.05) / (low + 0.05)  # WCAG 2.2


def lab(color, eye):
    rgb = np.clip(np.asarray(_EYES[eye]) @ linear(color), 0, 1)
    to_xyz = [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    x, y, z = (to_xyz @ rgb) / [0.9505, 1.0, 1.089]
    f = [np.cbrt(t) if t > 216 / 24389 else (24389 / 27 * t + 16) / 116 for t in (x, y, z)]
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


@pytest.mark.parametrize("theme", [style.LIGHT, style.DARK], ids=lambda theme: theme.name)
def test_colors_hold_for_every_eye_and_on_their_paper(theme):
    for color in (*theme.series, theme.mark):
        assert contrast(color, theme.paper) >= 3.0  # WCAG 2.2, 1.4.11: graphics
    for color in (theme.ink, theme.quiet, *theme.series[:3]):
        assert contrast(color, theme.paper) >= 4.5  # 1.4.3: text
    for eye in _EYES:
        for a, b in itertools.combinations(theme.series[:2], 2):
            assert np.linalg.norm(lab(a, eye) - lab(b, eye)) >= _CLEARLY_APART, (a, b, eye)
    steps = style.infidelity_scale(theme)(np.linspace(0, 1, 64))
    assert np.all(np.diff([luminance(tuple(c[:3])) for c in steps]) > 0)


def test_no_two_pulses_look_alike():
    names = ["shaped", "sandwich", *(f"other {k}" for k in range(10))]
    pen = style.strokes(names)
    looks = {(s.color, s.dash, s.marker) for s in pen.values()}
    assert len(looks) == len(names)
    without_color = {(str(s.dash), s.marker) for s in list(pen.values())[:6]}
    assert len(without_color) == 6
    assert style.strokes(["sandwich"])["sandwich"] == pen["sandwich"]


@pytest.mark.parametrize(
    ("value", "text"), [(2.36e-4, "2.4×10⁻⁴"), (1.0, "1.0×10⁰"), (9.96e-13, "1.0×10⁻¹²")]
)
def test_scientific_labels(value, text):
    assert style.scientific(value) == text


def test_only_this_room_knows_matplotlib_and_never_its_global_state():
    for path in Path(shaper.figures.__file__).parent.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            names = [a.name for a in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            assert not any(name.startswith("matplotlib.pyplot") for name in names), path


@pytest.mark.parametrize("value", [0.0, 1.0, 1e-31, np.nan])
def test_extreme_tables_are_drawn_without_a_word(value):
    three = np.full(3, value)
    axis = np.array([-1.0, 0.0, 1.0])
    cut = {"against_amplitude": three, "against_detuning": three}
    cuts = {"amplitude_error": axis / 10, "detuning_MHz": axis, "pulses": {"shaped": cut}}
    maps = {
        "amplitude_error": axis / 10,
        "detuning_MHz": axis,
        "infidelity": {"shaped": np.full((3, 3), value)},
    }
    drawn = [
        figures.cuts_figure(cuts),
        figures.map_figure(maps),
        figures.history_figure({"infidelity": three[None]}),
        figures.duration_figure({"duration_ns": axis + 2, "infidelity": three}),
        figures.budget_figure({"source": ["line", "grid", "decay"], "pulses": {"shaped": three}}),
    ]
    for figure in drawn:
        assert figures.encoded(figure, ".png")


def test_silence_and_a_single_sample_are_drawn():
    silent = make_pulse(
        [[0.0, 0.0]],
        [1],
        full_scale=RABI,
        bits=14,
        bound="circle",
        sample_rate=1e9,
        origin="composite",
    )
    pulses = {"shaped": silent}
    table = {"shaped": tables.waveform_table(silent)}
    cuts = tables.cut_table(pulses, TARGET, [-0.1, 0.1], [-MHZ, MHZ])
    for figure in (
        figures.waveform_figure(table, rabi_max_MHz=25.0),
        figures.comparison_figure(table, cuts, rabi_max_MHz=25.0),
        figures.spectrum_figure(tables.spectrum_table(pulses, [-MHZ, 0.0, MHZ])),
        figures.disc_figure(tables.path_table(pulses, {"|0⟩": (0, 0, 1)})),
    ):
        assert figures.encoded(figure, ".png")
