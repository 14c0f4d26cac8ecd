"""``shaper load --to``: selections, sets from several files, checklist, dry run, exit codes."""

import json
from dataclasses import replace

import numpy as np
import pytest
import stand_in
from awg_case import PROFILE, waveform

from shaper.awg.record import read_record
from shaper.cli import main
from shaper.store import save_waveform


@pytest.fixture
def folder(tmp_path, rng, monkeypatch):
    monkeypatch.chdir(tmp_path)
    save_waveform("z90.h5", waveform(rng))
    save_waveform("hadamard.h5", waveform(rng))
    (tmp_path / "p.toml").write_text(PROFILE)
    return tmp_path


@pytest.fixture
def bench():
    with stand_in.running() as (generator, address):
        yield generator, address


def load(*words):
    return main(["load", *words, "--profile", "p.toml"])


@pytest.mark.parametrize(
    "words, names",
    [
        (["z90.h5"], ["SHAPED", "SANDWICH"]),
        (["z90.h5", "--pulse", "sandwich"], ["SANDWICH"]),
        (["z90.h5", "--pulse", "shaped=Z90"], ["Z90"]),
        (["z90.h5:shaped"], ["SHAPED"]),
        (["z90.h5:shaped=Z90", "z90.h5:sandwich=Z90B"], ["Z90", "Z90B"]),
        (["z90.h5", "hadamard.h5", "--pulse", "shaped"], ["Z90", "HADAMARD"]),
        (["z90.h5:shaped", "hadamard.h5:sandwich=HB", "--prefix", "A1_"], ["A1_Z90", "A1_HB"]),
    ],
)
def test_selections(folder, bench, capsys, words, names):
    generator, address = bench
    assert load(*words, "--to", address, "--json") == 0
    record = json.loads(capsys.readouterr().out)
    wanted = [name + part for name in names for part in ("_I", "_Q")]
    assert [trace["name"] for trace in record["traces"]] == wanted
    assert sorted(generator.traces) == sorted(wanted)
    assert read_record(record["record"])["status"] == "done"


def test_the_checklist_comes_before_the_first_load_of_a_day(folder, bench, capsys):
    generator, address = bench
    marks = []
    for _ in range(2):
        assert load("z90.h5", "--to", address, "--replace") == 0
        marks.append(capsys.readouterr().err.count("[ ]"))
    assert marks[0] >= 5 and marks[1] == 0
    for path in folder.glob("*.load.json"):
        document = json.loads(path.read_text())
        path.write_text(json.dumps(document | {"started": "2026-01-01T00:00:00Z"}))
    assert load("z90.h5", "--to", address, "--replace") == 0
    assert capsys.readouterr().err.count("[ ]") == marks[0]


def test_dry_run_opens_nothing_and_writes_nothing(folder, capsys, monkeypatch):
    import socket

    def forbidden(*args, **kwargs):
        raise AssertionError("a link was opened")

    monkeypatch.setattr(socket, "create_connection", forbidden)
    before = sorted(folder.iterdir())
    assert load("z90.h5", "--dry-run") == 0
    out = capsys.readouterr().out
    assert "TRACe:DATA SHAPED_I,#3128<128 bytes>;*OPC?" in out
    assert "no link was opened" in out and "mean power" in out
    assert load("z90.h5", "--dry-run", "--json") == 0
    document = json.loads(capsys.readouterr().out)
    assert document["total_bytes"] == 2 * 128 + 2 * 168  # 80 samples and one zero, to 84
    assert all(len(message["sha256"]) == 64 for message in document["messages"])
    assert sorted(folder.iterdir()) == before


def test_scale_states_the_rotation(folder, bench, capsys):
    generator, address = bench
    turned = []
    for scale in ("1", "0.05"):
        words = ["z90.h5:shaped", "--to", address, "--scale", scale, "--replace", "--json"]
        assert load(*words) == 0
        [entry] = json.loads(capsys.readouterr().out)["pulses"]
        turned.append(entry)
    assert turned[1]["exposure"]["peak_vector_V"] < 0.0501 * 0.25 + 1e-4
    assert turned[1]["rotation"] != turned[0]["rotation"]


@pytest.mark.parametrize(
    "words, code",
    [
        (["z90.h5:nonesuch", "--to", "@"], 2),
        (["z90.h5", "hadamard.h5", "--to", "@"], 2),  # HADAMARD_SHAPED_I is too long
        (["z90.h5", "--to", "@", "--folder", "x"], 2),
        (["z90.h5", "--to", "@", "--layout", "apart"], 2),
        (["z90.h5", "--to", "nowhere:0"], 2),
        (["z90.h5", "--to", "@", "--scale", "2"], 2),
        (["z90.h5", "--to", "@", "--repetition-Hz", "1e9"], 2),
        (["z90.h5", "--to", "@", "--repetition-Hz", "nan"], 2),
        (["none.h5", "--to", "@"], 1),
        (["z90.h5", "--to", "127.0.0.1:1"], 1),
    ],
)
def test_exit_codes(folder, bench, capsys, words, code):
    generator, address = bench
    assert load(*(address if word == "@" else word for word in words)) == code
    printed = capsys.readouterr()
    assert printed.out == "" and "Traceback" not in printed.err
    assert generator.traces == {}
    if code == 2:
        assert generator.log == [] and not list(folder.glob("*.load.json"))


def test_a_limit_is_exit_code_4_and_opens_no_link(folder, bench, capsys):
    generator, address = bench
    (folder / "p.toml").write_text(PROFILE.replace("duty_cycle = 1.0", "duty_cycle = 0.5"))
    assert load("z90.h5", "--to", address) == 4
    assert "duty cycle: expected at most 0.5" in capsys.readouterr().err
    assert generator.log == [] and not list(folder.glob("*.load.json"))


def test_files_for_another_full_scale_are_refused(folder, bench, capsys, rng):
    generator, address = bench
    wave = waveform(rng)
    text = wave.job_text.replace("rabi_max_MHz = 25.0", "rabi_max_MHz = 50.0")
    twice = {
        n: replace(p, full_scale=2 * p.full_scale, drive=2 * p.drive)
        for n, p in wave.pulses.items()
    }
    save_waveform("fast.h5", replace(wave, job_text=text, pulses=twice))
    assert load("z90.h5:shaped", "fast.h5:shaped", "--to", address) == 2
    assert "one full scale" in capsys.readouterr().err and generator.log == []


def test_resume_after_a_broken_link(folder, bench, capsys):
    """The record of the broken run says what is ours; nothing else may be overwritten."""
    generator, address = bench
    assert load("z90.h5:shaped", "--to", address) == 0
    generator.traces["SHAPED_Q"][3] ^= 1
    assert load("z90.h5:shaped", "--to", address, "--resume") == 2  # finished: not ours any more
    assert "SHAPED_Q is in the instrument" in capsys.readouterr().err
    newest = max(folder.glob("*.load.json"), key=lambda path: path.stat().st_mtime_ns)
    newest.unlink()
    [record] = folder.glob("*.load.json")
    document = json.loads(record.read_text()) | {"status": "running"}
    record.write_text(json.dumps(document))
    assert load("z90.h5:shaped", "--to", address, "--resume") == 0
    assert "in place" in capsys.readouterr().out


def test_a_path_with_a_colon_is_a_path(folder, bench, rng):
    generator, address = bench
    save_waveform("run:3", waveform(np.random.default_rng(1)))
    assert load("run:3", "--pulse", "shaped", "--to", address) == 0
    assert set(generator.traces) == {"SHAPED_I", "SHAPED_Q"}
