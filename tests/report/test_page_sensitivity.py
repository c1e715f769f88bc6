"""Sentences and tables on other choices: numbers of the fit, each with its choice."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from bayesglm.inference.results import CellFit
from bayesglm.inference.sensitivity import DurationGrid, Sensitivity, SpikeWindows
from bayesglm.report.page_sensitivity import choice_tables

GRID = DurationGrid(
    input_ms=np.array([50.0, 105.0]),
    after_spike_ms=np.array([54.0, 300.0]),
    chosen=(1, 1),
    held_out_mV2=np.array([[5.0, 4.0], [2.0, 2.1]]),
    held_out_se_mV2=np.array([[0.5, 0.5], [0.0, 0.12]]),
    folds=17,
    features={
        "after_spike_at_30ms": (
            np.array([[-1.04, -2.0], [-2.6, -3.21]]),
            np.array([[0.4, 0.4], [0.4, 0.44]]),
        )
    },
)
WINDOWS = SpikeWindows(
    np.array([3.0, 5.0, 10.0]),
    1,
    {
        "after_spike_at_10ms": (np.array([-1.0, -2.0, np.nan]), np.array([0.5, 0.4, np.nan])),
        "after_spike_minimum": (np.full(3, np.nan), np.full(3, np.nan)),
    },
)


def test_durations_in_words(fit: CellFit) -> None:
    (table,) = choice_tables(replace(fit, sensitivity=Sensitivity(durations=GRID)))
    assert table.sentences[0] == (
        "η at 30 ms after a spike: −3.2 mV (105/300 ms) to −1.0 mV (50/54 ms) over all durations; "
        "−3.2 mV (105/300 ms) to −2.6 mV (105/54 ms) over those that predict as well as the best."
    )
    assert "in 17 parts" in table.sentences[-1]
    assert table.columns == ("Durations", "Held-out error", "η at 30 ms after a spike")
    assert table.rows[0] == (("50/54 ms", "3.0 ± 0.5 mV²", "−1.0 ± 0.4 mV"), False)
    assert table.rows[2] == (("105/54 ms", "best", "−2.6 ± 0.4 mV"), False)
    assert table.rows[3][0][1] == "0.10 ± 0.12 mV², as good"
    assert [fitted for _, fitted in table.rows] == [False, False, False, True]


def test_windows_in_words(fit: CellFit) -> None:
    (table,) = choice_tables(replace(fit, sensitivity=Sensitivity(windows=WINDOWS)))
    assert table.sentences[0].endswith("η at 10 ms after a spike: by 2.0 sd.")
    assert table.rows[0] == (("3 ms", "−1.0 ± 0.5 mV", "–"), False)
    assert table.rows[1] == (("5 ms", "−2.0 ± 0.4 mV", "–"), True)
    assert table.rows[2] == (("10 ms", "–", "–"), False)


def test_nothing_that_can_be_compared_is_not_compared(fit: CellFit) -> None:
    hidden = replace(WINDOWS, features={"after_spike_minimum": (np.full(3, np.nan),) * 2})
    (table,) = choice_tables(replace(fit, sensitivity=Sensitivity(windows=hidden)))
    assert table.sentences[0].startswith("Fitted with the window to 5 ms")


def test_a_fit_without_other_choices_has_no_table(fit: CellFit) -> None:
    assert choice_tables(replace(fit, sensitivity=Sensitivity())) == ()


def test_a_fit_has_both(fit: CellFit) -> None:
    titles = [table.title for table in choice_tables(fit)]
    assert titles == ["Durations of the kernels", "End of the spike window"]
    for table in choice_tables(fit):
        assert sum(fitted for _, fitted in table.rows) == 1
        assert {len(cells) for cells, _ in table.rows} == {len(table.columns)}
