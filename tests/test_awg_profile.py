"""The instrument profile: what it computes, and what it refuses."""

from pathlib import Path

import pytest
from awg_case import PROFILE, profile

from shaper.awg.profile import parse_profile, read_profile
from shaper.errors import InputError

EXAMPLE = Path(__file__).resolve().parents[1] / "configs" / "instruments" / "alder_awg.toml"


def test_the_example_is_valid():
    made, fingerprint = read_profile(EXAMPLE)
    assert made.outputs.peak_V == 0.25 and len(fingerprint) == 64


@pytest.mark.parametrize(
    "stated, load, volts",
    [
        (50.0, 50.0, 0.25),
        (50.0, "high", 0.5),  # the same setting into a high load doubles
        ("high", "high", 0.25),
        ("high", 50.0, 0.125),
        (50.0, 150.0, 0.375),  # divider: 0.5 V * 150 / 200
        (50.0, 25.0, 0.5 * 25 / 75),
    ],
)
def test_volts_at_the_load(stated, load, volts):
    made = profile(outputs={"stated_for_ohm": stated, "load_ohm": load})
    assert made.outputs.peak_V == pytest.approx(volts, rel=1e-12)


@pytest.mark.parametrize(
    "old, new, words",
    [
        (
            "maker",
            "makr",
            "identity.makr: unknown key, got 'Alder Bench'; nearest known key: maker",
        ),
        ("[memory]", "[memery]", "memery: unknown key"),
        ("bits = 14", "bits = 14.5", "data.bits"),
        ("bits = 14", "bits = 17", "data.bits: expected less than or equal to 16, got 17"),
        ("bits = 14", "", "data.bits: expected this key, got none"),
        ("peak_V = 0.3", "", "limits.peak_V: expected this key"),  # limits have no default
        ("peak_V = 0.3", "peak_V = nan", "limits.peak_V"),
        ("duty_cycle = 1.0", "duty_cycle = 1.1", "limits.duty_cycle"),
        ("load_ohm = 50.0", 'load_ohm = "low"', "outputs.load_ohm: expected 'high'"),
        ("load_ohm = 50.0", "load_ohm = 0.0", "outputs.load_ohm"),
        ("q = 2", "q = 1", "outputs.q: expected another output than i"),
        ("[limits]", "[marker]\n[limits]", "marker.bit: expected one of the 0 free low bits"),
        ("[limits]", "[names]\nprobe = '1X'\n[limits]", "names.probe"),
        ("[limits]", "[names]\nsuffix_q = '_i'\n[limits]", "names.suffix_q"),
        ("[limits]", "[commands]\ndata = 'TRAC'\n[limits]", "commands.data: expected {name}"),
        ("[limits]", "[commands]\ndata = 'TRAC {name'\n[limits]", "commands.data"),
        ("[limits]", "[commands]\ndata = 'TRAC {}'\n[limits]", "commands.data"),
        ("[limits]", "[commands]\ndata = 'T {name.a}'\n[limits]", "commands.data"),
        ("[limits]", "[commands]\noutput_off = ''\n[limits]", "output_off: expected a command"),
        ("[limits]", '[commands]\nclear = "A\\nB"\n[limits]', "clear: expected printable ASCII"),
        ("[limits]", "[limits", "not valid TOML"),
    ],
)
def test_refused(old, new, words):
    with pytest.raises(InputError) as caught:
        parse_profile(PROFILE.replace(old, new, 1), "p.toml")
    assert any(words in line for line in caught.value.lines), caught.value.lines
    assert all(line.startswith("p.toml: ") for line in caught.value.lines)


def test_a_missing_file_and_one_that_is_no_text(tmp_path):
    with pytest.raises(InputError, match="cannot read"):
        read_profile(tmp_path / "none.toml")
    (tmp_path / "p.toml").write_bytes(b"\xff\xfe")
    with pytest.raises(InputError, match="UTF-8"):
        read_profile(tmp_path / "p.toml")
