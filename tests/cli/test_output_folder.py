import re
import stat
from pathlib import Path

import pytest
from cutface.cli.output_folder import ensure_free, output_folder
from cutface.props.errors import FileError, UsageError

RESULTS = re.compile(r"result(-\d+)?\.json")


def write(folder: Path, *names: str, replace: bool = False) -> None:
    with output_folder(folder, RESULTS, replace=replace) as draft:
        for name in names:
            (draft / name).write_text(f"new {name}")


def contents(folder: Path) -> dict[str, str]:
    return {file.name: file.read_text() for file in folder.iterdir()}


def test_makes_the_folder_and_its_parents(tmp_path: Path) -> None:
    write(tmp_path / "a" / "b", "result.json")
    assert contents(tmp_path / "a" / "b") == {"result.json": "new result.json"}
    assert [file.name for file in (tmp_path / "a").iterdir()] == ["b"]


def test_a_new_folder_is_as_open_to_others_as_any(tmp_path: Path) -> None:
    write(tmp_path / "out", "result.json")
    (tmp_path / "plain").mkdir()
    assert stat.S_IMODE((tmp_path / "out").stat().st_mode) == stat.S_IMODE((tmp_path / "plain").stat().st_mode)


def test_nothing_is_seen_before_all_is_written(tmp_path: Path) -> None:
    with output_folder(tmp_path / "out", RESULTS) as draft:
        (draft / "result.json").write_text("half")
        assert not (tmp_path / "out").exists()
    assert (tmp_path / "out").exists()


def test_files_of_others_stay(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    write(tmp_path, "result.json")
    write(tmp_path, "result-1.json", "result-2.json", replace=True)
    assert contents(tmp_path) == {
        "notes.txt": "mine",
        "result-1.json": "new result-1.json",
        "result-2.json": "new result-2.json",
    }


def test_earlier_results_are_not_overwritten_unless_asked(tmp_path: Path) -> None:
    (tmp_path / "result-3.json").write_text("old")
    with pytest.raises(UsageError, match=r"result-3\.json.*--replace"):
        write(tmp_path, "result.json")
    assert contents(tmp_path) == {"result-3.json": "old"}


def test_a_file_in_place_of_the_folder_is_wrong_use(tmp_path: Path) -> None:
    (tmp_path / "out").write_text("a file")
    with pytest.raises(UsageError, match="not a folder"):
        ensure_free(tmp_path / "out", RESULTS, replace=True)


@pytest.mark.parametrize("exists", [True, False])
def test_a_failure_while_writing_leaves_all_as_it_was(tmp_path: Path, exists: bool) -> None:
    folder = tmp_path / "out"
    if exists:
        folder.mkdir()
        (folder / "result.json").write_text("old")
    before = sorted(tmp_path.rglob("*"))
    with (
        pytest.raises(ZeroDivisionError),
        output_folder(folder, RESULTS, replace=True) as draft,
    ):
        (draft / "result.json").write_text("half")
        raise ZeroDivisionError
    assert sorted(tmp_path.rglob("*")) == before
    assert not exists or contents(folder) == {"result.json": "old"}


def test_a_failure_while_moving_puts_earlier_files_back(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "result-1.json").write_text("old 1")
    (tmp_path / "result-2.json").write_text("old 2")
    rename = Path.rename

    def full_disc(self: Path, target: Path) -> Path:
        if self.read_text() == "new result-2.json":
            raise OSError(28, "No space left on device")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", full_disc)
    with pytest.raises(FileError, match="No space left on device"):
        write(tmp_path, "result-1.json", "result-2.json", replace=True)
    assert contents(tmp_path) == {"result-1.json": "old 1", "result-2.json": "old 2"}


def test_a_name_of_its_own_that_is_taken_by_another_is_never_written_over(tmp_path: Path) -> None:
    (tmp_path / "notes.txt").write_text("mine")
    with pytest.raises(FileError, match=r"notes\.txt is in the way"):
        write(tmp_path, "notes.txt", "result.json", replace=True)
    assert contents(tmp_path) == {"notes.txt": "mine"}


def test_a_file_among_the_parents_is_a_file_problem(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(FileError, match="could not be written"):
        write(tmp_path / "file" / "out", "result.json")
