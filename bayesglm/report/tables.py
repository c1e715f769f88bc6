"""The results folder: CSV and JSON with fixed names and columns.

Everything is written beside its place and renamed into it, so that a reader never sees half a
file and a killed run leaves whole cells or none.
"""

from __future__ import annotations

import csv
import hashlib
import importlib.metadata
import json
import platform
import shutil
import tempfile
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import asdict
from pathlib import Path
from typing import Any, Final

import numpy as np

from bayesglm.inference.results import Band, CellFit, Feature, finite_or_none
from bayesglm.inference.sensitivity import DurationGrid, Sensitivity, SpikeWindows
from bayesglm.likelihood.digest import content_hash

KERNEL_COLUMNS: Final = (
    "kernel", "lag_ms", "unit", "mean", "sd", "lower", "upper", "lower_simultaneous",
    "upper_simultaneous", "between_range_sd", "protocol_lower", "protocol_upper", "prior_share",
)  # fmt: skip

FEATURE_COLUMNS: Final = (
    "feature", "unit", "mean", "sd", "lower", "upper", "protocol_lower", "protocol_upper",
    "between_range_sd", "level", "ess_bulk", "mcse_mean",
)  # fmt: skip

DURATION_COLUMNS: Final = (
    "input_ms", "after_spike_ms", "chosen", "as_good", "held_out_mV2", "difference_mV2",
    "difference_se_mV2",
)  # fmt: skip

WINDOW_COLUMNS: Final = ("window_end_ms", "chosen")

SUMMARY_COLUMNS: Final = ("cell", "condition", "class", "animal", "verdict", "observe")

_PACKAGES: Final = (
    "bayesglm", "numpy", "scipy", "jax", "jaxlib", "numpyro", "arviz-stats", "xarray", "matplotlib",
)  # fmt: skip


def write_cell(fit: CellFit, folder: Path) -> Path:
    """Write one cell's results to ``folder/cells/NAME``.

    Parameters
    ----------
    fit
        The fit.
    folder
        The study's results folder.

    Returns
    -------
    Path
        The cell's folder: ``posterior.nc``, ``kernels.csv``, ``features.csv``, ``verdict.json``,
        ``digest.npz``; ``durations.csv`` and ``spike_window.csv`` where these were varied.
    """
    place = folder / "cells" / fit.name
    with _beside(place) as work:
        fit.posterior.to_netcdf(work / "posterior.nc", engine="h5netcdf")
        _write_csv(work / "kernels.csv", KERNEL_COLUMNS, _kernel_rows(fit))
        _write_csv(work / "features.csv", FEATURE_COLUMNS, _feature_rows(fit.features))
        _write_json(work / "verdict.json", verdict_dict(fit))
        fit.digest.save(work / "digest.npz")
        _write_sensitivity(fit.sensitivity, work)
    return place


def write_study(fits: Sequence[CellFit], folder: Path) -> None:
    """Write ``summary.csv`` and ``study.lock.json``, over all cells.

    Parameters
    ----------
    fits
        The fits in the order of the study.
    folder
        The study's results folder.
    """
    names = list(dict.fromkeys(feature.name for fit in fits for feature in fit.features))
    columns = (*SUMMARY_COLUMNS, *(f"{n}_{part}" for n in names for part in _SUMMARY_PARTS))
    rows = [_summary_row(fit, names) for fit in fits]
    temporary = folder / ".summary.csv"
    _write_csv(temporary, columns, rows)
    temporary.replace(folder / "summary.csv")
    temporary = folder / ".study.lock.json"
    _write_json(temporary, _lock(fits))
    temporary.replace(folder / "study.lock.json")


def verdict_dict(fit: CellFit) -> dict[str, Any]:
    """The content of ``verdict.json``."""
    verdict = asdict(fit.verdict)
    verdict["rhat_max"] = finite_or_none(fit.verdict.rhat_max)
    verdict["ess_min"] = finite_or_none(fit.verdict.ess_min)
    verdict["calibration_ratio"] = {
        name: finite_or_none(value) for name, value in fit.verdict.calibration_ratio.items()
    }
    verdict["warnings"] = list(fit.warnings)
    return verdict


def feature_dict(feature: Feature) -> dict[str, Any]:
    """A feature for JSON output; what does not exist is null."""
    return {
        name: finite_or_none(value) if isinstance(value, float) else value
        for name, value in asdict(feature).items()
    }


_SUMMARY_PARTS: Final = ("mean", "lower", "upper")


def _kernel_rows(fit: CellFit) -> Iterator[Sequence[object]]:
    for band in fit.kernels.values():
        yield from _band_rows(band)


def _band_rows(band: Band) -> Iterator[Sequence[object]]:
    arrays = (
        band.mean, band.sd, band.lower, band.upper, band.lower_simultaneous,
        band.upper_simultaneous, band.between_range_sd, band.protocol_lower, band.protocol_upper,
        band.prior_share,
    )  # fmt: skip
    for index, lag in enumerate(band.lags_ms):
        yield (band.kernel, _number(lag), band.unit, *(_number(values[index]) for values in arrays))


def _feature_rows(features: Sequence[Feature]) -> Iterator[Sequence[object]]:
    for f in features:
        numbers = (
            f.mean, f.sd, f.lower, f.upper, f.protocol_lower, f.protocol_upper, f.between_range_sd,
            f.level, f.ess_bulk, f.mcse_mean,
        )  # fmt: skip
        yield (f.name, f.unit, *(_number(value) for value in numbers))


def _write_sensitivity(found: Sensitivity, folder: Path) -> None:
    if found.durations is not None:
        columns = (*DURATION_COLUMNS, *_moment_columns(found.durations.features))
        _write_csv(folder / "durations.csv", columns, _duration_rows(found.durations))
    if found.windows is not None:
        columns = (*WINDOW_COLUMNS, *_moment_columns(found.windows.features))
        _write_csv(folder / "spike_window.csv", columns, _window_rows(found.windows))


def _moment_columns(features: Iterable[str]) -> list[str]:
    return [f"{name}_{part}" for name in features for part in ("mean", "sd")]


def _duration_rows(grid: DurationGrid) -> Iterator[Sequence[object]]:
    tables = [grid.held_out_mV2, grid.excess_mV2, grid.held_out_se_mV2]
    tables += [values for pair in grid.features.values() for values in pair]
    for i, input_ms in enumerate(grid.input_ms):
        for j in range(grid.held_out_mV2.shape[1]):
            yield (
                _number(input_ms),
                _number(grid.after_spike_ms[j]) if len(grid.after_spike_ms) else "",
                int((i, j) == grid.chosen),
                int(grid.as_good[i, j]),
                *(_number(float(table[i, j])) for table in tables),
            )


def _window_rows(windows: SpikeWindows) -> Iterator[Sequence[object]]:
    for index, end in enumerate(windows.ends_ms):
        yield (
            _number(end),
            int(index == windows.chosen),
            *(_number(values[index]) for pair in windows.features.values() for values in pair),
        )


def _summary_row(fit: CellFit, names: Sequence[str]) -> list[object]:
    row: list[object] = [
        fit.cell, fit.condition, fit.cell_class, fit.animal, fit.verdict.verdict,
        fit.verdict.observe,
    ]  # fmt: skip
    found = {feature.name: feature for feature in fit.features}
    for name in names:
        feature = found.get(name)
        row += [
            _number(getattr(feature, part)) if feature is not None else ""
            for part in _SUMMARY_PARTS
        ]
    return row


def _number(value: float) -> str:
    """A number with all digits that survive a round trip to 9 of them; NaN is an empty field."""
    return f"{value:.9g}" if np.isfinite(value) else ""


def _write_csv(path: Path, columns: Sequence[str], rows: Iterator[Any] | Sequence[Any]) -> None:
    with path.open("w", encoding="utf-8", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(columns)
        writer.writerows(rows)


def _write_json(path: Path, content: Any) -> None:
    text = json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False)
    path.write_text(text + "\n", encoding="utf-8")


def _lock(fits: Sequence[CellFit]) -> dict[str, Any]:
    settings = fits[0].settings.model_dump(mode="json") if fits else {}
    return {
        "format": 1,
        "settings": settings,
        "seed": settings.get("sampling", {}).get("seed"),
        "cells": {
            fit.name: {
                "recordings": {r.source: r.sha256 for r in fit.recordings},
                "durations_ms": {name: k.duration_ms for name, k in fit.design.kernels.items()},
                "digest_sha256": content_hash(fit.digest),
            }
            for fit in fits
        },
        "versions": {name: importlib.metadata.version(name) for name in _PACKAGES},
        "python": platform.python_version(),
        "settings_sha256": hashlib.sha256(json.dumps(settings).encode()).hexdigest(),
    }


@contextmanager
def _beside(place: Path) -> Iterator[Path]:
    """A folder to write in, renamed to `place` when all went well and removed otherwise."""
    place.parent.mkdir(parents=True, exist_ok=True)
    work = Path(tempfile.mkdtemp(prefix=f".{place.name}-", dir=place.parent))
    try:
        yield work
        # mkdtemp makes folders private; results are shared like any other file.
        work.chmod(0o755)
        work.replace(place)
    except BaseException:
        shutil.rmtree(work, ignore_errors=True)
        raise
