"""JAX in double precision on the CPU, with a compile cache in the user's cache folder."""

from __future__ import annotations

from pathlib import Path

import jax
import jax.numpy as jnp
import pytest

from bayesglm import backend


def test_double_precision_on_the_cpu() -> None:
    assert jnp.asarray(1.0).dtype == jnp.float64
    assert jnp.asarray(0.1) + jnp.asarray(0.2) == 0.1 + 0.2
    assert {device.platform for device in jax.devices()} == {"cpu"}


def test_cache_folder_follows_the_environment(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    assert backend.cache_folder() == tmp_path / "bayesglm"
    monkeypatch.delenv("XDG_CACHE_HOME")
    monkeypatch.setenv("HOME", str(tmp_path))
    assert backend.cache_folder() == tmp_path / ".cache" / "bayesglm"


def test_compiled_programs_outlive_the_process() -> None:
    assert jax.config.jax_compilation_cache_dir == str(backend.cache_folder())  # type: ignore[attr-defined]
