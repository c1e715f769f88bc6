"""Studies: settings, cells and files, validated whole."""

from pathlib import Path

import pytest

from bayesglm.errors import InputError
from bayesglm.recording.settings import Settings
from bayesglm.recording.study import check_name, load, read_study, study_from_recordings

CELLS = "cell,class,animal,age_days\nc1,pyramidal,m1,21\nc2,basket,m2,\n"
RECORDINGS = (
    "cell,file,sweeps,condition,role,exclude,exclude_reason,protocol\n"
    "c1,a.csv,0-4,,,,,steps\n"
    "c1,a.csv,5-6,,held-out,,,steps\n"
    "c2,b.csv,,control,fit,no,,noise\n"
    "c2,b2.csv,,drug,,,,noise\n"
    "c2,gone.csv,,control,,yes,seal lost,noise\n"
)


def write_study(
    folder: Path, cells: str = CELLS, recordings: str = RECORDINGS, toml: str = ""
) -> Path:
    (folder / "study.toml").write_text(toml, encoding="utf-8")
    (folder / "cells.csv").write_text(cells, encoding="utf-8")
    (folder / "recordings.csv").write_text(recordings, encoding="utf-8")
    for name in ("a.csv", "b.csv", "b2.csv"):
        (folder / name).touch()
    return folder


def test_cells_and_conditions(tmp_path: Path) -> None:
    study = read_study(write_study(tmp_path, toml="[sampling]\nseed = 5\n"))
    assert study.path == tmp_path / "study.toml"
    assert study.settings.sampling.seed == 5
    assert [(cell.name, cell.condition) for cell in study.cells] == [
        ("c1", ""),
        ("c2", "control"),
        ("c2", "drug"),
    ]
    first, control, _ = study.cells
    assert (first.cell_class, first.animal, first.columns) == (
        "pyramidal",
        "m1",
        {"age_days": "21"},
    )
    assert [(entry.sweeps, entry.role) for entry in first.recordings] == [
        ("0-4", "fit"),
        ("5-6", "held-out"),
    ]
    assert [entry.path.name for entry in control.recordings] == ["b.csv", "gone.csv"]
    assert control.recordings[1].exclude
    assert control.recordings[1].exclude_reason == "seal lost"
    assert control.recordings[0].protocol == "noise"


def test_folder_and_file_are_one_study(tmp_path: Path) -> None:
    write_study(tmp_path)
    assert read_study(tmp_path) == read_study(str(tmp_path / "study.toml"))


@pytest.mark.parametrize(
    ("cells", "message"),
    [
        ("cell,class\nc1,p\n", r"cells\.csv, row 1: no column 'animal'"),
        (CELLS + "c1,x,y,\n", r"row 4, column cell: two cells of one name: 'c1' stands in row 2"),
        (CELLS + "C1,x,y,\n", r"row 4, column cell: two cells of one name"),
        (CELLS + "a/b,x,y,\n", r"row 4, column cell: cell 'a/b' cannot be the name of a folder"),
        (CELLS + "c3,x,y,\n", r"row 4, column cell: cell 'c3' has no recording; add one to rec"),
    ],
)
def test_cells_refused(tmp_path: Path, cells: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        read_study(write_study(tmp_path, cells=cells))


@pytest.mark.parametrize(
    ("row", "message"),
    [
        (
            "c11,b.csv,,,,,,",
            r"row 7, column cell: cell 'c11' is not in cells.csv; did you mean 'c1'",
        ),
        ("c1,none.csv,,,,,,", r"row 7, column file: no such file: .*none\.csv"),
        ("c1,bb.csv,,,,,,", r"no such file: .*bb\.csv; did you mean 'b2?\.csv'"),
        ("c1,.,,,,,,", r"row 7, column file: .* is a folder; expected a recording"),
        ("c1,,,,,,,", r"row 7, column file: found an empty field"),
        ("c1,b.csv,,,test,,,", r"row 7, column role: found 'test'; expected fit or held-out"),
        ("c1,b.csv,,,heldout,,,", r"did you mean 'held-out'"),
        ("c1,b.csv,,,,maybe,,", r"row 7, column exclude: found 'maybe'; expected yes or no"),
        ("c1,b.csv,,,,yes,,", r"row 7, column exclude_reason: .* without a reason"),
        ("c1,b.csv,4-1,,,,,", r"row 7, column sweeps: .*runs backwards"),
        ("c1,b.csv,,a@b,,,,", r"row 7, column condition: condition 'a@b' cannot be .* holds '@'"),
        ("c1,a.csv,4,,,,,", r"row 7, column file: .*a\.csv is used twice"),
        ("c1,a.csv,,,,,,", r"row 7, column file: .*a\.csv is used twice"),
        ("c1,b.csv,3,,,,,", r"row 7, column file: .*b\.csv is used twice"),
        ("c1,b.csv", r"recordings\.csv, row 7: found 2 fields; expected 8"),
    ],
)
def test_recordings_refused(tmp_path: Path, row: str, message: str) -> None:
    with pytest.raises(InputError, match=message):
        read_study(write_study(tmp_path, recordings=RECORDINGS + row + "\n"))


def test_unknown_column_of_recordings(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"column 'sweep' is unknown; .* did you mean 'sweeps'"):
        read_study(write_study(tmp_path, recordings="cell,file,sweep\nc1,a.csv,1\n"))


def test_cell_with_held_out_recordings_only(tmp_path: Path) -> None:
    rows = "cell,file,role\nc1,a.csv,fit\nc2,b.csv,held-out\n"
    with pytest.raises(
        InputError, match=r"all recordings of cell 'c2' .* at least one with role fit"
    ):
        read_study(write_study(tmp_path, recordings=rows))


def test_conditions_that_differ_in_case(tmp_path: Path) -> None:
    rows = "cell,file,condition\nc1,a.csv,\nc2,b.csv,Drug\nc2,b2.csv,drug\n"
    with pytest.raises(
        InputError, match=r"conditions of cell 'c2' differ only in .*\(Drug, drug\)"
    ):
        read_study(write_study(tmp_path, recordings=rows))


def test_missing_tables_and_bad_settings(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"this folder holds no study\.toml"):
        read_study(tmp_path)
    write_study(tmp_path, toml="[sampling]\nsead = 1\n")
    with pytest.raises(InputError, match=r"study\.toml: unknown key 'sampling\.sead'"):
        read_study(tmp_path)
    write_study(tmp_path)
    (tmp_path / "cells.csv").unlink()
    with pytest.raises(InputError, match=r"no cells\.csv beside it"):
        read_study(tmp_path)


def test_recordings_are_cells_named_by_their_files(tmp_path: Path) -> None:
    paths = [tmp_path / "one.csv", tmp_path / "two.x.csv.gz"]
    for path in paths:
        path.touch()
    study = study_from_recordings(paths, Settings())
    assert [cell.name for cell in study.cells] == ["one", "two.x"]
    assert study.path is None
    pooled = study_from_recordings(paths, Settings(), cell="three")
    (cell,) = pooled.cells
    assert cell.name == "three"
    assert [entry.path for entry in cell.recordings] == paths


def test_recordings_given_one_by_one_refused(tmp_path: Path) -> None:
    for name in ("one.csv", "one.csv.gz", "a@b.csv"):
        (tmp_path / name).touch()
    one, other, at = (tmp_path / name for name in ("one.csv", "one.csv.gz", "a@b.csv"))
    with pytest.raises(InputError, match=r"names a cell 'one' too; rename .* --cell one"):
        study_from_recordings([one, other], Settings())
    with pytest.raises(InputError, match=r"one\.csv is used twice"):
        study_from_recordings([one, one], Settings(), cell="c")
    with pytest.raises(
        InputError, match=r"cell 'a@b' cannot be the name of a folder: it holds '@'"
    ):
        study_from_recordings([at], Settings())
    with pytest.raises(InputError, match=r"--cell 'x/y' cannot be the name of a folder"):
        study_from_recordings([one], Settings(), cell="x/y")
    with pytest.raises(InputError, match=r"no such file: .*ones\.csv; did you mean 'one\.csv"):
        study_from_recordings([tmp_path / "ones.csv"], Settings())
    with pytest.raises(InputError, match="is a folder; expected a recording"):
        study_from_recordings([tmp_path], Settings())


@pytest.mark.parametrize("name", ["c1", "2024-01-02 cell (3)", "Zelle_ä", "a.b", "-x", "PV+"])
def test_names_of_folders(name: str) -> None:
    check_name(name, "cell")


@pytest.mark.parametrize(
    "name", ["", ".a", "a.", " a", "a ", "..", "a/b", "a\\b", "a@b", "a:b", "a\n"]
)
def test_no_names_of_folders(name: str) -> None:
    with pytest.raises(InputError, match="cannot be the name of a folder"):
        check_name(name, "cell")


def test_load_study(tmp_path: Path) -> None:
    write_study(tmp_path, toml="[recording.select]\ncurrent = '-100:50pA'\n")
    study = load([tmp_path], overrides=["sampling.seed=9"], selects=["current=0:pA"])
    assert len(study.cells) == 3
    assert study.settings.sampling.seed == 9
    assert study.settings.recording.select.current == "0:50pA"
    assert load([tmp_path / "study.toml"]).path == tmp_path / "study.toml"


def test_load_recordings(tmp_path: Path) -> None:
    path = tmp_path / "one.csv"
    path.touch()
    study = load([str(path)], selects=["window=0:5ms"])
    assert [cell.name for cell in study.cells] == ["one"]
    assert study.settings.recording.select.window == "0:5ms"
    assert load([path], cell="c").cells[0].name == "c"


def test_load_refused(tmp_path: Path) -> None:
    (tmp_path / "empty").mkdir()
    (tmp_path / "one.csv").touch()
    study = tmp_path / "study"
    study.mkdir()
    write_study(study)
    with pytest.raises(InputError, match="nothing to read; name a study"):
        load([])
    with pytest.raises(InputError, match=r"empty: this folder holds no study\.toml"):
        load([tmp_path / "empty"])
    with pytest.raises(InputError, match="together with something else"):
        load([study, tmp_path / "one.csv"])
    with pytest.raises(InputError, match="--cell c pools recordings given one by one"):
        load([study], cell="c")
    with pytest.raises(InputError, match=r"--set sampling\.sed=1: unknown key"):
        load([study], overrides=["sampling.sed=1"])


def test_recordings_of_text_and_of_arrays_are_named_alike(tmp_path: Path) -> None:
    for name in ("a.csv", "b.csv.gz", "c.1.npz", "a.npz"):
        (tmp_path / name).touch()
    study = study_from_recordings(
        [tmp_path / n for n in ("a.csv", "b.csv.gz", "c.1.npz")], Settings()
    )
    assert [cell.name for cell in study.cells] == ["a", "b", "c.1"]
    with pytest.raises(InputError, match=r"a\.npz: .*a\.csv names a cell 'a' too"):
        study_from_recordings([tmp_path / "a.csv", tmp_path / "a.npz"], Settings())
    write_study(tmp_path, recordings=RECORDINGS.replace("b2.csv", "a.npz"))
    assert read_study(tmp_path).cells[2].recordings[0].path.name == "a.npz"
