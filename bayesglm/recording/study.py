"""A study: its settings, its cells and the files of each, validated whole before any is read."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Final, Literal, cast

from bayesglm.errors import InputError, nearest
from bayesglm.recording.listing import ListingRow, read_listing
from bayesglm.recording.ranges import parse_sweeps
from bayesglm.recording.reading import recording_name
from bayesglm.recording.settings import Settings
from bayesglm.recording.settings_input import add_selection, override, read_settings

Role = Literal["fit", "held-out"]

_ROLES: Final = ("fit", "held-out")
_CELL_COLUMNS: Final = ("cell", "class", "animal")
_RECORDING_COLUMNS: Final = ("cell", "file")
_OPTIONAL_COLUMNS: Final = (
    "sweeps",
    "protocol",
    "condition",
    "role",
    "exclude",
    "exclude_reason",
)
_YES: Final = ("yes", "true", "1")
_NO: Final = ("", "no", "false", "0")
#: What no file system takes in the name of a folder, and @, which parts cell from condition.
_NOT_IN_NAMES: Final = re.compile(r'[/\\@:*?"<>|\x00-\x1f]')


@dataclass(frozen=True)
class RecordingEntry:
    """One file of a cell.

    Attributes
    ----------
    path
        The file.
    sweeps
        Numbers of the sweeps that belong to the cell, such as ``0-4,7``; None for all.
    protocol
        What was done, in words.
    role
        ``fit``, or ``held-out`` for a recording that only scores predictions.
    exclude, exclude_reason
        Whether it is left out of everything, and why.
    """

    path: Path
    sweeps: str | None = None
    protocol: str = ""
    role: Role = "fit"
    exclude: bool = False
    exclude_reason: str = ""


@dataclass(frozen=True)
class CellEntry:
    """One cell in one condition: what a single fit is of.

    Attributes
    ----------
    name
        Name of the cell; it can be the name of a folder.
    recordings
        Its files in the order of the study, at least one; excluded ones are among them.
    condition
        The condition; empty where the study states none.
    cell_class, animal
        As stated in the study; empty where not.
    columns
        Every further column of the table of cells, as text.
    """

    name: str
    recordings: tuple[RecordingEntry, ...]
    condition: str = ""
    cell_class: str = ""
    animal: str = ""
    columns: dict[str, str] = field(default_factory=dict)


@dataclass(frozen=True)
class Study:
    """Settings and cells.

    Attributes
    ----------
    settings
        All settings.
    cells
        One entry a cell and condition.
    path
        The study file; None where recordings were given one by one.
    """

    settings: Settings
    cells: tuple[CellEntry, ...]
    path: Path | None = None


def load(
    paths: Sequence[str | Path],
    overrides: Sequence[str] = (),
    selects: Sequence[str] = (),
    cell: str | None = None,
) -> Study:
    """Load what a command was given: one study, or recordings.

    Parameters
    ----------
    paths
        A ``study.toml`` or its folder, or one or more recordings.
    overrides
        ``KEY=VALUE`` assignments that change the settings.
    selects
        Selections, all of which must hold, also with those of the study.
    cell
        Name of the one cell that all recordings belong to.

    Returns
    -------
    Study

    Raises
    ------
    InputError
        If anything in it is wrong or missing; nothing has been read but the study itself.
    """
    given = [Path(path) for path in paths]
    if not given:
        raise InputError(
            "nothing to read; name a study.toml, its folder, or recordings (.csv, .npz)"
        )
    studies = [path for path in given if path.suffix == ".toml" or path.is_dir()]
    if studies and len(given) > 1:
        raise InputError(
            f"{studies[0]}: a study was given together with something else; expected one study, "
            "or recordings only"
        )
    if studies and cell is not None:
        raise InputError(
            f"{studies[0]}: --cell {cell} pools recordings given one by one; in a study, "
            "recordings.csv says which files are whose"
        )
    if studies:
        study = read_study(studies[0])
        settings = add_selection(override(study.settings, overrides), selects)
        return replace(study, settings=settings)
    settings = add_selection(override(Settings(), overrides), selects)
    return study_from_recordings(given, settings, cell)


def read_study(path: str | Path) -> Study:
    """Read a study file and the tables of cells and recordings beside it.

    Parameters
    ----------
    path
        A study file (TOML), or a folder that holds a ``study.toml``. Beside it stand
        ``cells.csv`` (columns ``cell``, ``class``, ``animal`` and any others) and
        ``recordings.csv`` (``cell``, ``file`` and optionally ``sweeps``, ``protocol``,
        ``condition``, ``role``, ``exclude``, ``exclude_reason``); files are named relative to it.

    Returns
    -------
    Study

    Raises
    ------
    InputError
        If a key, value, row or file is wrong or missing.
    """
    path = Path(path)
    if path.is_dir():
        if not (path / "study.toml").is_file():
            raise InputError(
                f"{path}: this folder holds no study.toml; write one, or name the recordings in it"
            )
        path = path / "study.toml"
    settings = read_settings(path)
    for name in ("cells.csv", "recordings.csv"):
        if not (path.parent / name).is_file():
            raise InputError(
                f"{path}: no {name} beside it; a study needs cells.csv and recordings.csv (one "
                "recording can be given by itself, and its settings with --set KEY=VALUE)"
            )
    cells = _read_cells(path.parent / "cells.csv")
    files = read_listing(path.parent / "recordings.csv", _RECORDING_COLUMNS, _OPTIONAL_COLUMNS)
    entries: dict[tuple[str, str], list[RecordingEntry]] = {}
    used = _UsedFiles()
    for row in files:
        if row["cell"] not in cells:
            raise InputError(
                f"{row.place('cell')}: cell {row['cell']!r} is not in cells.csv"
                f"{nearest(row['cell'], cells)} (add it there or correct the name)"
            )
        key = (row["cell"], _condition(row))
        entry = _recording_entry(row)
        used.add(entry, row.place("file"))
        entries.setdefault(key, []).append(entry)
    return Study(settings, tuple(_cell_entries(cells, entries)), path)


def study_from_recordings(
    paths: Sequence[str | Path], settings: Settings, cell: str | None = None
) -> Study:
    """Make a study of recordings: each is a cell, or all are one.

    Parameters
    ----------
    paths
        The recordings.
    settings
        Settings for all of them.
    cell
        Name of the one cell all belong to; None where each is a cell named by its file.

    Returns
    -------
    Study

    Raises
    ------
    InputError
        If a file is missing or given twice, or two cells would have one name.
    """
    groups: dict[str, list[RecordingEntry]] = {}
    spelled: dict[str, Path] = {}
    used = _UsedFiles()
    for path in map(Path, paths):
        _refuse_missing(path, str(path))
        entry = RecordingEntry(path)
        used.add(entry, str(path))
        name = cell if cell is not None else recording_name(path)
        check_name(name, f"{path}: cell" if cell is None else "--cell")
        if cell is None and name.casefold() in spelled:
            raise InputError(
                f"{path}: {spelled[name.casefold()]} names a cell {name!r} too; rename one of the "
                f"files, or pool both as one cell with --cell {name}"
            )
        spelled[name.casefold()] = path
        groups.setdefault(name, []).append(entry)
    return Study(settings, tuple(CellEntry(name, tuple(group)) for name, group in groups.items()))


def check_name(name: str, place: str) -> None:
    """Raise an `InputError` unless a cell or condition can be the name of a folder."""
    bad = _NOT_IN_NAMES.search(name)
    if bad or not name or name != name.strip(" ") or name.startswith(".") or name.endswith("."):
        what = (
            f"it holds {bad[0]!r}" if bad else "it is empty or begins or ends with a dot or blank"
        )
        raise InputError(
            f"{place} {name!r} cannot be the name of a folder: {what}; rename it without "
            '/ \\ @ : * ? " < > | and without a dot at either end'
        )


def _read_cells(path: Path) -> dict[str, ListingRow]:
    """Read the table of cells, by name."""
    cells: dict[str, ListingRow] = {}
    spelled: dict[str, ListingRow] = {}
    for row in read_listing(path, _CELL_COLUMNS, None):
        name = row["cell"]
        check_name(name, f"{row.place('cell')}: cell")
        # Folders that differ only in case are one folder on some systems.
        if name.casefold() in spelled:
            raise InputError(
                f"{row.place('cell')}: two cells of one name: {name!r} stands in row "
                f"{spelled[name.casefold()].number} already; rename one of them (upper and lower "
                "case count as one)"
            )
        cells[name] = spelled[name.casefold()] = row
    return cells


def _condition(row: ListingRow) -> str:
    """Return the condition of a row, empty or fit to name a folder."""
    condition = row["condition"]
    if condition:
        check_name(condition, f"{row.place('condition')}: condition")
    return condition


def _recording_entry(row: ListingRow) -> RecordingEntry:
    """Validate one row of the table of recordings."""
    if not row["file"]:
        raise InputError(f"{row.place('file')}: found an empty field; expected a file; fill it in")
    role = row["role"].lower() or "fit"
    if role not in _ROLES:
        raise InputError(
            f"{row.place('role')}: found {row['role']!r}; expected fit or held-out"
            f"{nearest(role, _ROLES)}"
        )
    truth = row["exclude"].lower()
    if truth not in _YES + _NO:
        raise InputError(
            f"{row.place('exclude')}: found {row['exclude']!r}; expected yes or no (or true, "
            "false, 1, 0, empty)"
        )
    exclude = truth in _YES
    if exclude and not row["exclude_reason"]:
        raise InputError(
            f"{row.place('exclude_reason')}: the recording is excluded without a reason; expected "
            "a reason in words; it goes into the report"
        )
    if row["sweeps"]:
        try:
            parse_sweeps(row["sweeps"])
        except InputError as error:
            raise InputError(f"{row.place('sweeps')}: {error}") from None
    path = row.path.parent / row["file"]
    if not exclude:
        _refuse_missing(path, row.place("file"))
    return RecordingEntry(
        path=path,
        sweeps=row["sweeps"] or None,
        protocol=row["protocol"],
        role=cast(Role, role),
        exclude=exclude,
        exclude_reason=row["exclude_reason"],
    )


def _refuse_missing(path: Path, place: str) -> None:
    """Raise unless a recording is a file that exists."""
    if path.is_dir():
        raise InputError(f"{place}: {path} is a folder; expected a recording (.csv, .csv.gz, .npz)")
    if not path.is_file():
        folder = path.parent
        names = [item.name for item in folder.iterdir()] if folder.is_dir() else []
        raise InputError(
            f"{place}: no such file: {path}{nearest(path.name, names)} (correct the name or folder)"
        )


class _UsedFiles:
    """The sweeps used so far of every file, so that no data count twice."""

    def __init__(self) -> None:
        self._sweeps: dict[Path, set[int]] = {}
        self._whole: set[Path] = set()

    def add(self, entry: RecordingEntry, place: str) -> None:
        """Note the sweeps of an entry; raise where one is in use already."""
        if entry.exclude:
            return
        path = entry.path.resolve()
        sweeps = set(parse_sweeps(entry.sweeps)) if entry.sweeps is not None else None
        taken = self._sweeps.get(path, set())
        if path in self._whole or (sweeps is None and taken) or (sweeps and sweeps & taken):
            raise InputError(
                f"{place}: {entry.path} is used twice; expected each sweep in one place; delete "
                "one of the two or divide the sweeps between them"
            )
        if sweeps is None:
            self._whole.add(path)
        else:
            self._sweeps[path] = taken | sweeps


def _cell_entries(
    cells: dict[str, ListingRow], entries: dict[tuple[str, str], list[RecordingEntry]]
) -> list[CellEntry]:
    """Join cells and recordings, in the order of the cells; refuse cells with nothing to fit."""
    result = []
    for name, row in cells.items():
        conditions = {c: tuple(e) for (owner, c), e in entries.items() if owner == name}
        if not conditions:
            raise InputError(
                f"{row.place('cell')}: cell {name!r} has no recording; add one to recordings.csv "
                "or delete the row"
            )
        if len({condition.casefold() for condition in conditions}) < len(conditions):
            raise InputError(
                f"{row.place('cell')}: conditions of cell {name!r} differ only in upper and lower "
                f"case ({', '.join(conditions)}); write them alike in recordings.csv"
            )
        for condition, recordings in conditions.items():
            used = [entry.role for entry in recordings if not entry.exclude]
            if used and "fit" not in used:
                raise InputError(
                    f"{row.place('cell')}: all recordings of cell {name!r} {condition} are held "
                    "out; expected at least one with role fit in recordings.csv"
                )
            free = {k: v for k, v in row.fields.items() if k not in _CELL_COLUMNS}
            result.append(CellEntry(name, recordings, condition, row["class"], row["animal"], free))
    return result
