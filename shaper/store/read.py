"""From a waveform file, trusted in nothing, to the record."""

from __future__ import annotations

import io
import math
import os
import stat
import tomllib
from pathlib import Path

import h5py
import numpy as np

from shaper.drive import dac
from shaper.errors import FileError, SafetyError
from shaper.pulse import Pulse, Score, Table, Waveform
from shaper.store import layout
from shaper.store.access import Access
from shaper.store.guard import check_structure, shown
from shaper.target import Target
from shaper.units import MHZ, MSPS

_ROUND_OFF = 1e-9  # relative; numbers that went through text and units
_CLOCK = 1e-6  # of a sample; how far a time may lie off the sample grid


def load_waveform(path: str | os.PathLike) -> Waveform:
    """Read a waveform file and check all of it.

    Structure (links, storage, filters, declared sizes) is checked before any data is read; then
    format, checksums, types, shapes, and whether the numbers agree with each other and with the
    bound of the job in the file. What a later program adds is ignored. The file is read once, as
    a whole, so it cannot change between the check and the use. Nothing in it is ever executed.

    The limit: a file that breaks the HDF5 library itself ends the process, which no check from
    here can prevent (measured: 3 of 12,000 files with up to 20 random bytes changed; the others
    were refused, or read where the change was harmless). Read files from strangers in a process
    of their own.

    Raises:
        FileError: one line: file, place in it, what was expected, what came.
    """
    path = Path(path)
    try:
        with open(path, "rb") as file:
            status = os.fstat(file.fileno())
            if not stat.S_ISREG(status.st_mode):
                raise FileError(f"{path}: expected a regular file")
            if status.st_size > layout.MAX_FILE_BYTES:
                raise FileError(
                    f"{path}: expected at most {layout.MAX_FILE_BYTES} bytes, got {status.st_size}"
                )
            data = file.read(status.st_size)
    except OSError as error:
        raise FileError(f"{path}: cannot read: {error.strerror}") from error
    return decode_waveform(data, str(path))


def decode_waveform(data: bytes, name: str) -> Waveform:
    """The record in the bytes of a waveform file, checked; ``name`` is for the messages.

    Raises:
        FileError: as ``load_waveform``.
    """
    try:
        # absurd numbers are refused by what they lead to, not by a warning on the way
        with h5py.File(io.BytesIO(data), "r") as file, np.errstate(all="ignore"):
            check_structure(file, name)
            reader = _Reader(file, name)
            record = reader.waveform()
            reader.check_unread()
            return record
    except FileError:
        raise
    except Exception as error:  # h5py raises whatever the damaged place makes it raise
        reason = shown(" ".join(str(error).split()))
        raise FileError(f"{name}: expected a whole HDF5 file, got: {reason}") from error


class _Reader(Access):
    """The parts of the record, each checked against the others."""

    def waveform(self) -> Waveform:
        root = self.file
        form = self.text(root, "format", "")
        if form != layout.FORMAT:
            raise self.refuse("/, attribute format", repr(layout.FORMAT), repr(shown(form)))
        version = self.integer(root, "format_version")
        if version != layout.VERSION:
            raise self.refuse("/, attribute format_version", str(layout.VERSION), version)
        job = self.text(root, "job")
        self.bound, self.rabi_max, self.drive = self.limits(job)
        target, rows, scale = self.target()
        pulses, scores = {}, {}
        group = self.group(root, "pulses")
        for name in group:
            self.check_name(group, name)
            pulses[name], scores[name] = self.pulse(self.group(group, name))
        if not pulses:
            raise self.refuse("/pulses", "at least one pulse", "none")
        history_attrs = {}
        if "history" in root:
            for key, value in self.attributes(self.group(root, "history")).items():
                if isinstance(value, str | int | float):
                    history_attrs[key] = value
        return Waveform(
            title=self.text(root, "title", ""),
            job_text=job,
            created=self.text(root, "created", ""),
            software=self.text(root, "software", ""),
            seed=self.integer(root, "seed", 0),
            status=self.text(root, "status", ""),
            target=target,
            error_rows=rows,
            error_scale=scale,
            pulses=pulses,
            scores=scores,
            history=self.tables("history"),
            history_attrs=history_attrs,
            evidence=self.tables("evidence"),
            notes=self.text(root, "notes", ""),
        )

    def limits(self, job: str) -> tuple[str, float, dict]:
        """Bound, largest rate (rad/s), and the job's drive section.

        No more of the job is looked at than these: jobs of any age stay readable.
        """
        bound, rabi_max, drive = "", math.nan, {}
        try:
            sections = tomllib.loads(job)
            drive = sections["drive"]
            self.straight = not (
                sections.get("mixer")
                or drive.get("intermediate_MHz")
                or drive.get("correction") == "inverse"
            )
            bound, rabi_max = drive.get("bound", "circle"), drive["rabi_max_MHz"]
            sane = bound in ("circle", "box") and math.isfinite(rabi_max) and rabi_max > 0
        except (tomllib.TOMLDecodeError, RecursionError, KeyError, TypeError, AttributeError):
            sane = False
        if not sane:
            raise self.refuse("/, attribute job", "a job with drive.rabi_max_MHz", "none")
        return bound, rabi_max * MHZ, drive

    def target(self) -> tuple[np.ndarray, np.ndarray, float]:
        group = self.group(self.file, "target")
        quaternion = self.array(group, "quaternion", "f8", (4,))
        if abs(np.linalg.norm(quaternion) - 1) > _ROUND_OFF:
            raise self.refuse(
                "/target/quaternion", "length 1", f"length {np.linalg.norm(quaternion):.9g}"
            )
        if "error_rows" not in group:
            exact = Target(quaternion)
            return quaternion, exact.error_rows, exact.scale
        rows = self.array(group, "error_rows", "f8", (None, 4))
        scale = self.number(group["error_rows"], "scale")
        if len(rows) not in (1, 2, 3) or not 0 < scale <= 1:
            raise self.refuse(
                "/target/error_rows",
                "1 to 3 rows and a scale in (0, 1]",
                f"{len(rows)} rows and scale {scale:.6g}",
            )
        off = max(np.max(np.abs(rows @ rows.T - np.eye(len(rows)))), np.max(abs(rows @ quaternion)))
        if off > _ROUND_OFF:
            raise self.refuse(
                "/target/error_rows",
                "orthonormal rows that vanish on the target",
                f"rows off by {off:.3g}",
            )
        return quaternion, rows, scale

    def pulse(self, group: h5py.Group) -> tuple[Pulse, Score]:
        place = group.name
        # the first files had neither rate nor bits here: they stand in the job as well
        msps, job_bits = self.drive.get("sample_rate_MSps"), self.drive.get("dac_bits")
        rate = self.positive(group, "sample_rate_Hz", msps and msps * MSPS)
        full_scale = self.positive(group, "full_scale_rad_per_s")
        bits = self.integer(group, "dac_bits", job_bits)
        if not 2 <= bits <= 16:
            raise self.refuse(f"{place}, attribute dac_bits", "2 to 16", bits)
        if full_scale > self.rabi_max * (1 + _ROUND_OFF):
            raise self.refuse(
                f"{place}, attribute full_scale_rad_per_s",
                f"at most {self.rabi_max:.9g} rad/s, as the job says",
                f"{full_scale:.9g}",
            )
        samples = self.sample_counts(group, rate)
        segments = (len(samples),)
        drive = np.stack([self.array(group, n, "f8", segments) for n in ("drive_x", "drive_y")], -1)
        total = (int(np.sum(samples)),)
        codes = np.stack([self.array(group, n, "i2", total) for n in ("dac_i", "dac_q")], -1)
        clock = self.array(group, "sample_s", "f8", total)
        self.check_times(f"{place}/sample_s", clock * rate, np.arange(len(codes)))
        self.check_codes(place, drive, samples, codes, full_scale, bits)
        scores = {}
        for attribute, field in layout.SCORES.items():
            if attribute in layout.OPTIONAL_SCORES and attribute not in group.attrs:
                scores[field] = None if field == "guaranteed" else math.nan
                continue
            scores[field] = self.number(group, attribute)
            if not 0 <= scores[field] <= 1 + _ROUND_OFF:
                raise self.refuse(
                    f"{place}, attribute {attribute}", "0 to 1", f"{scores[field]:.6g}"
                )
        pulse = Pulse(
            origin=self.text(group, "origin"),
            source=self.text(group, "source", ""),
            drive=drive,
            samples=samples,
            codes=codes,
            full_scale=full_scale,
            bits=bits,
            sample_rate=rate,
        )
        return pulse, Score(**scores)

    def sample_counts(self, group: h5py.Group, rate: float) -> np.ndarray:
        """[segment] whole samples, from the lengths; start times and duration must agree."""
        place = group.name
        lengths = self.array(group, "segment_s", "f8", (None,)) * rate
        limit = layout.MAX_DATA_BYTES
        if len(lengths) == 0 or not np.all((lengths > 0.5) & (lengths < limit)):
            raise self.refuse(f"{place}/segment_s", "segments of at least one sample", "others")
        samples = np.rint(lengths).astype(np.int64)
        self.check_times(f"{place}/segment_s", lengths, samples)
        starts = self.array(group, "segment_start_s", "f8", lengths.shape)
        self.check_times(f"{place}/segment_start_s", starts * rate, np.cumsum(samples) - samples)
        duration = self.number(group, "duration_s")
        total = float(np.sum(samples)) / rate
        if not abs(duration - total) <= _ROUND_OFF * total:
            raise self.refuse(
                f"{place}, attribute duration_s",
                f"{total:.9g} s, the sum of the segments",
                f"{duration:.9g} s",
            )
        return samples

    def check_times(self, place: str, in_samples: np.ndarray, whole: np.ndarray) -> None:
        off = float(np.max(np.abs(in_samples - whole), initial=0.0))
        if off > _CLOCK:
            raise self.refuse(place, "times on the sample grid", f"a time off by {off:.3g} samples")

    def check_codes(
        self,
        place: str,
        drive: np.ndarray,
        samples: np.ndarray,
        codes: np.ndarray,
        full_scale: float,
        bits: int,
    ) -> None:
        """Codes within the bound; on a straight path the drive too, and the codes its own.

        Own means within one step. Where the job corrects mixer or line, or puts the pulse on an
        intermediate frequency, the codes are something else than the drive wanted.
        """
        top = dac.largest_code(bits)
        wide = codes.astype(np.int64)
        outside = np.max(np.abs(wide)) > top
        if self.bound == "circle":
            outside |= np.max(np.sum(wide**2, axis=1)) > top**2
        if outside:
            largest = np.max(np.hypot(*wide.T) if self.bound == "circle" else np.abs(wide))
            raise self.refuse(
                f"{place}/dac_i, dac_q", f"codes within {top} ({self.bound})", f"{largest:.9g}"
            )
        if not self.straight:  # corrections stand between the drive and its codes
            return
        try:
            wanted = np.repeat(dac.encode(drive, full_scale, bits, self.bound), samples, axis=0)
        except SafetyError as error:
            raise FileError(f"{self.name}: {shown(place)}/drive_x, drive_y: {error}") from error
        apart = int(np.max(np.abs(wide - wanted)))
        if apart > 1:
            raise self.refuse(
                f"{place}/dac_i, dac_q", "the codes of drive_x, drive_y", f"codes {apart} off"
            )

    def tables(self, place: str) -> dict[str, Table]:
        """History or evidence: every dataset with named axes, but for mere axis indices."""
        if place not in self.file:
            return {}
        group = self.group(self.file, place)
        by_address = {_address(item): n for n, item in group.items()}
        tables = {}
        for name, dataset in group.items():
            self.check_name(group, name)
            if not isinstance(dataset, h5py.Dataset) or "index" in dataset.attrs:
                continue
            if dataset.dtype.kind not in "iuf":
                continue  # of a later program
            values = self.array(group, name, None, (None,) * dataset.ndim)
            if dataset.is_scale and dataset.ndim == 1:
                axes: list[str | None] = [name]
            else:
                axes = [
                    by_address.get(_address(dim[0])) if len(dim) else None for dim in dataset.dims
                ]
            if None in axes:
                raise self.refuse(dataset.name, "a scale in this group for every axis", "none")
            units, long_name = (self.text(dataset, n, "") for n in ("units", "long_name"))
            tables[name] = Table(values, tuple(axes), units, long_name)
        return tables


def _address(item: h5py.Group | h5py.Dataset) -> int:
    return h5py.h5o.get_info(item.id).addr
