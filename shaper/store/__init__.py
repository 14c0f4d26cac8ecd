"""The waveform file, HDF5, format version 1: written whole or not at all, read with suspicion."""

from shaper.store.read import load_waveform
from shaper.store.write import save_waveform

__all__ = ["load_waveform", "save_waveform"]
