"""How the compiler is set up: float64, fast loops, and compiled programs kept for the next run.

The one place where anything global is switched on, and only when a search is about to begin.
"""

from __future__ import annotations

import hashlib
import os
import platform
from pathlib import Path

CACHE_SWITCH = "SHAPER_CACHE"  # environment: a folder, or "off"
_FLAGS_KNOWN_TO = "0.10."  # jaxlib; one that does not know a flag would end the process
_LARGEST_LOOP = 10**9  # bytes; loops below are one kernel each, not kernels called one by one


def prepare() -> None:
    """Switch JAX to float64, set the compiler's flags, and point its cache to the user's folder.

    The flags only count if JAX has compiled nothing yet, and a user's own ``XLA_FLAGS`` are left
    alone. They make the engine two to three times faster at all sizes (DEVELOPERS.md).

    Programs are kept apart by library version and processor, since they are compiled for the
    processor at hand. ``SHAPER_CACHE=off`` keeps none, ``SHAPER_CACHE=FOLDER`` keeps them there. A
    folder that cannot be written is no error: compiling takes a second or two longer.
    """
    import jax

    jax.config.update("jax_enable_x64", True)
    if flags := _flags():
        os.environ.setdefault("XLA_FLAGS", " ".join(flags))
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


def _flags() -> list[str]:
    """Loops in one piece, on vectors as wide as the processor's; none to an unknown version."""
    import jaxlib

    if not jaxlib.__version__.startswith(_FLAGS_KNOWN_TO):
        return []
    loops = f"xla_cpu_small_while_loop_byte_threshold={_LARGEST_LOOP}"
    wide = ["--xla_cpu_prefer_vector_width=512"] if "avx512f" in _instruction_sets() else []
    return [f"--xla_backend_extra_options={loops}", *wide]


def _instruction_sets() -> str:
    """As Linux lists them; empty elsewhere."""
    try:
        with open("/proc/cpuinfo") as file:
            return next((line for line in file if line.startswith(("flags", "Features"))), "")
    except OSError:
        return ""


def _processor() -> str:
    """A short name for this kind of processor and its instruction sets."""
    features = platform.machine() + platform.processor() + _instruction_sets()
    return hashlib.sha256(features.encode()).hexdigest()[:12]
