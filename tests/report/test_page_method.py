"""What was fitted, in words: the basis of each kernel."""

from __future__ import annotations

from dataclasses import replace

import pytest

from bayesglm.inference.results import CellFit
from bayesglm.kernels.basis import KernelSpec
from bayesglm.kernels.design import electrode_spec
from bayesglm.report.page_method import fitted


@pytest.mark.parametrize(
    ("spec", "size", "words"),
    [
        (KernelSpec(90.0), "90 ms, 14 weights", "B-splines, knots even in log(1 + lag/2 ms)"),
        (
            KernelSpec(90.0, 9, 4.0, "cosines"),
            "90 ms, 9 weights",
            "raised cosines, even in log(1 + lag/4 ms)",
        ),
        (
            KernelSpec(90.0, 20, 2.0, "lags", 0.5),
            "90 ms, 20 weights",
            "lags at least 0.5 ms apart, even in log(1 + lag/2 ms)",
        ),
        (
            KernelSpec(90.0, 180, 2.0, "lags", 0.5),
            "90 ms, 180 weights",
            "one coefficient for each 0.5 ms of lag",
        ),
        (
            KernelSpec(90.0, 14, 2.0, "exponentials", 0.5, 1),
            "90 ms, 1 exponential",
            "time constants fitted; carried by 14 B-splines",
        ),
    ],
)
def test_the_page_tells_the_basis(
    linear_fit: CellFit, spec: KernelSpec, size: str, words: str
) -> None:
    design = replace(linear_fit.design, input=spec, electrode_kernel=electrode_spec(0.8, 0.2))
    facts = {fact.what: fact for fact in fitted(replace(linear_fit, design=design)).model}
    assert (facts["Kernel κ"].value, facts["Kernel κ"].remark) == (size, words)
    assert facts["Electrode kernel"].value == "0.8 ms, 4 bins of lags"
    assert "Electrode kernel" not in {fact.what for fact in fitted(linear_fit).model}
