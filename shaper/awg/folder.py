"""Waveforms for an AWG without a link: blocks and tables in a folder, with a manifest.

The manifest is written last and names only what has been read back equal, so a folder with a
manifest is whole. The same input makes the same bytes: no times, no paths.
"""

from __future__ import annotations

import json
import re
from pathlib import Path

import numpy as np

from shaper import __version__
from shaper.awg import block
from shaper.awg.files import json_bytes, read_file, replace_file, sha256
from shaper.drive import dac
from shaper.errors import FileError, InputError, ReadBackError
from shaper.pulse import Pulse

MANIFEST = "manifest.json"
FORMAT, FORMAT_VERSION = "shaper-codes", 1
CSV_HEADER = "time_s,i_code,q_code"
_NAME = re.compile(r"[A-Za-z0-9][A-Za-z0-9_+-]{0,63}")
_MAX_MANIFEST_BYTES = 20_000_000
_MAX_FILE_BYTES = 2 * block.MAX_BYTES

SAFETY_NOTES = (
    "Nothing here switches an output on. Load with the output off; switching on is a step of its "
    "own by the person at the bench.",
    "Full scale is a Rabi rate, not a voltage: before use, measure volts per code into the real "
    "load and compare peak and mean power and duty cycle with the ratings of all that follows.",
    "Start 20 to 30 dB down and look at the signal in a matched load first. An amplifier is never "
    "run without a load.",
    "Some instruments hold the last sample: check that it is zero, or that the channel returns to "
    "zero by itself.",
    "Software limits are no interlock. Not for use on or around a person.",
)


def table_bytes(codes: np.ndarray, sample_rate: float) -> bytes:
    """The codes as CSV: a header row, then time (s) of each sample's start and its two codes."""
    times = (np.arange(len(codes)) / sample_rate).tolist()
    rows = zip(times, codes.tolist(), strict=True)
    return "\n".join([CSV_HEADER, *(f"{t!r},{i},{q}" for t, (i, q) in rows), ""]).encode()


def table_codes(data: bytes) -> np.ndarray:
    """[sample, 2] int16: the codes of a CSV table.

    Raises:
        FileError: if it is not one of ours.
    """
    head, _, body = data.decode("ascii", "replace").partition("\n")
    if head != CSV_HEADER:
        raise FileError(f"table: expected the header {CSV_HEADER}, got {head[:60]!r}")
    try:
        columns = [(int(i), int(q)) for _, i, q in (row.split(",") for row in body.split())]
        return np.array(columns, dtype=np.int16).reshape(-1, 2)
    except (ValueError, OverflowError) as error:
        raise FileError(f"table: expected rows of time and two codes: {error}") from error


def write_folder(
    folder: str | Path,
    pulses: dict[str, Pulse],
    *,
    granularity: int,
    minimum: int,
    layout: str = "apart",
    byte_order: str = "big",
    provenance: dict | None = None,
) -> dict:
    """Write each pulse as raw IEEE 488.2 blocks and as CSV, read all back, then the manifest.

    Files of the same name are replaced, each as a whole; the old manifest goes first, so that no
    manifest ever speaks of files that are not its own.

    Args:
        folder: made if it is not there.
        pulses: by name; the names become file names.
        granularity, minimum: samples; what the AWG takes. Zeros are added at the end.
        layout: "apart" (``NAME.i.block`` and ``NAME.q.block``) or "interleaved"
            (``NAME.iq.block``: I0, Q0, I1, Q1, ...).
        byte_order: "big" (the IEEE 488.2 usage) or "little".
        provenance: where the pulses come from; goes into the manifest as it is.
    Returns:
        The manifest.
    Raises:
        InputError: for an unusable name or no pulse at all.
        FileError: if a file cannot be written or read.
        ReadBackError: if what was read back is not what was written.
    """
    folder = Path(folder)
    if not pulses:
        raise InputError("pulses: expected at least one, got none")
    wrong = [name for name in pulses if not _NAME.fullmatch(name)]
    if wrong:
        raise InputError(f"pulse name: expected letters, digits, _ + -, got {wrong[0]!r}")
    entries, contents = [], {}
    padded = {n: dac.pad(pulse.codes, granularity, minimum) for n, pulse in pulses.items()}
    for name, pulse in pulses.items():
        files = _files(name, pulse, padded[name], layout, byte_order)
        entries.append(_entry(name, pulse, padded[name], files))
        contents |= files
    manifest = {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "software": f"shaper {__version__}",
        "waveform": provenance or {},
        "layout": layout,
        "word": "int16, two's complement, right-justified",
        "byte_order": byte_order,
        "block_form": "IEEE 488.2 definite-length arbitrary block, no terminator",
        "granularity_samples": granularity,
        "min_samples": minimum,
        "pulses": entries,
        "safety": list(SAFETY_NOTES),
    }
    try:
        folder.mkdir(parents=True, exist_ok=True)
        (folder / MANIFEST).unlink(missing_ok=True)
    except OSError as error:
        raise FileError(f"{folder}: cannot use the folder: {error.strerror}") from error
    for file, data in contents.items():
        replace_file(folder / file, data)
    _check(folder, manifest, padded)
    replace_file(folder / MANIFEST, json_bytes(manifest))
    return manifest


def read_folder(folder: str | Path) -> dict[str, np.ndarray]:
    """The codes of every pulse in the folder, checked against the manifest's fingerprints.

    Returns:
        [sample, 2] int16 by pulse name, padding included.
    Raises:
        FileError: if there is no manifest of ours or a file is missing.
        ReadBackError: if a file is not the one that the manifest describes.
    """
    folder = Path(folder)
    raw = read_file(folder / MANIFEST, _MAX_MANIFEST_BYTES)
    try:
        manifest = json.loads(raw)
        if (manifest["format"], manifest["format_version"]) != (FORMAT, FORMAT_VERSION):
            raise ValueError(f"format {manifest['format']!r} {manifest['format_version']!r}")
        return _check(folder, manifest)
    except (KeyError, TypeError, ValueError) as error:
        raise FileError(f"{folder / MANIFEST}: not a manifest of ours: {error}") from error


def _files(name: str, pulse: Pulse, codes: np.ndarray, layout: str, order: str) -> dict[str, bytes]:
    """Content by file name."""
    if layout not in block.LAYOUTS:
        raise InputError(f"layout: expected one of {', '.join(block.LAYOUTS)}, got {layout!r}")
    if order not in block.BYTE_ORDERS:
        raise InputError(f"byte order: expected one of big, little, got {order!r}")
    files = {
        f"{name}.{part}.block": block.encode(block.to_bytes(words, order))
        for part, words in block.split(codes, layout).items()
    }
    files[f"{name}.csv"] = table_bytes(codes, pulse.sample_rate)
    return files


def _entry(name: str, pulse: Pulse, codes: np.ndarray, files: dict[str, bytes]) -> dict:
    """What the manifest says of one pulse."""
    top = dac.largest_code(pulse.bits)
    listed = []
    for file, data in files.items():
        line = {"file": file, "bytes": len(data), "sha256": sha256(data)}
        if file.endswith(".block"):
            payload = block.decode(data)
            line |= {"data_bytes": len(payload), "data_sha256": sha256(payload)}
        listed.append(line)
    return {
        "name": name,
        "origin": pulse.origin,
        "source": pulse.source,
        "sample_rate_Hz": pulse.sample_rate,
        "bits": pulse.bits,
        "full_scale_code": top,
        "full_scale_rad_per_s": pulse.full_scale,
        "samples": len(pulse.codes),
        "pad_samples": len(codes) - len(pulse.codes),
        "total_samples": len(codes),
        "duration_s": pulse.duration,
        "peak_code": int(np.max(np.abs(codes.astype(int)))),
        "last_sample_is_zero": bool(not np.any(codes[-1])),
        "codes_sha256": sha256(block.to_bytes(codes.reshape(-1), "big")),
        "files": listed,
    }


def _check(
    folder: Path, manifest: dict, written: dict[str, np.ndarray] | None = None
) -> dict[str, np.ndarray]:
    """Read every file that the manifest names; compare bytes, fingerprints and codes."""
    found = {}
    for entry in manifest["pulses"]:
        words, table = {}, np.empty((0, 2), np.int16)
        for line in entry["files"]:
            name = line["file"]
            if Path(name).name != name:
                raise FileError(f"{folder / MANIFEST}: expected a bare file name, got {name!r}")
            data = read_file(folder / name, _MAX_FILE_BYTES)
            if len(data) != line["bytes"] or sha256(data) != line["sha256"]:
                raise ReadBackError(
                    f"{folder / name}: expected sha256 {line['sha256'][:16]}..., "
                    f"got {sha256(data)[:16]}... on reading back"
                )
            if name.endswith(".csv"):
                table = table_codes(data)
            else:
                part = name.split(".")[-2]
                words[part] = block.from_bytes(block.decode(data), manifest["byte_order"])
        codes = block.join(words)
        agree = np.array_equal(codes, table) and (
            written is None or np.array_equal(codes, written[entry["name"]])
        )
        if not agree or sha256(block.to_bytes(codes.reshape(-1), "big")) != entry["codes_sha256"]:
            raise ReadBackError(
                f"{folder}: pulse {entry['name']}: the codes read back differ from those written"
            )
        found[entry["name"]] = codes
    return found
