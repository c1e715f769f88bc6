from __future__ import annotations

from dataclasses import replace

import numpy as np

from bayesglm.inference.results import CellFit
from bayesglm.report import trace_figures


def test_steps_are_represented_by_their_levels(fit: CellFit) -> None:
    chosen = trace_figures.representative_sweeps(fit)
    labels = [shown.label for shown in chosen.values()]
    assert labels[0] == "Step to −100 pA"
    assert labels[-1] == "Step to 300 pA"
    assert sum("lowest with spikes" in label for label in labels) == 1
    first = next(place for place, shown in chosen.items() if "spikes" in shown.label)
    sweeps = fit.recordings[0].sweeps
    counts = [0 if sweep.spikes is None else len(sweep.spikes) for sweep in sweeps]
    assert first[1] == np.flatnonzero(counts)[0]


def test_other_currents_are_shown_close_up(noise_fit: CellFit) -> None:
    chosen = trace_figures.representative_sweeps(noise_fit)
    assert len(chosen) == 4
    assert {shown.longest_ms for shown in chosen.values()} == {1500.0}


def test_sweeps_of_several_recordings_are_named_by_recording(noise_fit: CellFit) -> None:
    one = noise_fit.recordings[0]
    two = replace(noise_fit, recordings=(one, replace(one, name="second")))
    for (recording, sweep), shown in trace_figures.representative_sweeps(two).items():
        name = ("noise", "second")[recording]
        assert shown.label.startswith(f"{name}, sweep {sweep}: ")


def test_gaps_are_runs_of_rows_that_were_left_out() -> None:
    times = 0.5 * np.arange(8) + 0.25
    kept = np.array([False, True, True, False, False, True, True, False])
    assert trace_figures._gaps(times, kept) == [(0.0, 0.5), (1.5, 1.0), (3.5, 0.5)]


def test_the_middle_of_a_long_sweep() -> None:
    times = np.arange(1000.0)
    assert trace_figures._middle(times, 100.0) == slice(450, 550)
    assert trace_figures._middle(times, 900.0) == slice(0, 1000)
    assert trace_figures._middle(times, np.inf) == slice(0, 1000)


def test_joined_sweeps_are_named_by_their_range(noise_fit: CellFit) -> None:
    (one,) = noise_fit.recordings
    sweeps = tuple(replace(s, joined=((s.number, 0), (s.number + 9, 10))) for s in one.sweeps)
    joined = replace(noise_fit, recordings=(replace(one, sweeps=sweeps),))
    labels = [shown.label for shown in trace_figures.representative_sweeps(joined).values()]
    assert labels[0].startswith("Sweeps 0–9: ")
