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

import shaper
from shaper import rotation
from shaper.errors import FileError
from shaper.pulse import Score, Table, Waveform, make_pulse
from shaper.store import atomic, layout, load_waveform, save_waveform
from shaper.store.read import decode_waveform
from shaper.target import Target

SAMPLE_V1 = Path(__file__).parent / "data" / "waveform_v1.h5"
RATE = 1e9  # samples per second of the Alder bench in these tests
RABI_MAX = 2 * math.pi * 25e6  # rad/s


def job_text(bound="circle", bits=14):
    return f"""title = "Quarter turn, Alder bench, alder-1"
[drive]
rabi_max_MHz = 25.0
bound = "{bound}"
sample_rate_MSps = 1000.0
dac_bits = {bits}
[target]
gate = "z"
angle_deg = 90.0
[pulse]
duration_ns = 60.0
slice_ns = 1.0
"""


def random_pulse(rng, segments=6, bound="circle", bits=14, longest=5):
    samples = rng.integers(1, longest + 1, segments)
    radius = RABI_MAX * np.sqrt(rng.uniform(0, 1, segments))
    angle = rng.uniform(0, 2 * np.pi, segments)
    drive = np.stack([radius * np.cos(angle), radius * np.sin(angle)], -1)
    return make_pulse(
        drive,
        samples,
        full_scale=RABI_MAX,
        bits=bits,
        bound=bound,
        sample_rate=RATE,
        origin="optimized",
    )


def waveform(rng, bound="circle", bits=14, **changes):
    target = Target(rotation.about_z(math.pi / 2))
    record = Waveform(
        title="Quarter turn, Alder bench, alder-1",
        job_text=job_text(bound, bits),
        created="2024-05-01T10:00:00Z",
        software="shaper 0.1.0",
        seed=7,
        status="converged",
        target=target.quaternion,
        error_rows=target.error_rows,
        error_scale=target.scale,
        pulses={
            "shaped": random_pulse(rng, bound=bound, bits=bits),
            "sandwich": replace(
                random_pulse(rng, 3, bound, bits), origin="composite", source="own"
            ),
        },
        scores={
            "shaped": Score(1e-10, 2e-5, 8e-5, 1e-9, 2e-5, 8.1e-5, 8.2e-5),
            "sandwich": Score(0.0, 1e-2, 3.8e-2, 1e-8, 1e-2, 3.8e-2),
        },
        history={
            "cost": Table(
                rng.uniform(size=(3, 5)), ("start", "iteration"), "1", "cost of every start"
            ),
            "iteration": Table(np.arange(0, 50, 10), ("iteration",), "1", "iteration"),
            "status_code": Table(np.array([0, 1, 0]), ("start",), "1", "how every start ended"),
        },
        history_attrs={"best_start": 2, "method": "L-BFGS", "seconds": 0.5},
        evidence={
            "infidelity_against_detuning": Table(
                rng.uniform(size=7), ("detuning",), "1", "average gate infidelity"
            ),
            "detuning": Table(np.linspace(-1e6, 1e6, 7), ("detuning",), "rad/s", "detuning"),
        },
        notes="first light",
    )
    return replace(record, **changes)


def assert_same(a, b):
    for name in ("title", "job_text", "created", "software", "seed", "status", "notes"):
        assert getattr(a, name) == getattr(b, name)
    assert a.history_attrs == b.history_attrs
    assert a.error_scale == b.error_scale
    np.testing.assert_array_equal(a.target, b.target)
    np.testing.assert_array_equal(a.error_rows, b.error_rows)
    assert a.scores == b.scores
    assert a.pulses.keys() == b.pulses.keys()
    for name, pulse in a.pulses.items():
        other = b.pulses[name]
        for field in ("origin", "source", "full_scale", "bits", "sample_rate"):
            assert getattr(pulse, field) == getattr(other, field)
        for field in ("drive", "samples", "codes"):
            np.testing.assert_array_equal(getattr(pulse, field), getattr(other, field))
            assert getattr(pulse, field).dtype == getattr(other, field).dtype
    for place in layout.TABLE_GROUPS:
        ours, theirs = getattr(a, place), getattr(b, place)
        assert ours.keys() == theirs.keys()
        for name, table in ours.items():
            np.testing.assert_array_equal(table.values, theirs[name].values)
            assert table.axes == theirs[name].axes
            assert (table.units, table.long_name) == (theirs[name].units, theirs[name].long_name)


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


# ---- hostile and damaged files


def external_link(file, folder):
    file["pulses/other"] = h5py.ExternalLink(str(folder / "secret.h5"), "/")


def soft_link(file, folder):
    file["pulses/other"] = h5py.SoftLink("/pulses/shaped")


def dangling_link(file, folder):
    file["history/gone"] = h5py.SoftLink("/nowhere")


def hard_link_cycle(file, folder):
    file["pulses/shaped/again"] = file["pulses"]


def second_hard_link(file, folder):
    file["pulses/twin"] = file["pulses/shaped"]


def external_storage(file, folder):
    (folder / "secret.bin").write_bytes(bytes(64))
    file["history"].create_dataset(
        "leak", (8,), "f8", external=[(str(folder / "secret.bin"), 0, 64)]
    )


def virtual_dataset(file, folder):
    source = h5py.VirtualSource(str(folder / "secret.h5"), "x", shape=(4,))
    view = h5py.VirtualLayout(shape=(4,), dtype="f8")
    view[:] = source
    file["history"].create_virtual_dataset("leak", view)


def variable_length_text(file, folder):
    file["history"].create_dataset("words", data=["a", "b"], dtype=h5py.string_dtype())


def object_reference(file, folder):
    file["history"].create_dataset("ref", data=file["pulses"].ref, dtype=h5py.ref_dtype)


def object_reference_attribute(file, folder):
    file["pulses/shaped"].attrs.create("ref", file["pulses"].ref, dtype=h5py.ref_dtype)


def stored_type(file, folder):
    file["history/kind"] = np.dtype("f8")


def unknown_filter(file, folder):
    file["history"].create_dataset("lzf", data=np.zeros(9000), compression="lzf")


def absurd_size(file, folder):
    file["history"].create_dataset("huge", (10**12,), "f8")


def absurd_chunk(file, folder):
    file["history"].create_dataset("huge", (4,), "f8", chunks=(2**28,), maxshape=(None,))


def promised_but_not_stored(file, folder):
    file["history"].create_dataset("zeros", (10**6,), "f8", chunks=(1000,))


def too_deep(file, folder):
    file.create_group("a/" * 20)


def too_many(file, folder):
    group = file.create_group("crowd")
    for number in range(layout.MAX_OBJECTS + 1):
        group.create_group(str(number))


def another_format(file, folder):
    file.attrs["format"] = "something\nelse"


def no_format(file, folder):
    del file.attrs["format"]


def later_version(file, folder):
    file.attrs["format_version"] = 2


def job_of_garbage(file, folder):
    file.attrs["job"] = "[drive\n"


def job_is_a_number(file, folder):
    file.attrs["job"] = 5


def pulse_missing(file, folder):
    del file["pulses/shaped"], file["pulses/sandwich"]


def dataset_missing(file, folder):
    del file["pulses/shaped/drive_y"]


def group_in_place_of_dataset(file, folder):
    del file["pulses/shaped/drive_y"]
    file["pulses/shaped"].create_group("drive_y")


def rewrite(file, place, values, **attributes):
    """Another array in the place of one, its checksum right: only the numbers are wrong."""
    group, _, name = place.rpartition("/")
    kept = dict(file[place].attrs)
    del file[place]
    dataset = file[group].create_dataset(name, data=values)
    dataset.attrs["units"], dataset.attrs["long_name"] = kept["units"], kept["long_name"]
    dataset.attrs["sha256"] = layout.digest(np.asarray(values))


def codes_of_another_type(file, folder):
    rewrite(file, "pulses/shaped/dac_i", file["pulses/shaped/dac_i"][()].astype(np.int32))


def drive_is_complex(file, folder):
    rewrite(file, "pulses/shaped/drive_x", file["pulses/shaped/drive_x"][()] + 0j)


def code_out_of_range(file, folder):
    codes = file["pulses/shaped/dac_i"][()]
    codes[0] = -8192
    rewrite(file, "pulses/shaped/dac_i", codes)


def code_out_of_circle(file, folder):
    for name in ("dac_i", "dac_q"):
        codes = file[f"pulses/shaped/{name}"][()]
        codes[0] = 6000
        rewrite(file, f"pulses/shaped/{name}", codes)


def code_not_of_the_drive(file, folder):
    codes = file["pulses/shaped/dac_i"][()]
    codes[1] -= 2 * np.sign(codes[1])
    rewrite(file, "pulses/shaped/dac_i", codes)


def drive_out_of_bound(file, folder):
    drive = file["pulses/shaped/drive_x"][()]
    drive[0] = 1.001 * RABI_MAX
    rewrite(file, "pulses/shaped/drive_x", drive)


def drive_is_nan(file, folder):
    drive = file["pulses/shaped/drive_x"][()]
    drive[2] = np.nan
    rewrite(file, "pulses/shaped/drive_x", drive)


def full_scale_beyond_the_job(file, folder):
    file["pulses/shaped"].attrs["full_scale_rad_per_s"] = 2 * RABI_MAX


def full_scale_is_nan(file, folder):
    file["pulses/shaped"].attrs["full_scale_rad_per_s"] = np.nan


def too_many_bits(file, folder):
    file["pulses/shaped"].attrs["dac_bits"] = 64


def sample_too_few(file, folder):
    rewrite(file, "pulses/shaped/dac_i", file["pulses/shaped/dac_i"][:-1])


def segment_off_the_grid(file, folder):
    lengths = file["pulses/shaped/segment_s"][()]
    lengths[0] += 0.3e-9
    rewrite(file, "pulses/shaped/segment_s", lengths)


def segment_absurdly_long(file, folder):
    lengths = file["pulses/shaped/segment_s"][()]
    lengths[0] = 1e300
    rewrite(file, "pulses/shaped/segment_s", lengths)


def segment_too_long(file, folder):
    lengths = file["pulses/shaped/segment_s"][()]
    lengths[-1] += 1e-9
    rewrite(file, "pulses/shaped/segment_s", lengths)
    file["pulses/shaped"].attrs["duration_s"] += 1e-9


def duration_disagrees(file, folder):
    file["pulses/shaped"].attrs["duration_s"] = 1.0


def target_not_of_unit_length(file, folder):
    rewrite(file, "target/quaternion", np.array([1.0, 0.0, 0.0, 1.0]))


def rows_not_of_the_target(file, folder):
    rewrite(file, "target/quaternion", np.array([1.0, 0.0, 0.0, 0.0]))


def infidelity_above_one(file, folder):
    file["pulses/shaped"].attrs["infidelity_worst"] = 1.5


def infidelity_missing(file, folder):
    del file["pulses/shaped"].attrs["infidelity"]


def checksum_wrong(file, folder):
    file["pulses/shaped/dac_i"][0] += 1


def odd_pulse_name(file, folder):
    file["pulses"].move("shaped", "..\n")


def long_attribute(file, folder):
    file.attrs["title"] = np.bytes_(b"x" * 60_000)
    file.attrs["job"] = np.array([b"x" * 60_000])


HOSTILE = {
    external_link: "/pulses/other: expected an object of this file, got a link into another file",
    soft_link: "/pulses/other: expected an object of this file, got a symbolic link",
    dangling_link: "/history/gone: expected an object of this file, got a symbolic link",
    hard_link_cycle: "expected one link to each object",
    second_hard_link: "expected one link to each object",
    external_storage: "/history/leak: expected data inside this file, got external storage",
    virtual_dataset: "/history/leak: expected data inside this file, got a virtual dataset",
    variable_length_text: "/history/words: expected plain numbers, got elements of type object",
    object_reference: "/history/ref: expected plain numbers",
    object_reference_attribute: "/pulses/shaped, attribute ref: expected text or plain numbers",
    stored_type: "/history/kind: expected a group or a dataset, got a stored data type",
    unknown_filter: "/history/lzf: expected filters deflate, shuffle, fletcher32, got filter 32000",
    absurd_size: "/history/huge: expected at most 536870912 bytes of data, got 8000000000000",
    absurd_chunk: "/history/huge: expected at most 536870912 bytes of data, got 2147483648",
    promised_but_not_stored: "/history/zeros: expected stored data for 8000000 bytes, got 0 bytes",
    too_deep: "expected at most 8 levels of groups",
    too_many: "expected at most 2000 objects, got 2001",
    another_format: "attribute format: expected 'shaper-waveform', got 'something?else'",
    no_format: "attribute format: expected 'shaper-waveform', got ''",
    later_version: "attribute format_version: expected 1, got 2",
    job_of_garbage: "attribute job: expected a job with drive.rabi_max_MHz",
    job_is_a_number: "attribute job: expected text, got 5",
    pulse_missing: "/pulses: expected at least one pulse, got none",
    dataset_missing: "/pulses/shaped/drive_y: expected a dataset, got none",
    group_in_place_of_dataset: "/pulses/shaped/drive_y: expected a dataset",
    codes_of_another_type: "/pulses/shaped/dac_i: expected elements of type int16, got int32",
    drive_is_complex: "/pulses/shaped/drive_x: expected elements of type float64, got complex128",
    code_out_of_range: "/pulses/shaped/dac_i, dac_q: expected codes within 8191 (circle)",
    code_out_of_circle: "expected codes within 8191 (circle), got 8485.28",
    code_not_of_the_drive: "/pulses/shaped/dac_i, dac_q: expected the codes of drive_x, drive_y",
    drive_out_of_bound: "/pulses/shaped/drive_x, drive_y: drive: expected at most 1.5708e+08 rad/s",
    drive_is_nan: "/pulses/shaped/drive_x: expected finite numbers, got nan or infinity",
    full_scale_beyond_the_job: "full_scale_rad_per_s: expected at most 157079633 rad/s",
    full_scale_is_nan: "full_scale_rad_per_s: expected a finite number, got nan",
    too_many_bits: "attribute dac_bits: expected 2 to 16, got 64",
    sample_too_few: "/pulses/shaped/dac_i: expected shape (",
    segment_off_the_grid: "/pulses/shaped/segment_s: expected times on the sample grid",
    segment_absurdly_long: "/pulses/shaped/segment_s: expected segments of at least one sample",
    segment_too_long: "/pulses/shaped/dac_i: expected shape (",
    duration_disagrees: "attribute duration_s: expected ",
    target_not_of_unit_length: "/target/quaternion: expected length 1, got length 1.41421356",
    rows_not_of_the_target: "/target/error_rows: expected orthonormal rows that vanish on the",
    infidelity_above_one: "attribute infidelity_worst: expected 0 to 1, got 1.5",
    infidelity_missing: "attribute infidelity: expected this attribute, got none",
    checksum_wrong: "/pulses/shaped/dac_i: expected the data of its sha256 attribute",
    odd_pulse_name: "/pulses: expected names of letters, digits and _ + -, got '..?'",
    long_attribute: "attribute job: expected text, got a ndarray",
}


@pytest.mark.parametrize("spoil", HOSTILE, ids=lambda spoil: spoil.__name__)
def test_hostile_file_is_refused_in_one_line(tmp_path, rng, capfd, spoil):
    path = tmp_path / "a.h5"
    save_waveform(path, waveform(rng))
    with h5py.File(tmp_path / "secret.h5", "w") as secret:
        secret["x"] = np.arange(4.0)
    with h5py.File(path, "r+") as file:
        spoil(file, tmp_path)
    before = path.read_bytes()
    with pytest.raises(FileError) as caught:
        load_waveform(path)
    message = str(caught.value)
    assert message.startswith(f"{path}: ") and HOSTILE[spoil] in message
    assert message.isprintable()  # so it is one line
    assert capfd.readouterr() == ("", "")
    assert path.read_bytes() == before


@pytest.mark.parametrize(
    "content", [b"", b"not HDF5", b"\x89HDF\r\n\x1a\n" + bytes(500), "half"], ids=str
)
def test_what_is_not_a_whole_hdf5_file_is_refused(tmp_path, rng, capfd, content):
    path = tmp_path / "a.h5"
    if content == "half":
        save_waveform(path, waveform(rng))
        content = path.read_bytes()[: path.stat().st_size // 2]
    path.write_bytes(content)
    with pytest.raises(FileError) as caught:
        load_waveform(path)
    assert str(caught.value).startswith(f"{path}: expected a whole HDF5 file, got: ")
    assert str(caught.value).isprintable()
    assert capfd.readouterr() == ("", "")


def test_missing_folder_and_device_are_refused(tmp_path):
    with pytest.raises(FileError, match="cannot read: No such file"):
        load_waveform(tmp_path / "none.h5")
    with pytest.raises(FileError, match="cannot read: Is a directory"):
        load_waveform(tmp_path)
    with pytest.raises(FileError, match="expected a regular file"):
        load_waveform("/dev/null")


def test_file_size_is_capped(tmp_path, monkeypatch):
    path = tmp_path / "a.h5"
    path.write_bytes(bytes(2000))
    monkeypatch.setattr(layout, "MAX_FILE_BYTES", 1000)
    with pytest.raises(FileError, match="expected at most 1000 bytes, got 2000"):
        load_waveform(path)


def test_every_flipped_data_byte_is_noticed(tmp_path, rng):
    path = tmp_path / "a.h5"
    save_waveform(path, waveform(rng))
    whole = path.read_bytes()
    places = []
    with h5py.File(path) as file:
        file.visititems(
            lambda name, item: (
                places.extend(range(item.id.get_offset(), item.id.get_offset() + item.nbytes))
                if isinstance(item, h5py.Dataset)
                else None
            )
        )
    for place in rng.choice(places, 150, replace=False):
        damaged = bytearray(whole)
        damaged[place] ^= 1 << int(rng.integers(8))
        with pytest.raises(FileError, match="sha256"):
            decode_waveform(bytes(damaged), "a.h5")


def test_flipped_byte_in_packed_data_is_noticed(tmp_path, rng):
    record = waveform(rng)
    record.pulses["shaped"] = random_pulse(rng, 20_000, longest=6)
    path = tmp_path / "a.h5"
    save_waveform(path, record)
    with h5py.File(path) as file:
        chunk = file["pulses/shaped/dac_i"].id.get_chunk_info(0)
    damaged = bytearray(path.read_bytes())
    damaged[chunk.byte_offset + chunk.size // 2] ^= 1
    with pytest.raises(FileError):
        decode_waveform(bytes(damaged), "a.h5")


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
