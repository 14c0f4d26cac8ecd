"""The loader killed, interrupted, terminated: the instrument's outputs, the record, the rerun."""

import os
import random
import signal
import subprocess
import sys
import threading
import time

import pytest
import stand_in
from awg_case import PROFILE, holds, pulse, waveform

from shaper.awg.profile import parse_profile
from shaper.awg.record import read_record, records_in
from shaper.cli import main
from shaper.store import save_waveform
from shaper.workflow.load import plan_from, rehearse

KILLS = int(os.environ.get("SHAPER_KILLS", "6"))  # 50 for the record; each takes two seconds
SAMPLES = 100_000  # long enough to be hit in the middle of a block


@pytest.fixture
def bench(tmp_path, rng, monkeypatch):
    """A folder with a waveform file and a profile; the plan that a load will carry out."""
    from dataclasses import replace

    monkeypatch.chdir(tmp_path)
    wave = waveform(rng)
    wave = replace(wave, pulses=wave.pulses | {"sandwich": pulse(SAMPLES, rng)})
    save_waveform("z90.h5", wave)
    (tmp_path / "p.toml").write_text(PROFILE)
    return plan_from(["z90.h5"], parse_profile(PROFILE))


def start(address, *options):
    """The loader in a process of its own."""
    command = [sys.executable, "-m", "shaper", "load", "z90.h5", "--to", address]
    return subprocess.Popen(
        [*command, "--profile", "p.toml", *options],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


class Trigger(list):
    """A log that sets an event at its n-th line (from 0)."""

    def __init__(self, at):
        super().__init__()
        self.at, self.event = at, threading.Event()

    def append(self, line):
        super().append(line)
        if len(self) > self.at:
            self.event.set()


def test_killed_at_any_moment(bench, tmp_path):
    """-9: no way out for the loader, so the order alone must keep the outputs off."""
    messages = len(rehearse(bench))
    chance, cut = random.Random(20260), 0
    for number in range(KILLS):
        generator = stand_in.Generator(on={1: True, 2: True})
        generator.log = Trigger(chance.randrange(messages))
        for path in tmp_path.glob("*.load.json"):
            path.unlink()
        with stand_in.running(generator) as (_, address):
            loader = start(address)
            generator.log.event.wait()
            time.sleep(chance.uniform(0, 2e-3))
            loader.kill()
            loader.communicate()
            told_off = "OUTPut2:STATe OFF" in generator.log
            assert not (told_off and any(generator.on.values())), number
            assert generator.stored_while_on == 0 and not generator.switched_on
            [record] = [read_record(path) for path in tmp_path.glob("*.load.json")]
            cut += record["status"] == "running"
            options = ["--to", address, "--profile", "p.toml", "--resume"]
            assert main(["load", "z90.h5", *options]) == 0
            assert holds(generator, bench) and not any(generator.on.values())
    assert cut >= KILLS / 2, "most kills must come before the end to prove anything"


@pytest.mark.parametrize(
    "number, at",
    [(signal.SIGINT, 1), (signal.SIGINT, 16), (signal.SIGINT, 28), (signal.SIGTERM, 28)],
)
def test_interrupted(bench, tmp_path, number, at):
    generator = stand_in.Generator(on={1: True, 2: True})
    generator.log = Trigger(at)
    late = stand_in.Fault("late", at=at, seconds=3.0)  # so that it is surely still at work
    generator.faults = [late]
    with stand_in.running(generator) as (_, address):
        loader = start(address)
        generator.log.event.wait()
        loader.send_signal(number)
        out, err = loader.communicate()
    assert loader.returncode == 130, err
    assert out == "" and "Traceback" not in err
    assert "off, confirmed by the instrument" in err
    assert not any(generator.on.values())
    assert generator.traces == {}  # nothing, rather than half a set
    [record] = records_in(tmp_path)
    assert record["status"] == "interrupted" and record["output"]["confirmed_off"]


def test_a_second_ctrl_c_does_not_stop_the_way_out(bench, tmp_path):
    generator = stand_in.Generator(on={1: True, 2: True})
    generator.log = Trigger(25)
    slow = stand_in.Fault("late", at=26, lasting=True, seconds=0.05)
    generator.faults = [stand_in.Fault("late", at=25, seconds=3.0), slow]
    with stand_in.running(generator) as (_, address):
        loader = start(address)
        generator.log.event.wait()
        for _ in range(5):
            loader.send_signal(signal.SIGINT)
            time.sleep(0.01)
        _, err = loader.communicate()
    assert loader.returncode == 130
    assert "off, confirmed by the instrument" in err and generator.traces == {}
