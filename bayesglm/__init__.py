"""bayesglm: input filters and after-spike kernels of neurons, with error bars that can be believed.

This is the whole list of public names. They are loaded when first used, so that the command
line's ``--help`` does not wait for JAX.
"""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from bayesglm.checks.simulation import Neuron, Noise, simulate
    from bayesglm.errors import InputError
    from bayesglm.fitting.run import fit, fit_study
    from bayesglm.inference.results import Band, CellFit, Feature, Verdict
    from bayesglm.kernels.basis import KernelSpec
    from bayesglm.kernels.design import VoltageDesign
    from bayesglm.recording.quality import check_recording
    from bayesglm.recording.reading import read_recording
    from bayesglm.recording.recording import Recording, Sweep
    from bayesglm.recording.selection import parse_select, select
    from bayesglm.recording.settings import Settings
    from bayesglm.recording.spikes import detect_spikes
    from bayesglm.recording.study import Study, read_study

_HOMES = {
    "Band": "inference.results",
    "CellFit": "inference.results",
    "Feature": "inference.results",
    "InputError": "errors",
    "KernelSpec": "kernels.basis",
    "Neuron": "checks.simulation",
    "Noise": "checks.simulation",
    "Recording": "recording.recording",
    "Settings": "recording.settings",
    "Study": "recording.study",
    "Sweep": "recording.recording",
    "Verdict": "inference.results",
    "VoltageDesign": "kernels.design",
    "check_recording": "recording.quality",
    "detect_spikes": "recording.spikes",
    "fit": "fitting.run",
    "fit_study": "fitting.run",
    "parse_select": "recording.selection",
    "read_recording": "recording.reading",
    "read_study": "recording.study",
    "select": "recording.selection",
    "simulate": "checks.simulation",
}

__all__ = [
    "Band",
    "CellFit",
    "Feature",
    "InputError",
    "KernelSpec",
    "Neuron",
    "Noise",
    "Recording",
    "Settings",
    "Study",
    "Sweep",
    "Verdict",
    "VoltageDesign",
    "check_recording",
    "detect_spikes",
    "fit",
    "fit_study",
    "parse_select",
    "read_recording",
    "read_study",
    "select",
    "simulate",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'bayesglm' has no attribute {name!r}")
    value = getattr(importlib.import_module(f"bayesglm.{_HOMES[name]}"), name)
    globals()[name] = value
    return value
