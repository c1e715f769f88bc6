"""Rows of the diagnosis at and around their limits; R̂ and effective draws on made chains."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.signal import lfilter

from bayesglm.inference import diagnose
from bayesglm.inference.diagnose import Commands, SamplerSummary, summarise_sampler
from bayesglm.inference.sample import Chains
from bayesglm.likelihood.jackknife import UnitCount
from bayesglm.verdict import Reason

COMMANDS = Commands(
    check="bayesglm check a.csv",
    narrower="bayesglm fit narrower",
    one_drive="bayesglm fit one_drive",
    calibrated="bayesglm fit calibrated",
    more_draws="bayesglm fit longer",
)
GOOD = SamplerSummary(rhat_max=1.0, ess_min=1000.0, bfmi_min=1.0, divergences=0)


def chains_of(values: np.ndarray, energy: np.ndarray | None = None) -> Chains:
    """Chains whose sds and φ are the given values, shape (chains, draws)."""
    blank = np.zeros(values.shape)
    if energy is None:
        energy = np.random.default_rng(99).normal(size=values.shape)
    flags = np.zeros(values.shape, dtype=np.bool_)
    draws = {"sd": values[..., None], "phi": values}
    return Chains(draws, flags, energy, blank, np.zeros(values.shape, dtype=np.int64))


def summary_of(values: np.ndarray) -> SamplerSummary:
    return summarise_sampler(chains_of(values), values[..., None])


def autoregressive(rng: np.random.Generator, phi: float, n: int) -> np.ndarray:
    """Four stationary AR(1) chains of unit variance."""
    drive = rng.normal(0.0, np.sqrt(1 - phi**2), (4, n))
    drive[:, 0] = rng.normal(size=4)
    chains: np.ndarray = lfilter([1.0], [1.0, -phi], drive, axis=1)
    return chains


def grades(reasons: list[Reason]) -> dict[str, str]:
    return {reason.check: reason.verdict for reason in reasons}


@pytest.mark.parametrize(
    ("offset", "scale", "rhat"),
    [(0.0, 1.0, 1.0), (1.0, 1.0, 1.10), (0.0, 3.0, 1.16)],
)
def test_rhat_of_one_chain_shifted_or_spread(offset: float, scale: float, rhat: float) -> None:
    """Split and folded R̂ (Vehtari et al. 2021): one of four chains moved, or thrice as wide."""
    values = np.random.default_rng(0).normal(size=(4, 5000))
    values[0] = offset + scale * values[0]
    assert summary_of(values).rhat_max == pytest.approx(rhat, abs=0.02)


def test_rhat_sees_a_shift_of_heavy_tails() -> None:
    """Cauchy chains, one shifted by 10: ranks see it (about 1.28), plain variances would not."""
    values = np.random.default_rng(1).standard_cauchy(size=(4, 5000))
    values[0] += 10
    assert summary_of(values).rhat_max == pytest.approx(1.28, abs=0.05)


def test_a_shifted_chain_fails_and_an_even_one_passes() -> None:
    values = np.random.default_rng(2).normal(size=(4, 1000))
    assert set(grades(diagnose.sampler_reasons(summary_of(values), COMMANDS)).values()) == {
        "passed"
    }
    values[0] += 1.0
    found = grades(diagnose.sampler_reasons(summary_of(values), COMMANDS))
    assert found["rhat"] == found["effective_draws"] == "failed"


@pytest.mark.parametrize(("phi", "effective"), [(0.5, 33333), (0.9, 5263)])
def test_effective_draws_of_autoregressive_chains(phi: float, effective: float) -> None:
    """N (1 − φ)/(1 + φ) for 4 × 25,000 draws; the smaller of bulk and tail is told."""
    values = autoregressive(np.random.default_rng(3), phi, 25_000)
    found = summary_of(values).ess_min
    assert 0.75 * effective < found < 1.1 * effective


def test_the_worst_parameter_counts() -> None:
    """A single weight that has not settled is enough."""
    rng = np.random.default_rng(4)
    weights = rng.normal(size=(4, 1000, 3))
    weights[0, :, 2] += 1.0
    found = summarise_sampler(chains_of(rng.normal(size=(4, 1000))), weights)
    assert found.rhat_max > 1.05


def test_energy_that_wanders_is_seen() -> None:
    """E-BFMI: ``E[(ΔE)²]/Var(E)`` is 2 for independent energies, 2(1 − φ) for AR(1) ones."""
    rng = np.random.default_rng(5)
    values = rng.normal(size=(4, 2000))
    independent = summarise_sampler(chains_of(values), values[..., None])
    assert independent.bfmi_min == pytest.approx(2.0, rel=0.1)
    slow = chains_of(values, autoregressive(rng, 0.95, 2000))
    assert summarise_sampler(slow, values[..., None]).bfmi_min == pytest.approx(0.1, abs=0.05)


@pytest.mark.parametrize(
    ("change", "check", "severity"),
    [
        ({"rhat_max": 1.0099}, "rhat", "passed"),
        ({"rhat_max": 1.01}, "rhat", "caution"),
        ({"rhat_max": 1.0499}, "rhat", "caution"),
        ({"rhat_max": 1.05}, "rhat", "failed"),
        ({"rhat_max": float("nan")}, "rhat", "failed"),
        ({"ess_min": 401.0}, "effective_draws", "passed"),
        ({"ess_min": 400.0}, "effective_draws", "caution"),
        ({"ess_min": 100.0}, "effective_draws", "caution"),
        ({"ess_min": 99.9}, "effective_draws", "failed"),
        ({"ess_min": float("nan")}, "effective_draws", "failed"),
        ({"divergences": 1}, "divergences", "failed"),
        ({"bfmi_min": 0.31}, "energy", "passed"),
        ({"bfmi_min": 0.3}, "energy", "caution"),
    ],
)
def test_limits_of_the_sampler(change: dict[str, float], check: str, severity: str) -> None:
    """R̂ 1.01 and 1.05, 400 and 100 effective draws, no divergence, E-BFMI 0.3."""
    summary = SamplerSummary(**(vars(GOOD) | change))
    reasons = diagnose.sampler_reasons(summary, COMMANDS)
    found = grades(reasons)
    assert found.pop(check) == severity
    assert set(found.values()) == {"passed"}
    for reason in reasons:
        told = bool(reason.advice), reason.command == COMMANDS.more_draws
        assert told == ((True, True) if reason.verdict != "passed" else (False, False))


@pytest.mark.parametrize(
    ("n", "severity"), [(3, "failed"), (4, "caution"), (9, "caution"), (10, "passed")]
)
def test_limits_of_the_number_of_units(n: int, severity: str) -> None:
    labels = tuple(f"sweep {k}" for k in range(n))
    count = UnitCount(n, n - 0.5)
    reasons = diagnose.unit_reasons(count, n - 1.0, np.full(n, 0.2), labels, COMMANDS)
    assert grades(reasons) == {"units": severity, "one_unit_decides": "passed"}
    assert reasons[0].value == (
        f"{n} independent units, worth {n - 0.5:.1f} equal ones; {n - 1:.1f} degrees of freedom"
    )


def test_repeats_count_as_one_and_the_count_is_told() -> None:
    """Eighty units of eight currents are eight, not eighty."""
    labels = tuple(f"unit {k}" for k in range(80))
    count = UnitCount(8, 7.6, repeated=True, floored=2)
    row = diagnose.unit_reasons(count, 6.1, np.full(80, 0.2), labels, COMMANDS)[0]
    assert row.verdict == "caution"
    assert row.value == (
        "80 units of 8 different currents, worth 7.6 equal ones: repeats of a current count as "
        "one; 2 negative variances are set to zero; 6.1 degrees of freedom"
    )
    assert "other currents" in row.advice
    joined = UnitCount(12, 12.0, neighbours=True)
    row = diagnose.unit_reasons(joined, 9.0, np.full(80, 0.2), labels, COMMANDS)[0]
    assert "short blocks are joined to their neighbours" in row.value


def test_a_unit_that_decides_is_named() -> None:
    leverage = np.full(12, 0.1)
    leverage[7] = 0.83
    labels = tuple(f"sweep {k}" for k in range(12))
    row = diagnose.unit_reasons(UnitCount(12, 12.0), 8.0, leverage, labels, COMMANDS)[1]
    assert (row.verdict, row.value) == ("caution", "sweep 7 carries 83 % of a direction")
    assert row.command == COMMANDS.check


@pytest.mark.parametrize(
    ("rows", "severity"),
    [
        (diagnose.ratio_reasons({"input": 1.5}, COMMANDS), "passed"),
        (diagnose.ratio_reasons({"input": 1.51}, COMMANDS), "caution"),
        (diagnose.half_reasons({"after_spike": 3.5}, COMMANDS), "passed"),
        (diagnose.half_reasons({"after_spike": 3.6}, COMMANDS), "caution"),
        ([diagnose.drive_reason("input", 3.5, "", COMMANDS)], "passed"),
        ([diagnose.drive_reason("input", 3.6, "told", COMMANDS)], "caution"),
        ([diagnose.unsplit_reason("input", 5, 6, COMMANDS)], "caution"),
        ([diagnose.linearity_reason(0.10, COMMANDS)], "passed"),
        ([diagnose.linearity_reason(0.11, COMMANDS)], "caution"),
        (diagnose.prior_reasons({"input": np.array([0.9, 0.1])}, COMMANDS), "passed"),
        (diagnose.prior_reasons({"input": np.array([0.9, 0.9, 0.1])}, COMMANDS), "caution"),
        (diagnose.prior_reasons({"input": np.array([0.9, 0.81])}, COMMANDS), "failed"),
        (diagnose.prior_reasons({"input": np.array([0.9, 0.81, np.nan])}, COMMANDS), "failed"),
        (diagnose.prior_reasons({"input": np.array([])}, COMMANDS), "failed"),
    ],
)
def test_limits_of_the_other_checks(rows: list[Reason], severity: str) -> None:
    """Each side of each limit; what is not passed has advice and a command."""
    (row,) = rows
    assert row.verdict == severity
    assert bool(row.advice) == bool(row.command) == (severity != "passed")
    assert row.limit
    assert row.value


def test_reasons_name_the_kernel_in_check_and_words() -> None:
    rows = diagnose.ratio_reasons({"input": 2.0, "after_spike": 2.0}, COMMANDS)
    assert [row.check for row in rows] == [
        "calibration_ratio_input",
        "calibration_ratio_after_spike",
    ]
    assert "input kernel κ" in rows[0].advice
    assert "after-spike kernel η" in rows[1].advice
    told = diagnose.drive_reason("after_spike", 5.0, "−0.1 mV at 50 pA", COMMANDS)
    assert told.value == "5.0 sd apart: −0.1 mV at 50 pA"
    assert told.command == COMMANDS.one_drive
    assert diagnose.drive_reason("input", 5.0, "", COMMANDS).command == COMMANDS.narrower


def test_slices_have_no_divergences_to_be_told_of() -> None:
    summary = SamplerSummary(1.0, 900.0, 0.1, 0, "slices")
    assert grades(diagnose.sampler_reasons(summary, COMMANDS)) == {
        "rhat": "passed",
        "effective_draws": "passed",
    }
