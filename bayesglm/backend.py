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
    jax.config.update("jax_enable_x64", True)
    jax.config.update("jax_platforms", "cpu")
    jax.config.update("jax_compilation_cache_dir", str(cache_folder()))
    # Compiled pieces here take a fraction of a second each but are many.
    jax.config.update("jax_persistent_cache_min_compile_time_secs", 0.05)
    jax.config.update("jax_persistent_cache_min_entry_size_bytes", -1)


_configure()
