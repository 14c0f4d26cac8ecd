"""Damaged and hostile waveform files: each refused in one line, and nothing else happens."""

import h5py
import numpy as np
import pytest
from waveforms import RABI_MAX, random_pulse, waveform

from shaper.errors import FileError
from shaper.store import layout, load_waveform, save_waveform
from shaper.store.read import decode_waveform


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
