"""Switching on: only after every check and the word of the person; off at once."""

import io
import json

import numpy as np
import pytest
import stand_in
from awg_case import PROFILE, waveform

from shaper.cli import main
from shaper.store import save_waveform


class Terminal(io.StringIO):
    """Somebody at a keyboard."""

    def isatty(self):
        return True


@pytest.fixture
def loaded(tmp_path, rng, monkeypatch, capsys):
    """A stand-in that holds a waveform, and the folder with its load record ``r.load.json``."""
    monkeypatch.chdir(tmp_path)
    save_waveform("z90.h5", waveform(rng))
    (tmp_path / "p.toml").write_text(PROFILE)
    with stand_in.running() as (generator, address):
        options = ["--to", address, "--profile", "p.toml", "--record", "r.load.json"]
        assert main(["load", "z90.h5", *options]) == 0
        capsys.readouterr()
        yield generator, address


def on(address, *options):
    return main(
        ["output", address, "--on", "--record", "r.load.json", "--profile", "p.toml", *options]
    )


def test_on_by_word_and_off(loaded, monkeypatch, capsys, tmp_path):
    generator, address = loaded
    monkeypatch.setattr("sys.stdin", Terminal("ON\n"))
    assert on(address) == 0
    printed = capsys.readouterr()
    assert printed.out == "output 1 and 2: ON, confirmed by the instrument\n"
    assert "Type ON" in printed.err and "caution:" in printed.err and "at the load" in printed.err
    assert generator.on == {1: True, 2: True}
    assert main(["output", address, "--off", "--profile", "p.toml"]) == 0
    assert capsys.readouterr().out == "output 1 and 2: off, confirmed by the instrument\n"
    assert generator.on == {1: False, 2: False}
    [record] = tmp_path.glob("*.output.json")
    assert json.loads(record.read_text())["status"] == "done"


@pytest.mark.parametrize("word", ["", "\n", "on\n", "yes\n", "OFF\n", "ONE\n"])
def test_any_other_word_leaves_it_off(loaded, monkeypatch, capsys, word):
    generator, address = loaded
    monkeypatch.setattr("sys.stdin", Terminal(word))
    assert on(address) == 4
    err = capsys.readouterr().err
    assert "the word was not given" in err and "off, confirmed" in err
    assert not generator.switched_on


def test_no_person_and_no_yes(loaded, monkeypatch, capsys):
    generator, address = loaded
    monkeypatch.setattr("sys.stdin", io.StringIO("ON\n"))
    assert on(address) == 4
    assert not generator.switched_on
    assert on(address, "--yes", "--json") == 0
    document = json.loads(capsys.readouterr().out)
    assert document["output"]["statement"].endswith("ON, confirmed by the instrument")
    assert generator.on == {1: True, 2: True}


def spoil_memory(generator, folder):
    generator.traces["SHAPED_Q"][7] ^= 1
    return 5


def lose_memory(generator, folder):
    generator.traces["SHAPED_Q"] = generator.traces["SHAPED_Q"][:-2]
    return 5


def change_file(generator, folder):
    save_waveform(folder / "z90.h5", waveform(np.random.default_rng(5)))
    return 4


def lower_limit(generator, folder):
    text = PROFILE.replace("peak_V = 0.3", "peak_V = 0.1")
    (folder / "p.toml").write_text(text)
    return 4


def higher_level(generator, folder):
    (folder / "p.toml").write_text(PROFILE.replace("load_ohm = 50.0", 'load_ohm = "high"'))
    return 4


def other_serial(generator, folder):
    generator.identity = "Alder Bench,Stand-in,77,1.0"
    return 4


def other_address(generator, folder):
    record = json.loads((folder / "r.load.json").read_text())
    (folder / "r.load.json").write_text(json.dumps(record | {"address": "127.0.0.1:1"}))
    return 4


def unfinished(generator, folder):
    record = json.loads((folder / "r.load.json").read_text())
    (folder / "r.load.json").write_text(json.dumps(record | {"status": "failed"}))
    return 4


def damaged(generator, folder):
    (folder / "r.load.json").write_text("{")
    return 1


def no_profile(generator, folder):
    (folder / "p.toml").unlink()
    return 2


@pytest.mark.parametrize(
    "spoil",
    [
        spoil_memory,
        lose_memory,
        change_file,
        lower_limit,
        higher_level,
        other_serial,
        other_address,
        unfinished,
        damaged,
        no_profile,
    ],
)
def test_refused(loaded, tmp_path, capsys, spoil):
    generator, address = loaded
    code = spoil(generator, tmp_path)
    assert on(address, "--yes") == code
    err = capsys.readouterr().err
    assert "Traceback" not in err and "Type ON" not in err
    assert not generator.switched_on and not any(generator.on.values())


@pytest.mark.parametrize(
    "kind, later",
    [("close", step) for step in range(5)]  # ON, ON, on?, on?, errors?
    + [("refuse", step) for step in range(5)]
    + [("garbage", step) for step in range(2, 5)],
)
def test_trouble_while_switching_on_ends_off(loaded, capsys, tmp_path, kind, later):
    generator, address = loaded
    (tmp_path / "p.toml").write_text(PROFILE.replace("timeout_s = 20.0", "timeout_s = 1.0"))
    start = len(generator.log)
    assert on(address, "--yes") == 0
    steps = generator.log[start:].index("OUTPut1:STATe ON")
    assert main(["output", address, "--off"]) == 0
    generator.switched_on.clear()
    fault = stand_in.Fault(kind, at=generator.messages + steps + later)
    generator.faults = [fault]
    capsys.readouterr()
    assert on(address, "--yes") == 1
    assert fault.struck
    assert "output 1 and 2: off, confirmed by the instrument" in capsys.readouterr().err
    assert not any(generator.on.values())
    assert bool(generator.switched_on) == (later > 0 or kind == "refuse")


def test_off_that_is_not_confirmed_is_a_failure(loaded, capsys):
    generator, address = loaded
    generator.on[1] = True
    generator.faults = [stand_in.Fault("deaf", lasting=True)]
    assert main(["output", address, "--off"]) == 1
    assert "STILL ON" in capsys.readouterr().err
    assert main(["output", "127.0.0.1:1", "--off"]) == 1
    assert "could NOT be sent; go to the bench" in capsys.readouterr().err


@pytest.mark.parametrize(
    "options", [[], ["--on", "--off"], ["--on"], ["--on", "--profile", "p.toml"]]
)
def test_wrong_use(options, capsys):
    try:
        code = main(["output", "127.0.0.1:1", *options])
    except SystemExit as stopped:  # argparse
        code = stopped.code
    assert code == 2
