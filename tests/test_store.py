"""The waveform file: what is written comes back, others can read it, and bad ones are refused."""

import hashlib
import io
import math
import os
import signal
import subprocess
import sys
import time
from dataclasses import replace
from pathlib import Path

import h5py
import numpy as np
import pytest
import xarray
from hypothesis import given, settings
from hypothesis import strategies as st
from waveforms import RATE, assert_same, random_pulse, waveform

import shaper
from shaper.errors import FileError
from shaper.pulse import Table
from shaper.store import atomic, layout, load_waveform, save_waveform

SAMPLE_V1 = Path(__file__).parent / "data" / "waveform_v1.h5"

# ---- what is written comes back


def test_round_trip(tmp_path, rng):
    record = waveform(rng)
    save_waveform(tmp_path / "a.h5", record)
    assert_same(record, shaper.load_waveform(tmp_path / "a.h5"))
    assert os.listdir(tmp_path) == ["a.h5"]


@settings(max_examples=40, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    segments=st.integers(1, 40),
    bits=st.integers(2, 16),
    bound=st.sampled_from(["circle", "box"]),
    title=st.text(st.characters(codec="utf-8", exclude_characters="\0"), max_size=20),
    nan_at=st.integers(0, 14),
)
def test_round_trip_of_random_pulses(tmp_path_factory, seed, segments, bits, bound, title, nan_at):
    rng = np.random.default_rng(seed)
    record = waveform(rng, bound, bits, title=title)
    record.pulses["shaped"] = random_pulse(rng, segments, bound, bits, longest=20)
    record.history["cost"].values.flat[nan_at] = np.nan  # a start that was dropped
    path = tmp_path_factory.mktemp("store") / "a.h5"
    save_waveform(path, record)
    assert_same(record, load_waveform(path))


def test_large_pulse_is_packed_and_comes_back(tmp_path, rng):
    record = waveform(rng)
    record.pulses["shaped"] = random_pulse(rng, 20_000, longest=6)
    save_waveform(tmp_path / "a.h5", record)
    assert_same(record, load_waveform(tmp_path / "a.h5"))
    with h5py.File(tmp_path / "a.h5") as file:
        assert file["pulses/shaped/dac_i"].compression == "gzip"
        assert file["pulses/shaped/dac_i"].fletcher32
        assert file["pulses/sandwich/dac_i"].chunks is None


def test_same_record_same_bytes(tmp_path, rng):
    record = waveform(rng)
    save_waveform(tmp_path / "a.h5", record)
    again = load_waveform(tmp_path / "a.h5")
    assert list(again.pulses) == ["shaped", "sandwich"]  # in the order given, not of the alphabet
    save_waveform(tmp_path / "b.h5", again)
    assert (tmp_path / "a.h5").read_bytes() == (tmp_path / "b.h5").read_bytes()


def test_empty_history_and_no_history(tmp_path, rng):
    empty = {"cost": Table(np.empty((3, 0)), ("start", "iteration"), "1", "cost")}
    record = waveform(rng, history=empty, history_attrs={}, evidence={}, notes="")
    save_waveform(tmp_path / "a.h5", record)
    assert_same(record, load_waveform(tmp_path / "a.h5"))
    save_waveform(tmp_path / "a.h5", replace(record, history={}))
    assert load_waveform(tmp_path / "a.h5").history == {}


# ---- others can read it


def test_bare_h5py_finds_what_the_contract_promises(tmp_path, rng):
    record = waveform(rng)
    save_waveform(tmp_path / "a.h5", record)
    pulse = record.pulses["shaped"]
    with h5py.File(tmp_path / "a.h5") as file:
        assert file.attrs["format"] == "shaper-waveform" and file.attrs["format_version"] == 1
        assert file.attrs["job"] == record.job_text
        np.testing.assert_array_equal(file["target/quaternion"], record.target)
        group = file["pulses/shaped"]
        full_scale = group.attrs["full_scale_rad_per_s"]
        assert group["dac_i"].dtype == np.int16
        played = group["dac_i"][()] / (2 ** (group.attrs["dac_bits"] - 1) - 1) * full_scale
        wanted = np.repeat(pulse.drive[:, 0], pulse.samples)
        # 0.5 code by rounding, up to one where the circle forbids the nearest
        assert np.max(np.abs(played - wanted)) <= full_scale / (2**13 - 1)
        np.testing.assert_allclose(group["segment_s"], pulse.samples / RATE, rtol=1e-15)
        assert group.attrs["duration_s"] == pytest.approx(np.sum(group["segment_s"]), rel=1e-12)
        assert group["drive_y"].dims[0][0] == group["segment_start_s"]
        assert group["dac_q"].dims[0][0] == group["sample_s"]
        assert group.attrs["infidelity_guaranteed"] == record.scores["shaped"].guaranteed
        assert "infidelity_guaranteed" not in file["pulses/sandwich"].attrs

        def check(_, item):
            if isinstance(item, h5py.Dataset):
                assert item.attrs["units"] and item.attrs["long_name"]
                assert item.dtype.kind in "if"
                stored = item[()].astype(item.dtype.newbyteorder("<")).tobytes()
                assert item.attrs["sha256"] == hashlib.sha256(stored).hexdigest()

        file.visititems(check)


def test_xarray_sees_named_axes_with_units(tmp_path, rng):
    record = waveform(rng)
    path = tmp_path / "a.h5"
    save_waveform(path, record)
    with xarray.open_dataset(path, engine="h5netcdf", group="pulses/shaped") as pulse:
        assert pulse.drive_x.dims == ("segment_start_s",) and pulse.dac_i.dims == ("sample_s",)
        assert pulse.drive_x.attrs["units"] == "rad/s"
        assert pulse.segment_start_s.attrs["units"] == "s"
        assert pulse.dac_i.dtype == np.int16
        np.testing.assert_array_equal(pulse.drive_y, record.pulses["shaped"].drive[:, 1])
    with xarray.open_dataset(path, engine="h5netcdf", group="history") as history:
        assert history.cost.dims == ("start", "iteration")
        np.testing.assert_array_equal(history.iteration, np.arange(0, 50, 10))
    with xarray.open_datatree(path, engine="h5netcdf") as tree:
        assert tree["evidence/infidelity_against_detuning"].dims == ("detuning",)
        assert tree["evidence/detuning"].attrs["units"] == "rad/s"
        assert tree["target/error_rows"].dims == ("row", "component")


# ---- a version stays readable for ever


def test_stored_file_of_version_1_still_reads():
    record = load_waveform(SAMPLE_V1)
    assert record.title == "Quarter-turn phase gate, Alder bench, alder-1"
    np.testing.assert_allclose(record.target, [math.sqrt(0.5), 0, 0, math.sqrt(0.5)], atol=1e-15)
    sandwich = record.pulses["sandwich"]
    assert sandwich.samples.tolist() == [10, 10, 10]
    assert sandwich.codes.shape == (30, 2) and sandwich.bits == 14
    assert sandwich.codes[0].tolist() == [0, 8191] and sandwich.codes[10].tolist() == [8191, 0]
    assert record.scores["sandwich"].nominal < 1e-30
    assert record.history["cost"].axes == ("start", "iteration")


def test_bare_minimum_of_version_1_reads(tmp_path, rng):
    """The published layout alone: no extras of ours, no checksums, rate and bits in the job."""
    record = waveform(rng)
    path = tmp_path / "a.h5"
    save_waveform(path, record)
    with h5py.File(path, "r+") as file:
        for name in ("title", "created", "software", "seed", "status", "notes"):
            del file.attrs[name]
        for name in ("error_rows", "row", "component"):
            del file["target"][name]
        for name in ("history", "evidence"):
            del file[name]
        for group in file["pulses"].values():
            for name in ("sample_rate_Hz", "dac_bits", *layout.OPTIONAL_SCORES, "source"):
                group.attrs.pop(name, None)
            for dataset in group.values():
                del dataset.attrs["sha256"]
    bare = load_waveform(path)
    np.testing.assert_array_equal(bare.pulses["shaped"].codes, record.pulses["shaped"].codes)
    np.testing.assert_allclose(bare.error_rows, record.error_rows)
    assert bare.scores["shaped"].guaranteed is None and math.isnan(bare.scores["shaped"].dac_mean)
    save_waveform(path, bare)  # and it can be written again
    assert load_waveform(path).scores["shaped"].worst == record.scores["shaped"].worst


def test_what_a_later_program_adds_is_ignored(tmp_path, rng):
    record = waveform(rng)
    path = tmp_path / "a.h5"
    save_waveform(path, record)
    with h5py.File(path, "r+") as file:
        file.attrs["color"] = "red"
        file["pulses/shaped"].attrs["mood"] = np.array([1.0, 2.0])
        file["pulses/shaped"].create_dataset("marker", data=np.zeros(4, np.int8))
        file.create_group("calibration").create_dataset("gain", data=np.ones(3))
    assert_same(record, load_waveform(path))


# ---- saving is whole or not at all


@pytest.mark.parametrize(
    "change, fault",
    [
        (lambda w: replace(w, pulses={}, scores={}), "/pulses: expected at least one pulse"),
        (lambda w: replace(w, scores={}), "scores: expected one for each of the pulses"),
        (
            lambda w: replace(w, target=np.array([1.0, 0, 0, 1.0])),
            "/target/quaternion: expected length 1",
        ),
        (
            lambda w: replace(
                w, pulses={**w.pulses, "../up": w.pulses["shaped"]}, scores={**w.scores, "../up": 0}
            ),
            "pulses: expected a name of letters, digits and _ + -, got '../up'",
        ),
        (
            lambda w: replace(
                w, history={"a": Table(np.zeros(3), ("start", "iteration"), "1", "a")}
            ),
            "history/a: expected 1 different axis names",
        ),
        (
            lambda w: replace(
                w,
                evidence={
                    "a": Table(np.zeros(3), ("start",), "1", "a"),
                    "b": Table(np.zeros(4), ("start",), "1", "b"),
                },
            ),
            "evidence/b: axis start is 4 long, in another table 3",
        ),
        (
            lambda w: replace(w, history={"a": Table(np.zeros(3) + 0j, ("start",), "1", "a")}),
            "history/a: expected real numbers, got complex128",
        ),
        (lambda w: replace(w, history_attrs={"a": [1]}), "history: attribute a: expected text"),
        (lambda w: replace(w, title="nul \0 here"), "VLEN strings do not support embedded NULLs"),
        (
            lambda w: replace(
                w, pulses={**w.pulses, "shaped": replace(w.pulses["shaped"], full_scale=1e9)}
            ),
            "full_scale_rad_per_s: expected at most 157079633 rad/s",
        ),
    ],
)
def test_a_bad_record_is_not_written(tmp_path, rng, change, fault):
    path = tmp_path / "a.h5"
    record = waveform(rng)
    save_waveform(path, record)
    before = path.read_bytes()
    with pytest.raises(FileError) as caught:
        save_waveform(path, change(record))
    message = str(caught.value)
    assert message.startswith(f"{path}: not written: ") and fault in message
    assert message.isprintable()
    assert path.read_bytes() == before and os.listdir(tmp_path) == ["a.h5"]


@pytest.mark.parametrize("broken", ["fsync", "replace"])
def test_old_file_is_untouched_when_the_disk_fails(tmp_path, rng, monkeypatch, broken):
    path = tmp_path / "a.h5"
    record = waveform(rng)
    save_waveform(path, record)

    def fail(*args):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, broken, fail)
    with pytest.raises(FileError, match="cannot write: No space left on device"):
        save_waveform(path, replace(record, title="new"))
    monkeypatch.undo()
    assert load_waveform(path).title == record.title
    assert os.listdir(tmp_path) == ["a.h5"]


def test_folder_that_is_not_there(tmp_path, rng):
    with pytest.raises(FileError, match="cannot write: No such file or directory"):
        save_waveform(tmp_path / "none" / "a.h5", waveform(rng))


WRITER = """
import sys
from dataclasses import replace
from shaper.store import load_waveform, save_waveform
old, path = load_waveform(sys.argv[1]), sys.argv[2]
number = 0
while True:
    number += 1
    save_waveform(path, replace(old, seed=number))
    if number == 1:
        print("ready", flush=True)
"""
KILLS = 20


def test_kill_during_writes_leaves_a_whole_file(tmp_path, rng):
    source, path = tmp_path / "source.h5", tmp_path / "a.h5"
    record = waveform(rng)
    record.pulses["shaped"] = random_pulse(rng, 3000)
    save_waveform(source, record)
    last = 0
    for _ in range(KILLS):
        child = subprocess.Popen(
            [sys.executable, "-c", WRITER, str(source), str(path)], stdout=subprocess.PIPE
        )
        with child:
            assert child.stdout.readline() == b"ready\n"
            time.sleep(rng.uniform(0.005, 0.03))  # somewhere within a write
            child.send_signal(signal.SIGKILL)
        assert_same(replace(record, seed=0), replace(load_waveform(path), seed=0))
        last = load_waveform(path).seed
    assert last >= 1
    save_waveform(path, record)  # and sweeps up what the killed ones left
    assert sorted(os.listdir(tmp_path)) == ["a.h5", "source.h5"]


def test_strays_are_swept_only_when_abandoned(tmp_path):
    machine = atomic._machine()
    alive = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    dead = subprocess.Popen([sys.executable, "-c", ""])
    dead.wait()
    keep = [f".a.h5.{machine}.{alive.pid}.tmp", ".a.h5.elsewhere.1.tmp", ".a.h5.tmp", "b.h5"]
    keep.append(f".b.h5.{machine}.{dead.pid}.tmp")  # another file's
    sweep = [f".a.h5.{machine}.{dead.pid}.tmp", ".a.h5.elsewhere.2.tmp"]
    for name in keep + sweep:
        (tmp_path / name).write_bytes(b"")
    week_ago = time.time() - 7 * 86400
    os.utime(tmp_path / ".a.h5.elsewhere.2.tmp", (week_ago, week_ago))
    atomic.replace_file(tmp_path / "a.h5", b"new")
    with alive:
        alive.stdin.close()
    assert sorted(os.listdir(tmp_path)) == sorted([*keep, "a.h5"])


def test_import_of_the_package_is_light():
    code = (
        "import sys, shaper; heavy = {'numpy', 'jax', 'h5py', 'pydantic', 'scipy', 'matplotlib'};"
        "assert not heavy & set(sys.modules), heavy & set(sys.modules);"
        "assert 'load_waveform' in dir(shaper);"
        "assert shaper.load_waveform.__module__ == 'shaper.store.read'"
    )
    subprocess.run([sys.executable, "-c", code], check=True)
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        _ = shaper.nothing


def test_buffer_is_all_there_is(rng, tmp_path):
    """The file on disk is what was checked in memory, byte for byte."""
    path = tmp_path / "a.h5"
    save_waveform(path, waveform(rng))
    with h5py.File(io.BytesIO(path.read_bytes())) as file:
        assert file.userblock_size == 0 and file.id.get_filesize() == path.stat().st_size
