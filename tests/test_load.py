"""Waveforms into a folder: the bytes, the manifest, the reading back, the command."""

import hashlib
import json
import struct
from pathlib import Path

import numpy as np
import pytest
from awg_case import pulse, waveform

import shaper.awg.folder as folder_room
from shaper.awg.folder import read_folder, write_folder
from shaper.cli import main
from shaper.errors import FileError, InputError, ReadBackError
from shaper.store import save_waveform
from shaper.workflow.load import waveform_into_folder

TOP = 2**13 - 1


@pytest.mark.parametrize("order, sign", [("big", ">"), ("little", "<")])
def test_files_hold_the_codes_as_the_standard_says(tmp_path, rng, order, sign):
    wave = waveform(rng)
    manifest = waveform_into_folder(wave, tmp_path, byte_order=order)
    codes = wave.pulses["shaped"].codes
    raw = (tmp_path / "shaped.i.block").read_bytes()
    assert raw[:5] == b"#3128"  # 64 words: 60 samples padded to the minimum
    words = struct.unpack(f"{sign}64h", raw[5:])
    assert list(words) == codes[:, 0].tolist() + [0] * 4
    table = np.loadtxt(tmp_path / "sandwich.csv", delimiter=",", skiprows=1)
    np.testing.assert_array_equal(table[:, 1:], wave.pulses["sandwich"].codes)
    np.testing.assert_allclose(table[:, 0], np.arange(80) * 1e-9, rtol=1e-12)
    entry = manifest["pulses"][0]
    assert (entry["samples"], entry["pad_samples"], entry["total_samples"]) == (60, 4, 64)
    assert entry["full_scale_code"] == TOP and entry["sample_rate_Hz"] == 1e9
    for listed in (file for line in manifest["pulses"] for file in line["files"]):
        data = (tmp_path / listed["file"]).read_bytes()
        assert hashlib.sha256(data).hexdigest() == listed["sha256"]
        assert len(data) == listed["bytes"]
    assert json.loads((tmp_path / "manifest.json").read_text()) == manifest


def test_interleaved_holds_i_and_q_in_turn(tmp_path, rng):
    wave = waveform(rng)
    waveform_into_folder(wave, tmp_path, names=["sandwich"], layout="interleaved")
    assert sorted(p.name for p in tmp_path.iterdir()) == [
        "manifest.json",
        "sandwich.csv",
        "sandwich.iq.block",
    ]
    raw = (tmp_path / "sandwich.iq.block").read_bytes()
    assert raw[:5] == b"#3320"
    flat = wave.pulses["sandwich"].codes.reshape(-1)
    assert list(struct.unpack(">160h", raw[5:])) == flat.tolist()


def test_same_input_makes_the_same_bytes(tmp_path, rng):
    wave = waveform(rng)
    for place in ("one", "two"):
        waveform_into_folder(wave, tmp_path / place)
    for path in (tmp_path / "one").iterdir():
        assert path.read_bytes() == (tmp_path / "two" / path.name).read_bytes()


def test_last_sample_that_is_not_zero_is_said(tmp_path, rng):
    manifest = waveform_into_folder(waveform(rng), tmp_path)
    said = {entry["name"]: entry["last_sample_is_zero"] for entry in manifest["pulses"]}
    assert said == {"shaped": True, "sandwich": False}  # 80 samples fit the granularity exactly


@pytest.mark.parametrize("victim", ["shaped.i.block", "shaped.q.block", "shaped.csv"])
def test_a_changed_file_is_found(tmp_path, rng, victim):
    waveform_into_folder(waveform(rng), tmp_path)
    data = bytearray((tmp_path / victim).read_bytes())
    data[-2] ^= 1
    (tmp_path / victim).write_bytes(data)
    with pytest.raises(ReadBackError, match=victim):
        read_folder(tmp_path)


def test_a_disk_that_changes_bytes_is_found(tmp_path, rng, monkeypatch):
    def forgetful(path, data, **_):
        path.write_bytes(data[:-1] + bytes([data[-1] ^ 4]) if path.suffix == ".block" else data)

    monkeypatch.setattr(folder_room, "replace_file", forgetful)
    with pytest.raises(ReadBackError):
        waveform_into_folder(waveform(rng), tmp_path)
    assert not (tmp_path / "manifest.json").exists()


def test_read_folder_gives_the_codes(tmp_path, rng):
    wave = waveform(rng)
    waveform_into_folder(wave, tmp_path, byte_order="little", layout="interleaved")
    codes = read_folder(tmp_path)["sandwich"]
    np.testing.assert_array_equal(codes, wave.pulses["sandwich"].codes)


@pytest.mark.parametrize("text", ["", "{}", "[]", '{"format": "shaper-codes"}', "\x00"])
def test_a_manifest_that_is_not_ours_is_refused(tmp_path, text):
    (tmp_path / "manifest.json").write_text(text)
    with pytest.raises(FileError):
        read_folder(tmp_path)


def test_a_manifest_cannot_point_outside(tmp_path, rng):
    waveform_into_folder(waveform(rng), tmp_path)
    text = (tmp_path / "manifest.json").read_text()
    (tmp_path / "manifest.json").write_text(text.replace("shaped.csv", "../shaped.csv"))
    with pytest.raises(FileError, match="bare file name"):
        read_folder(tmp_path)


@pytest.mark.parametrize("name", ["../x", "", ".x", "a b", "a/b", "x" * 65])
def test_a_name_that_is_no_file_name_is_refused(tmp_path, rng, name):
    with pytest.raises(InputError, match="pulse name"):
        write_folder(tmp_path / "d", {name: pulse(4, rng)}, granularity=1, minimum=1)
    assert not (tmp_path / "d").exists()


def test_unknown_and_repeated_pulses_are_refused(tmp_path, rng):
    for names, words in ((["nonesuch"], "shaped, sandwich"), (["shaped"] * 2, "more than once")):
        with pytest.raises(InputError, match=words):
            waveform_into_folder(waveform(rng), tmp_path / "d", names=names)
    assert not (tmp_path / "d").exists()


def test_a_folder_that_cannot_be_made_is_one_line(tmp_path, rng):
    (tmp_path / "file").write_text("")
    with pytest.raises(FileError, match="cannot use the folder"):
        waveform_into_folder(waveform(rng), tmp_path / "file")


def test_command(tmp_path, rng, capsys):
    file, out = str(tmp_path / "z90.h5"), str(tmp_path / "out")
    save_waveform(file, waveform(rng))
    assert main(["load", file, "--folder", out, "--pulse", "shaped", "--json"]) == 0
    printed = capsys.readouterr()
    document = json.loads(printed.out)
    assert printed.err == "" and printed.out.count("\n") == 1
    assert [entry["name"] for entry in document["pulses"]] == ["shaped"]
    assert document["waveform"]["sha256"] == hashlib.sha256(Path(file).read_bytes()).hexdigest()
    assert main(["load", file, "--folder", out]) == 0
    assert "read back equal" in capsys.readouterr().out


@pytest.mark.parametrize(
    "options, code",
    [
        (["z90.h5", "--folder", "out", "--pulse", "other"], 2),
        (["z90.h5"], 2),  # neither a folder nor an instrument
        (["z90.h5", "--folder", "out", "--scale", "0.5"], 2),
        (["z90.h5", "z90.h5", "--folder", "out"], 2),
        (["z90.h5", "--to", "127.0.0.1:1"], 2),  # no profile
        (["nonesuch.h5", "--folder", "out"], 1),
        (["z90.h5", "--folder", "z90.h5"], 1),
    ],
)
def test_wrong_use_is_one_line_and_writes_nothing(
    tmp_path, rng, capsys, monkeypatch, options, code
):
    monkeypatch.chdir(tmp_path)
    save_waveform("z90.h5", waveform(rng))
    assert main(["load", *options]) == code
    printed = capsys.readouterr()
    assert printed.out == "" and printed.err.count("\n") == 1
    assert [path.name for path in tmp_path.iterdir()] == ["z90.h5"]
