"""The posterior as a tree that ArviZ reads, and back from disk to the bit."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from arviz_stats import ess

from bayesglm.inference.datatree import SCHEMA_VERSION, to_datatree
from bayesglm.inference.results import CellFit


def test_groups_and_names(linear_fit: CellFit) -> None:
    tree = linear_fit.posterior
    assert set(tree.children) == {"posterior", "sample_stats", "constant_data"}
    assert set(tree["posterior"].data_vars) == {
        "phi",
        "sd_input",
        "sd_after_spike",
        "offset",
        "electrode",
        "input_weights",
        "after_spike_weights",
    }
    statistics = {"diverging", "energy", "acceptance_rate", "n_steps"}
    assert set(tree["sample_stats"].data_vars) == statistics
    assert dict(tree["posterior"].sizes) | {"chain": 4, "draw": 500} == dict(
        tree["posterior"].sizes
    )
    assert tree.attrs["cell"] == "simulated"
    assert tree.attrs["schema_version"] == SCHEMA_VERSION
    assert tree.attrs["verdict"] == linear_fit.verdict.verdict


@pytest.mark.parametrize("kernel", ["input", "after_spike"])
def test_weights_times_splines_are_the_kernel(linear_fit: CellFit, kernel: str) -> None:
    tree, band = linear_fit.posterior, linear_fit.kernel(kernel)
    curves = tree["posterior"][f"{kernel}_weights"] @ tree["constant_data"][f"{kernel}_splines"]
    mean = curves.mean(("chain", "draw"))
    np.testing.assert_array_equal(mean[f"{kernel}_lag"], band.lags_ms)
    known = np.isfinite(band.mean)
    np.testing.assert_allclose(mean.values[known], band.mean[known], rtol=1e-9, atol=1e-12)


def test_comes_back_from_disk_to_the_bit(linear_fit: CellFit, tmp_path: Path) -> None:
    tree = to_datatree(linear_fit)
    tree.to_netcdf(tmp_path / "posterior.nc", engine="h5netcdf")
    with xr.open_datatree(tmp_path / "posterior.nc", engine="h5netcdf") as back:
        for group in tree.children:
            xr.testing.assert_identical(back[group].to_dataset().load(), tree[group].to_dataset())


def test_arviz_reads_it(linear_fit: CellFit) -> None:
    found = ess(linear_fit.posterior, var_names=["phi"])
    value = found["posterior"]["phi"] if "posterior" in found else found["phi"]
    assert float(value) > 200
