"""What a file may be made of, checked before any of its data is read.

HDF5 can point outside the file, into other files and back into itself, and can promise terabytes
in a kilobyte. None of this has a place in a waveform file, so the whole tree is walked first, by
links and headers alone, and refused at the first thing that is not plain data.
"""

from __future__ import annotations

import h5py
import numpy as np

from shaper.errors import FileError
from shaper.store import layout

_FILTERS = {1: "deflate", 2: "shuffle", 3: "fletcher32"}
_DEFLATE_RATIO = 1100  # deflate cannot pack more than 1032 to 1
# dimension scales refer to each other through these two; they are never followed here
_SCALE_ATTRIBUTES = ("DIMENSION_LIST", "REFERENCE_LIST")


def check_structure(file: h5py.File, name: str) -> None:
    """Walk the whole file; refuse all but hard links to plain numeric arrays of sane size.

    Raises:
        FileError: one line: file, place in it, what was expected, what came.
    """
    _Walk(name).group(file, "/", 0)


class _Walk:
    """One pass over a file, with what it has seen so far."""

    def __init__(self, name: str):
        self.name = name
        self.seen: set = set()
        self.declared = 0

    def refuse(self, place: str, expected: str, got: str) -> None:
        raise FileError(f"{self.name}: {shown(place)}: expected {expected}, got {got}")

    def group(self, group: h5py.Group, place: str, depth: int) -> None:
        if depth > layout.MAX_DEPTH:
            self.refuse(place, f"at most {layout.MAX_DEPTH} levels of groups", "more")
        self.once(group, place)
        self.attributes(group, place)
        if len(group) > layout.MAX_OBJECTS:
            self.refuse(place, f"at most {layout.MAX_OBJECTS} objects", f"{len(group)}")
        for key in group:
            below = place.rstrip("/") + "/" + key
            link = group.get(key, getlink=True)
            if not isinstance(link, h5py.HardLink):
                kind = "a link into another file"
                if isinstance(link, h5py.SoftLink):
                    kind = "a symbolic link"
                self.refuse(below, "an object of this file", kind)
            item = group.get(key)
            if isinstance(item, h5py.Group):
                self.group(item, below, depth + 1)
            elif isinstance(item, h5py.Dataset):
                self.dataset(item, below)
            else:
                self.refuse(below, "a group or a dataset", "a stored data type")

    def once(self, item: h5py.Group | h5py.Dataset, place: str) -> None:
        info = h5py.h5o.get_info(item.id)
        mark = (info.fileno, info.addr)
        if mark in self.seen:
            self.refuse(place, "one link to each object", "a second link to the same object")
        self.seen.add(mark)
        if len(self.seen) > layout.MAX_OBJECTS:
            self.refuse(place, f"at most {layout.MAX_OBJECTS} objects", "more")

    def dataset(self, dataset: h5py.Dataset, place: str) -> None:
        self.once(dataset, place)
        self.attributes(dataset, place)
        if dataset.external is not None:
            self.refuse(place, "data inside this file", "external storage")
        if dataset.is_virtual:
            self.refuse(place, "data inside this file", "a virtual dataset")
        if dataset.dtype.kind not in "iufcbS" or dataset.dtype.hasobject:
            self.refuse(place, "plain numbers", f"elements of type {shown(str(dataset.dtype))}")
        if dataset.shape is None:
            self.refuse(place, "an array", "no data at all")
        plan = dataset.id.get_create_plist()
        for index in range(plan.get_nfilters()):
            code = plan.get_filter(index)[0]
            if code not in _FILTERS:
                self.refuse(place, f"filters {', '.join(_FILTERS.values())}", f"filter {code}")
        size = int(np.prod([int(n) for n in dataset.shape], dtype=object)) * dataset.dtype.itemsize
        chunk = 0
        if dataset.chunks is not None:
            chunk = int(np.prod(dataset.chunks, dtype=object)) * dataset.dtype.itemsize
        self.declared += size
        if max(self.declared, chunk) > layout.MAX_DATA_BYTES:
            self.refuse(
                place, f"at most {layout.MAX_DATA_BYTES} bytes of data", f"{max(size, chunk)} bytes"
            )
        stored = dataset.id.get_storage_size()
        if size > stored * _DEFLATE_RATIO:
            self.refuse(place, f"stored data for {size} bytes", f"{stored} bytes")

    def attributes(self, item: h5py.Group | h5py.Dataset, place: str) -> None:
        if len(item.attrs) > layout.MAX_OBJECTS:
            self.refuse(place, f"at most {layout.MAX_OBJECTS} attributes", f"{len(item.attrs)}")
        for key in item.attrs:
            attribute = item.attrs.get_id(key)
            where = f"{place}, attribute {key}"
            if attribute.get_storage_size() > layout.MAX_ATTRIBUTE_BYTES:
                self.refuse(
                    where,
                    f"at most {layout.MAX_ATTRIBUTE_BYTES} bytes",
                    f"{attribute.get_storage_size()}",
                )
            if key in _SCALE_ATTRIBUTES:
                continue
            text = h5py.check_string_dtype(attribute.dtype) is not None
            if not text and (attribute.dtype.kind not in "iufbS" or attribute.dtype.hasobject):
                self.refuse(where, "text or plain numbers", shown(str(attribute.dtype)))


def shown(text: str) -> str:
    """Text from a file, fit for one line of a message: no control characters, not too long."""
    text = "".join(c if c.isprintable() else "?" for c in text)
    return text if len(text) <= 80 else text[:77] + "..."
