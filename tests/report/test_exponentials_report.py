"""A fit in which both kernels are sums of exponentials has all its figures, and its page."""

from __future__ import annotations

from pathlib import Path

import pytest
from simulated_cells import neuron, recording_of_noise

from bayesglm.fitting.run import fit
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import override
from bayesglm.report.figures import draw_figures
from bayesglm.report.page import write_page
from bayesglm.report.tables import write_cell


def test_everything_is_written_where_no_kernel_has_a_sampled_sd(tmp_path: Path) -> None:
    settings = override(
        Settings(),
        [
            "kernels.input.basis=exponentials",
            "kernels.input.terms=1",
            "kernels.after_spike.basis=exponentials",
            "kernels.after_spike.terms=2",
            "sampling.draws=100",
            "sampling.warmup=50",
            "model.window_sensitivity=false",
        ],
    )
    one = fit(recording_of_noise(neuron(), seed=4, n_sweeps=6), settings)
    assert one.chains.median("sd").shape == (0,)
    tau = one.feature("input_time_constant_1")
    assert tau.mean == pytest.approx(20.0, rel=0.05)
    assert 0 < tau.upper - tau.lower < 2.0
    assert one.feature("after_spike_time_constant_2").unit == "ms"
    assert set(draw_figures(one)) >= {"leave_one_out", "prior_posterior", "trace_rank"}
    write_cell(one, tmp_path)
    page = tmp_path / "index.html"
    write_page([one], page, "exponentials")
    assert "Time constant 1 of κ" in page.read_text(encoding="utf-8")
