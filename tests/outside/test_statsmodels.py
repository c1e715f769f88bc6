"""Outside witness: statsmodels' ordinary least squares and mixed model."""

from __future__ import annotations

import numpy as np
import pytest
import statsmodels.api as sm
from simulated_cells import arbitrary_recording, matrix_digest, plain_design

from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import VoltageDesign
from bayesglm.likelihood import reference
from bayesglm.likelihood.clusters import clustered
from bayesglm.likelihood.least_squares import (
    column_scale,
    least_squares,
    sandwich,
    unit_scores,
)
from bayesglm.likelihood.offsets import reml_ratios, sweep_sums
from bayesglm.likelihood.voltage import row_digest, voltage_digest


@pytest.mark.parametrize("n_units", [5, 24])
def test_unshrunk_sandwich_is_the_cluster_robust_covariance(n_units: int) -> None:
    rng = np.random.default_rng(n_units)
    n = 2400
    x = np.column_stack([np.ones(n), rng.normal(size=(n, 6)).cumsum(axis=0) / 30])
    groups = np.arange(n) * n_units // n
    v = x @ np.arange(7.0) + rng.normal(size=n) + rng.normal(size=n_units)[groups]
    digest = matrix_digest(x, v, n_units)
    fit = least_squares(digest, column_scale(digest))
    options = {"groups": groups, "use_correction": False}
    theirs = sm.OLS(v, x).fit(cov_type="cluster", cov_kwds=options)
    sd = np.asarray(theirs.bse)
    np.testing.assert_allclose((fit.weights - theirs.params) / sd, 0.0, atol=1e-8)
    difference = (sandwich(digest, fit) - theirs.cov_params()) / np.outer(sd, sd)
    assert np.abs(difference).max() < 1e-8
    plain = sm.OLS(v, x).fit()
    np.testing.assert_allclose(fit.white_covariance, plain.cov_params(), rtol=1e-8, atol=1e-12)
    assert fit.residual_variance == pytest.approx(plain.scale, rel=1e-10)


@pytest.mark.parametrize("n_repeats", [3, 8])
def test_two_way_clusters_are_those_of_statsmodels(n_repeats: int) -> None:
    """A current repeated in every sweep: clusters by stimulus time and by sweep, not floored."""
    rng = np.random.default_rng(n_repeats)
    n_blocks, rows = 12, 60
    once = rng.normal(size=(n_blocks * rows, 6)).cumsum(axis=0) / 30
    x = np.column_stack([np.ones(n_repeats * len(once)), np.tile(once, (n_repeats, 1))])
    sweep = np.repeat(np.arange(n_repeats), n_blocks * rows)
    block = np.tile(np.repeat(np.arange(n_blocks), rows), n_repeats)
    v = x @ np.arange(7.0) + rng.normal(size=len(x))
    v += rng.normal(size=n_blocks)[block] + rng.normal(size=n_repeats)[sweep]
    units, design = sweep * n_blocks + block, plain_design(5)
    digest = row_digest(x, v, units, sweep, design, stimuli=block)
    fit = least_squares(digest, column_scale(digest))
    options = {"groups": np.column_stack([block, sweep]), "use_correction": False}
    theirs = sm.OLS(v, x).fit(cov_type="cluster", cov_kwds=options).cov_params()
    sd = np.sqrt(np.diagonal(sm.OLS(v, x).fit().cov_params()))
    difference = (sandwich(digest, fit) - theirs) / np.outer(sd, sd)
    assert np.abs(difference).max() < 1e-8
    one_way = clustered(unit_scores(digest, fit) @ fit.basis.T, np.arange(digest.n_units))
    assert np.abs((one_way - theirs) / np.outer(sd, sd)).max() > 0.1


def test_streamed_digest_against_statsmodels_on_plain_rows() -> None:
    """From recording to sandwich by the fast path, against loops and statsmodels."""
    design = VoltageDesign(
        KernelSpec(15.0, 6, 10.0), KernelSpec(18.0, 5, 10.0), spike_window_ms=(-0.5, 1.0)
    )
    recording = arbitrary_recording(0.5, (900, 1001))
    digest = voltage_digest((recording,), design, 90.0)
    rows = reference.recording_rows(recording, design, 5)
    assert digest.n_units == len(np.unique(rows.unit)) == 10
    fit = least_squares(digest, column_scale(digest))
    options = {"groups": rows.unit, "use_correction": False}
    theirs = sm.OLS(rows.v, rows.x).fit(cov_type="cluster", cov_kwds=options)
    sd = np.asarray(theirs.bse)
    np.testing.assert_allclose((fit.weights - theirs.params) / sd, 0.0, atol=1e-8)
    difference = (sandwich(digest, fit) - theirs.cov_params()) / np.outer(sd, sd)
    assert np.abs(difference).max() < 1e-8


def test_offsets_are_those_of_a_random_intercept_model() -> None:
    """statsmodels' MixedLM by REML: variance of the intercepts over that of the noise."""
    rng = np.random.default_rng(0)
    sizes = rng.integers(10, 40, 25)
    groups = np.repeat(np.arange(25), sizes)
    n = len(groups)
    x = np.column_stack([np.ones(n), rng.normal(size=(n, 2))])
    v = x @ [1.0, 2.0, 3.0] + 0.8 * rng.normal(size=25)[groups] + rng.normal(size=n)
    theirs = sm.MixedLM(v, x, groups).fit(reml=True)
    z = np.column_stack([x, v])
    gram = np.array([z[groups == g].T @ z[groups == g] for g in range(25)])
    ratio = reml_ratios(sweep_sums(gram, np.arange(25)), 1, np.eye(3), 1e-10)[0]
    expected = float(np.asarray(theirs.cov_re)[0, 0]) / theirs.scale
    assert ratio == pytest.approx(expected, rel=1e-3)
