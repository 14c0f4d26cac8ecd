"""Loading into the stand-in: order, outcome, record, sets, names, dry run."""

import hashlib
import json

import numpy as np
import pytest
import stand_in
from awg_case import choice, holds, plan, profile, run_load

from shaper.awg.instrument import InstrumentError, StrangerError
from shaper.awg.link import SocketLink
from shaper.awg.load import begin_record, load
from shaper.awg.plan import make_plan
from shaper.awg.record import read_record
from shaper.errors import InputError, ReadBackError, SafetyError
from shaper.workflow.load import rehearse


@pytest.fixture
def record_path(tmp_path):
    return tmp_path / "z90.load.json"


@pytest.mark.parametrize("layout", ["apart", "interleaved"])
@pytest.mark.parametrize("byte_order", ["big", "little"])
@pytest.mark.parametrize("justify", ["right", "left"])
def test_memory_holds_what_was_planned(rng, record_path, layout, byte_order, justify):
    into = profile(data={"layout": layout, "byte_order": byte_order, "justify": justify})
    made = plan(rng, "SHAPED", "SANDWICH", into=into)
    generator = stand_in.Generator(on={1: True, 2: True})
    with stand_in.running(generator) as (_, address):
        record = run_load(made, address, record_path)
    assert holds(generator, made)
    assert generator.on == {1: False, 2: False} and not generator.switched_on
    assert generator.stored_while_on == 0
    assert not generator.errors
    assert record["status"] == "done" and record["output"]["confirmed_off"]
    assert record["identity"]["maker"] == "Alder Bench"
    assert {trace["state"] for trace in record["traces"]} == {"loaded"}


def test_words_in_memory_are_the_codes(rng, record_path):
    """Without any code of the project between: codes, shift and padding counted by hand."""
    into = profile(
        data={"justify": "left"}, marker={"bit": 1, "lead_samples": 3, "hold_samples": 2}
    )
    chosen = choice(rng, samples=20)
    with stand_in.running() as (generator, address):
        run_load(make_plan([chosen], into), address, record_path)
    words = np.frombuffer(generator.traces["SHAPED_I"], ">i2").astype(int)
    assert len(words) == 28  # 3 + 20 + 2 + 1 for the end at zero, up to a multiple of 4
    gate = np.array([1] * 25 + [0] * 3)
    codes = np.concatenate([np.zeros(3), chosen.pulse.codes[:, 0], np.zeros(5)])
    np.testing.assert_array_equal(words, codes * 4 + 2 * gate)
    words = np.frombuffer(generator.traces["SHAPED_Q"], ">i2").astype(int)
    np.testing.assert_array_equal(words[3:23], 4 * chosen.pulse.codes[:, 1].astype(int))


def test_order(rng, record_path):
    """Off before anything else is changed; data only after formats; the last word is off?"""
    with stand_in.running() as (generator, address):
        run_load(plan(rng), address, record_path)
    heads = [line.split("?")[0].split(" ")[0].rstrip("0123456789") for line in generator.log]
    first = {head: heads.index(head) for head in set(heads)}
    assert heads[:3] == ["*CLS", "*IDN", "OUTPut1:STATe"]
    off_confirmed = generator.log.index("OUTPut2:STATe?")
    for later in ("FORMat:DATA", "TRACe:CATalog", "TRACe:DEFine", "TRACe:DATA"):
        assert first[later] > off_confirmed
    assert generator.log[-3:] == ["OUTPut1:STATe?", "OUTPut2:STATe?", "SYSTem:ERRor?"]
    assert not any(" ON" in line for line in generator.log)


def test_record_tells_the_whole_story(rng, record_path):
    made = plan(rng)
    with stand_in.running() as (generator, address):
        run_load(made, address, record_path)
    record = read_record(record_path)
    assert record["address"] == address and record["ended"] >= record["started"]
    sent = [line["sent"] for line in record["lines"] if "sent" in line]
    assert len(sent) == len(generator.log)
    compared = [line for line in record["lines"] if line["step"] == "read back equal"]
    assert [line["data_sha256"] for line in compared] == [
        hashlib.sha256(trace.data).hexdigest() for trace in made.traces
    ]
    assert [path.name for path in record_path.parent.iterdir()] == [record_path.name]


def test_dry_run_shows_the_very_bytes(rng, record_path):
    made = plan(rng, "SHAPED", "SANDWICH")
    sent = []

    class Tapped(SocketLink):
        def send(self, seconds, *pieces):
            sent.append(b"".join(pieces))
            super().send(seconds, *pieces)

    shown = rehearse(made)
    with stand_in.running() as (generator, address):
        load(made, lambda: Tapped(address, 5.0), begin_record(made, record_path, address))
    assert [message.sha256 for message in shown] == [hashlib.sha256(m).hexdigest() for m in sent]
    assert [message.size for message in shown] == [len(m) for m in sent]
    assert "TRACe:DATA SHAPED_I,#3128<128 bytes>;*OPC?" in [message.text for message in shown]


def test_names_taken_need_replace(rng, record_path):
    made = plan(rng)
    old = bytes(range(100))
    with stand_in.running() as (generator, address):
        generator.traces["SHAPED_Q"] = bytearray(old)
        generator.traces["OTHER"] = bytearray(old)
        with pytest.raises(InputError, match="SHAPED_Q is in the instrument"):
            run_load(made, address, record_path)
        assert generator.traces == {"SHAPED_Q": old, "OTHER": old}
        run_load(made, address, record_path, replace=True)
        assert generator.traces.pop("OTHER") == old
        assert holds(generator, made)


def test_resume_keeps_what_is_equal_and_refuses_what_is_not_ours(rng, record_path):
    made = plan(rng, "A", "B")
    data = {trace.name: trace.data for trace in made.traces}
    with stand_in.running() as (generator, address):
        generator.traces |= {"A_I": bytearray(data["A_I"]), "A_Q": bytearray(len(data["A_Q"]))}
        with pytest.raises(InputError, match="A_Q is in"):
            run_load(made, address, record_path, resume=True)
        assert set(generator.traces) == {"A_I", "A_Q"}
        generator.log.clear()
        record = run_load(made, address, record_path, resume=True, ours=frozenset({"A_Q"}))
        assert holds(generator, made)
        assert not any(line.startswith("TRACe:DATA A_I,") for line in generator.log)
    states = {trace["name"]: trace["state"] for trace in record["traces"]}
    assert states == {"A_I": "in place", "A_Q": "loaded", "B_I": "loaded", "B_Q": "loaded"}


def test_all_or_nothing(rng, record_path):
    """The memory takes five traces of six: nothing stays."""
    made = plan(rng, "A", "B", "C")
    lines = []
    with stand_in.running(stand_in.Generator(memory=5 * 128 + 64)) as (generator, address):
        into = profile(commands={"free": ""})  # so that the lack shows only in the middle
        made = plan(rng, "A", "B", "C", into=into)
        with pytest.raises(InstrumentError, match="Out of memory"):
            run_load(made, address, record_path, say=lines.append)
        assert generator.traces == {}
    record = read_record(record_path)
    states = [trace["state"] for trace in record["traces"]]
    assert states == ["removed"] * 6
    assert record["status"] == "failed" and record["output"]["confirmed_off"]
    assert any(line.startswith("removed again: A_I, A_Q") for line in lines)


def test_too_little_memory_is_known_before(rng, record_path):
    with stand_in.running(stand_in.Generator(memory=200)) as (generator, address):
        with pytest.raises(InstrumentError, match="expected 256 bytes free, got 200"):
            run_load(plan(rng), address, record_path)
        assert generator.traces == {}


def test_a_stranger_is_left_alone(rng, record_path):
    generator = stand_in.Generator(identity="Someone,Else,0,1", on={1: True})
    lines = []
    with stand_in.running(generator) as (_, address):
        with pytest.raises(StrangerError, match="expected maker 'Alder Bench'"):
            run_load(plan(rng), address, record_path, say=lines.append)
    assert generator.on[1]  # not ours to switch
    assert lines == [
        "not the instrument of the profile, so nothing was switched or changed; "
        "its outputs: 1 ON, 2 off"
    ]
    assert not read_record(record_path)["output"]["confirmed_off"]
    assert not any("OFF" in line or "TRAC" in line for line in generator.log)


@pytest.mark.parametrize("answer, fine", [("+2.5E-01", True), ("0.26", False), ("n/a", False)])
def test_questions_of_the_profile(rng, record_path, answer, fine):
    check = [{"ask": "SOURce1:VOLTage?", "expect": 0.25, "tolerance": 0.001}]
    made = plan(rng, into=profile(check=check))
    generator = stand_in.Generator(answers_to={"SOURce1:VOLTage?": answer}, on={1: True})
    with stand_in.running(generator) as (_, address):
        if fine:
            run_load(made, address, record_path)
        else:
            with pytest.raises(SafetyError, match="SOURce1:VOLTage"):
                run_load(made, address, record_path)
    assert not generator.on[1]
    assert bool(generator.traces) == fine


@pytest.mark.parametrize("order, words", [("big", "in the same"), ("little", "byte order: exp")])
def test_wrong_byte_order_both_ways_is_found(rng, record_path, order, words):
    """Such an instrument reads back equal, and may play noise."""
    fault = stand_in.Fault("wrong_order", lasting=True)
    made = plan(rng, into=profile(data={"byte_order": order}))
    with stand_in.running(stand_in.Generator(faults=[fault])) as (generator, address):
        with pytest.raises(ReadBackError, match=words):
            run_load(made, address, record_path)
        assert generator.traces == {}


def test_wrong_byte_order_that_begins_after_the_proof_is_found(rng, record_path):
    made = plan(rng, into=profile(data={"byte_order": "little"}))
    faults = [stand_in.Fault("wrong_order", at=22) for _ in range(2)]  # writing, then reading
    with stand_in.running(stand_in.Generator(faults=faults)) as (generator, address):
        with pytest.raises(ReadBackError, match="SHAPED_I"):
            run_load(made, address, record_path)
        assert generator.traces == {}


@pytest.mark.parametrize("lacks", [["order_little"], ["order_little", "order_big"]])
def test_an_instrument_with_one_byte_order(rng, record_path, lacks):
    made = plan(rng, into=profile(commands=dict.fromkeys(lacks, "")))
    with stand_in.running() as (generator, address):
        run_load(made, address, record_path)
        assert holds(generator, made)


def test_an_instrument_without_a_catalog_needs_replace(rng, record_path):
    made = plan(rng, into=profile(commands={"catalog": ""}))
    with stand_in.running() as (generator, address):
        with pytest.raises(InputError, match="cannot list"):
            run_load(made, address, record_path)
        run_load(made, address, record_path, replace=True)
        assert holds(generator, made)
        run_load(made, address, record_path, replace=True)
        assert holds(generator, made)


def test_left_over_probe_is_cleared(rng, record_path):
    made = plan(rng)
    with stand_in.running() as (generator, address):
        generator.traces["SHAPERPROBE"] = bytearray(8)
        run_load(made, address, record_path)
        assert holds(generator, made)


def test_a_switch_thrown_during_the_load_is_seen(rng, record_path):
    fault = stand_in.Fault("switches_on", at=30)
    with stand_in.running(stand_in.Generator(faults=[fault])) as (generator, address):
        with pytest.raises(SafetyError, match="who switched it"):
            run_load(plan(rng), address, record_path)
        assert not generator.on[1] and generator.traces == {}


def test_a_record_that_cannot_be_written_stops_before_the_link(rng, tmp_path):
    with stand_in.running() as (generator, address):
        with pytest.raises(Exception, match="nonesuch"):
            run_load(plan(rng), address, tmp_path / "nonesuch" / "r.load.json")
        assert generator.log == []


def test_a_disk_that_fails_in_the_middle_does_not_keep_an_output_on(rng, record_path, monkeypatch):
    import shaper.awg.record as room
    from shaper.errors import FileError

    real, count = room.replace_file, []

    def full(path, data, **options):
        count.append(1)
        if len(count) > 1:  # the beginning is written, then no more
            raise FileError("disk full")
        real(path, data, **options)

    monkeypatch.setattr(room, "replace_file", full)
    fault = stand_in.Fault("switches_on", at=15)
    lines = []
    with stand_in.running(stand_in.Generator(faults=[fault])) as (generator, address):
        with pytest.raises(FileError, match="disk full"):
            run_load(plan(rng), address, record_path, say=lines.append)
        assert not generator.on[1] and generator.traces == {}
    assert "output 1 and 2: off, confirmed by the instrument" in lines
    json.loads(record_path.read_text())


@pytest.mark.parametrize(
    "text", ["", "{}", "[1]", '{"format": "shaper-load-record", "format_version": 1}', "[" * 10000]
)
def test_a_record_that_is_not_ours_is_refused(tmp_path, text):
    from shaper.errors import FileError

    (tmp_path / "r").write_text(text)
    with pytest.raises(FileError, match="not a load record"):
        read_record(tmp_path / "r")
