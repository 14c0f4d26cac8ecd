"""How the compiler is set up: float64, and compiled programs kept for the next run.

The one place where anything global is switched on, and only when a search is about to begin.
"""

from __future__ import annotations

import hashlib
import os
import platform
from pathlib import Path

CACHE_SWITCH = "SHAPER_CACHE"  # environment: a folder, or "off"


def prepare() -> None:
    """Switch JAX to float64 and point its compilation cache to the user's cache folder.

    Programs are kept apart by library version and processor, since they are compiled for the
    processor at hand. ``SHAPER_CACHE=off`` keeps none, ``SHAPER_CACHE=FOLDER`` keeps them there. A
    folder that cannot be written is no error: compiling takes a second or two longer.
    """
    import jax

    jax.config.update("jax_enable_x64", True)
    folder = cache_folder()
    if folder is None:
        return
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError:
        return
    jax.config.update("jax_compilation_cache_dir", str(folder))
    jax.config.update("jax_persistent_cache_min_compile_time_secs", 0.0)
    jax.config.update("jax_persistent_cache_min_entry_size_bytes", 0)
    jax.config.update("jax_raise_persistent_cache_errors", False)


def cache_folder() -> Path | None:
    """Where compiled programs are kept, or None if they are not."""
    chosen = os.environ.get(CACHE_SWITCH, "")
    if chosen.lower() == "off":
        return None
    if chosen:
        base = Path(chosen)
    else:
        home = os.environ.get("XDG_CACHE_HOME") or os.path.join(os.path.expanduser("~"), ".cache")
        base = Path(home) / "shaper"
    import jaxlib

    return base / f"jaxlib-{jaxlib.__version__}-{_processor()}"


def _processor() -> str:
    """A short name for this kind of processor and its instruction sets."""
    features = platform.machine() + platform.processor()
    try:
        with open("/proc/cpuinfo") as file:
            features += next((line for line in file if line.startswith(("flags", "Features"))), "")
    except OSError:
        pass  # not Linux: the machine's name must do
    return hashlib.sha256(features.encode()).hexdigest()[:12]
