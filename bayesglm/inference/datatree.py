"""The posterior as an xarray DataTree, in the groups that ArviZ reads."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import xarray as xr

from bayesglm.inference.bands import kernel_lags, kernel_rows
from bayesglm.recording.recording import FloatArray

if TYPE_CHECKING:
    from bayesglm.inference.results import CellFit

SCHEMA_VERSION = 1


def to_datatree(fit: CellFit) -> xr.DataTree:
    """Collect draws, sampler statistics and what they rest on.

    Parameters
    ----------
    fit
        The fit of a cell.

    Returns
    -------
    xarray.DataTree
        Groups ``posterior`` (``sd_input`` …, or ``tau_input`` … in ms for a kernel of
        exponentials, ``phi``, ``offset``, ``electrode``, and the weights of each kernel),
        ``sample_stats`` and ``constant_data`` (lags and basis of each kernel:
        ``posterior.input_weights @ constant_data.input_splines`` is κ at ``input_lag`` in ms).
    """
    draws: dict[str, tuple[tuple[str, ...], FloatArray]] = {
        "phi": (("chain", "draw"), fit.chains.draws["phi"])
    }
    constant: dict[str, tuple[tuple[str, ...], FloatArray]] = {}
    coords: dict[str, FloatArray] = {}
    for k, name in enumerate(fit.prior.names):
        draws[f"sd_{name}"] = (("chain", "draw"), fit.chains.draws["sd"][..., k])
    for name, tau in fit.chains.time_constants.items():
        draws[f"tau_{name}"] = (("chain", "draw", f"{name}_term"), tau)
    for name, place in fit.design.columns.items():
        values = fit.weights[..., place]
        if name == "electrode" and fit.design.electrode_kernel is not None:
            draws[name] = (("chain", "draw", "electrode_lag"), values)
            coords["electrode_lag"] = kernel_lags(fit.design, name)
            continue
        if name not in fit.design.kernels:
            draws[name] = (("chain", "draw"), values[..., 0])
            continue
        lags = kernel_lags(fit.design, name)
        draws[f"{name}_weights"] = (("chain", "draw", f"{name}_weight"), values)
        splines = kernel_rows(fit.design, name, lags)[:, place]
        constant[f"{name}_splines"] = ((f"{name}_lag", f"{name}_weight"), splines)
        coords[f"{name}_lag"] = lags
    statistics = {
        "diverging": fit.chains.diverging,
        "energy": fit.chains.energy,
        "acceptance_rate": fit.chains.accept_prob,
        "n_steps": fit.chains.n_steps,
    }
    chains = {"chain": np.arange(fit.weights.shape[0]), "draw": np.arange(fit.weights.shape[1])}
    stats = {name: (("chain", "draw"), values) for name, values in statistics.items()}
    attributes = {
        "cell": fit.name,
        "schema_version": SCHEMA_VERSION,
        "verdict": fit.verdict.verdict,
    }
    return xr.DataTree.from_dict(
        {
            "/": xr.Dataset(attrs=attributes),
            "posterior": xr.Dataset(draws, coords=chains),
            "sample_stats": xr.Dataset(stats, coords=chains),
            "constant_data": xr.Dataset(constant, coords=coords),
        }
    )
