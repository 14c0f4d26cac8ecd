"""Typed access to an open waveform file; every refusal names the place, in one line."""

from __future__ import annotations

import math

import h5py
import numpy as np

from shaper.errors import FileError
from shaper.store import layout
from shaper.store.guard import shown


class Access:
    """Groups, arrays and attributes of one file, of the expected kind or refused.

    All methods raise FileError, or hand it over for raising, as ``refuse`` does.
    """

    def __init__(self, file: h5py.File, name: str):
        self.file = file
        self.name = name
        self.read: set[str] = set()  # datasets whose checksum was looked at

    def refuse(self, place: str, expected: str, got: object) -> FileError:
        return FileError(f"{self.name}: {shown(place)}: expected {expected}, got {got}")

    def check_name(self, group: h5py.Group, name: str) -> None:
        if not layout.is_name(name):
            raise self.refuse(group.name, "names of letters, digits and _ + -", repr(shown(name)))

    def group(self, parent: h5py.Group, name: str) -> h5py.Group:
        item = parent.get(name)
        if not isinstance(item, h5py.Group):
            raise self.refuse(f"{parent.name.rstrip('/')}/{name}", "a group", "none")
        return item

    def array(self, group: h5py.Group, name: str, kind: str | None, shape: tuple) -> np.ndarray:
        """A dataset, native byte order, its checksum and (unless a table's) finiteness checked."""
        place = f"{group.name.rstrip('/')}/{name}"
        item = group.get(name)
        if not isinstance(item, h5py.Dataset):
            raise self.refuse(place, "a dataset", "none")
        if kind is not None and item.dtype.newbyteorder("=") != np.dtype(kind):
            raise self.refuse(place, f"elements of type {np.dtype(kind)}", shown(str(item.dtype)))
        expected = tuple(n if n is not None else m for n, m in zip(shape, item.shape, strict=False))
        if len(shape) != len(item.shape) or item.shape != expected:
            wanted = ", ".join("n" if n is None else str(n) for n in shape)
            raise self.refuse(place, f"shape ({wanted})", item.shape)
        values = np.asarray(item[()])
        values = values.astype(values.dtype.newbyteorder("="))
        self.read.add(item.name)
        if "sha256" in item.attrs and self.text(item, "sha256") != layout.digest(values):
            raise self.refuse(place, "the data of its sha256 attribute", "other data: damaged")
        if kind is not None and not np.all(np.isfinite(values)):
            raise self.refuse(place, "finite numbers", "nan or infinity")
        return values

    def check_unread(self) -> None:
        """The checksums of those datasets that nothing asked for, such as mere indices."""

        def check(name: str, item: h5py.Group | h5py.Dataset) -> None:
            unread = isinstance(item, h5py.Dataset) and item.name not in self.read
            if unread and "sha256" in item.attrs:
                self.array(self.file, name, None, (None,) * item.ndim)

        self.file.visititems(check)

    def text(self, item: h5py.Group | h5py.Dataset, key: str, default: str | None = None) -> str:
        value = self.attribute(item, key, default)
        if not isinstance(value, str):
            raise self.refuse(f"{item.name}, attribute {key}", "text", _kind(value))
        return value

    def number(
        self, item: h5py.Group | h5py.Dataset, key: str, default: float | None = None
    ) -> float:
        value = self.attribute(item, key, default)
        number = isinstance(value, int | float) and not isinstance(value, bool)
        if not number or not math.isfinite(value):
            raise self.refuse(f"{item.name}, attribute {key}", "a finite number", _kind(value))
        return float(value)

    def positive(self, item: h5py.Group, key: str, default: float | None = None) -> float:
        value = self.number(item, key, default)
        if not value > 0:
            raise self.refuse(f"{item.name}, attribute {key}", "a positive number", f"{value:g}")
        return value

    def integer(self, item: h5py.Group, key: str, default: int | None = None) -> int:
        value = self.attribute(item, key, default)
        if not isinstance(value, int) or isinstance(value, bool):
            raise self.refuse(f"{item.name}, attribute {key}", "an integer", _kind(value))
        return value

    def attributes(self, item: h5py.Group) -> dict[str, object]:
        """All attributes as Python values."""
        return {key: self.attribute(item, key, None) for key in item.attrs}

    def attribute(self, item: h5py.Group | h5py.Dataset, key: str, default: object) -> object:
        """The attribute as a Python value; a missing one without a default is refused."""
        if key not in item.attrs:
            if default is None:
                raise self.refuse(f"{item.name}, attribute {key}", "this attribute", "none")
            return default
        value = item.attrs[key]
        if isinstance(value, bytes):
            return value.decode("utf-8")
        return value.item() if isinstance(value, np.generic) else value


def _kind(value: object) -> str:
    """What came, in a word or two."""
    if isinstance(value, float | int):
        return f"{value:g}"
    return f"text {shown(value)!r}" if isinstance(value, str) else f"a {type(value).__name__}"
