"""The studies in small, with bounds that a sound method misses once in some thousand runs.

The numbers behind the bounds stem from the full studies; see `docs/validation.md`.
"""

from __future__ import annotations

import bases_study
import coverage_study
import numpy as np
import pytest
import repeats_study
import steps_study
import triggered_study
import white_study
from study_runs import Plan, column

pytestmark = pytest.mark.slow

#: Sd between recordings of the share of lags that a band covers, in the full studies.
SHARE_SD = 0.13


@pytest.mark.parametrize("scenario", ["pyramidal", "shot noise"])
def test_bands_cover_and_white_ones_do_not(scenario: str) -> None:
    """Also where noise is skewed: events that only depolarise."""
    plan = Plan(recordings=6)
    found = coverage_study.run(scenario, 40.0, plan)
    error = SHARE_SD / np.sqrt(plan.recordings)
    for kernel in ("input", "after_spike"):
        assert column(found, kernel).mean() > 0.88 - 3.5 * error
        assert column(found, f"{kernel}_white").mean() < 0.55
    # Of six with 0.85, fewer than three are covered once in two hundred, two once in two thousand.
    assert column(found, "resistance").sum() >= 2
    assert column(found, "time_constant").sum() >= 2


def test_bands_cover_short_recordings() -> None:
    plan = Plan(recordings=6)
    found = coverage_study.run("pyramidal", 12.0, plan)
    assert np.all(column(found, "units") == 12)
    for kernel in ("input", "after_spike"):
        assert column(found, kernel).mean() > 0.85 - 3.5 * 0.18 / np.sqrt(plan.recordings)


def test_repeats_of_a_current_are_not_taken_to_be_independent() -> None:
    """Blocks taken to be independent cover much less, in the same recordings."""
    found = repeats_study.run(Plan(recordings=4), truth_seconds=1000.0)
    for kernel in ("input", "after_spike"):
        fitted, blocks = (column(found, f"{way} {kernel}").mean() for way in ("fitted", "blocks"))
        assert fitted > 0.85 - 3.5 * 0.2 / np.sqrt(4)
        assert fitted > blocks + 0.05


def test_ranges_of_drive_have_kernels_of_their_own() -> None:
    """Hulls are at least as wide as the band; η of a rectifying cell deepens with the drive."""
    found = steps_study.run(Plan(recordings=3), repeats=20)
    for one in found:
        for kernel in steps_study.KERNELS:
            assert one[f"{kernel} ranges"] == 3
            for third in steps_study.THIRDS:
                key = f"{kernel} {third}"
                assert one[f"{key} band"] <= one[f"{key} hull"]
        # κ at 5 ms and η at 30 ms: the rectifying cell has less of the one, more of the other.
        assert one["input low truth"][0] > one["input high truth"][0] + 0.5
        assert one["after_spike low truth"][1] > one["after_spike high truth"][1] + 0.5
    hulls = [column(found, f"{k} {t} hull").mean() for k in ("input", "after_spike")
             for t in steps_study.THIRDS]  # fmt: skip
    assert np.mean(hulls) > 0.8


def test_noise_that_triggers_spikes_biases_eta_and_nothing_tells() -> None:
    """In 40 recordings +0.8 mV at 10 ms, against errors of 0.1 mV that are claimed."""
    found = triggered_study.run(Plan(recordings=4))
    at = triggered_study.LAGS_MS.index(10.0)
    sound, biased = (column(found, f"{key} error")[:, at] for key in ("on u", "on u + r"))
    claimed = column(found, "on u + r sd")[:, at].mean()
    assert abs(sound.mean()) < 4 * claimed / np.sqrt(4)
    assert 0.5 < biased.mean() < 1.2
    assert biased.mean() > 4 * claimed
    assert np.mean(column(found, "on u + r error")[:, -1]) < -2.0


def test_white_residuals_give_the_exact_width() -> None:
    """At every lag: wanted 0.95–1.08; sds of an estimated V scatter by about 8 % a recording."""
    found = white_study.run(Plan(recordings=4))
    for kernel in white_study.KERNELS:
        for way in ("band", "given"):
            ratio = white_study.ratios(found, kernel, way).mean(axis=0)
            assert ratio.min() > 0.95 - 0.13, (kernel, way)
            assert ratio.max() < 1.08 + 0.15, (kernel, way)


def test_bases_agree_on_an_invented_cell() -> None:
    """Curves of splines and cosines; features of all bases."""
    (found,) = bases_study.run(Plan(recordings=1))
    for kernel in bases_study.KERNELS:
        assert found["cosines"][f"{kernel} inside"] > 0.9
    for feature in bases_study.FEATURES:
        mean, sd = np.array([found[basis][feature] for basis in bases_study.BASES]).T
        assert np.ptp(mean) < 2.5 * sd.max(), feature
