"""The one place where JAX is set up: float64, CPU, and a compile cache that outlives the process.

Importing this module before any array is made is what every module that uses JAX does. Without
the persistent cache each new process would compile the sampler again, which takes longer than
the sampling.
"""

from __future__ import annotations

import os
from pathlib import Path

import jax


def cache_folder() -> Path:
    """Folder of the compile cache: ``$XDG_CACHE_HOME/bayesglm``, else ``~/.cache/bayesglm``."""
    base = os.environ.get("XDG_CACHE_HOME")
    return (Path(base) if base else Path.home() / ".cache") / "bayesglm"


def _configure() -> None:
    options = {
        "jax_enable_x64": True,
        "jax_platforms": "cpu",
        "jax_compilation_cache_dir": str(cache_folder()),
        # Compiled pieces here take a fraction of a second each, but there are many.
        "jax_persistent_cache_min_compile_time_secs": 0.05,
        "jax_persistent_cache_min_entry_size_bytes": -1,
    }
    for name, value in options.items():
        jax.config.update(name, value)  # type: ignore[no-untyped-call]


_configure()
