"""Waveforms for a bench that can only drive x and y."""

import sys
from importlib import import_module

__version__ = "0.1.0"

# public name -> the room it lives in; imported on first use, so that ``import shaper`` is light
_PUBLIC = {
    "compare": "shaper.workflow.compare",
    "load_waveform": "shaper.store",
    "optimize": "shaper.workflow.optimize",
    "parse_job": "shaper.job",
    "read_job": "shaper.job",
    "save_waveform": "shaper.store",
}

__all__ = ["__version__", *_PUBLIC]


def __getattr__(name: str) -> object:
    if name not in _PUBLIC:
        raise AttributeError(f"module 'shaper' has no attribute {name!r}")
    value = getattr(import_module(_PUBLIC[name]), name)
    globals()[name] = value  # found without this detour from now on
    if "IPython" in sys.modules:  # in a notebook results show themselves
        import_module("shaper.workflow.notebook").attach()
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *_PUBLIC})
