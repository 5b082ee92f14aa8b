"""Result folders appear whole or not at all."""

from __future__ import annotations

import errno
import os
from collections.abc import Callable
from pathlib import Path

import pytest

from compsize.errors import InternalError, OutputError
from compsize.report.store import check_folder, write_file, write_folder

RESULT = '{"format": "compsize result 1"}'
FIRST: dict[str, bytes | str] = {"result.json": RESULT, "plan.csv": "site\n", "tables/a.csv": b"x\n"}
SECOND: dict[str, bytes | str] = {"result.json": RESULT + "\n", "margins.csv": "case\n"}


def content(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def test_new_folder_holds_exactly_the_files(tmp_path: Path) -> None:
    """A new folder, with missing parents, holds the given files and nothing is left beside it."""
    target = tmp_path / "deep" / "run"
    assert write_folder(target, FIRST) == target
    assert content(target) == {
        "result.json": RESULT.encode(),
        "plan.csv": b"site\n",
        os.path.join("tables", "a.csv"): b"x\n",
    }
    assert os.listdir(target.parent) == ["run"]


def test_usual_permissions(tmp_path: Path) -> None:
    """The folder gets the permissions any new folder gets, not those of a private temporary one."""
    (tmp_path / "plain").mkdir()
    write_folder(tmp_path / "run", FIRST)
    assert (tmp_path / "run").stat().st_mode == (tmp_path / "plain").stat().st_mode


def test_empty_folder_is_taken(tmp_path: Path) -> None:
    """An empty folder receives the result without --overwrite."""
    (tmp_path / "run").mkdir()
    write_folder(tmp_path / "run", SECOND)
    assert set(content(tmp_path / "run")) == set(SECOND)


def test_older_result_is_kept(tmp_path: Path) -> None:
    """Without --overwrite an older result stays byte for byte, and the message says what to do."""
    write_folder(tmp_path / "run", FIRST)
    before = content(tmp_path / "run")
    with pytest.raises(OutputError, match=r"already holds a result.*--overwrite"):
        write_folder(tmp_path / "run", SECOND)
    assert content(tmp_path / "run") == before


def test_overwrite_replaces_ours_and_keeps_the_rest(tmp_path: Path) -> None:
    """Overwriting drops the older result's files, also those the new one lacks, and keeps other people's."""
    target = tmp_path / "run"
    write_folder(target, FIRST)
    (target / "notes.txt").write_text("mine")
    (target / "photos").mkdir()
    (target / "photos" / "bay.txt").write_text("mine too")
    (target / "link").symlink_to("notes.txt")
    write_folder(target, SECOND, overwrite=True)
    assert set(content(target)) == {
        "result.json",
        "margins.csv",
        "notes.txt",
        "link",
        os.path.join("photos", "bay.txt"),
    }
    assert (target / "notes.txt").read_text() == "mine"
    assert (target / "link").is_symlink()
    assert os.listdir(tmp_path) == ["run"]


@pytest.mark.parametrize("found", [None, "{", "[1]", '{"format": "of another program"}', '{"title": 1}'])
def test_foreign_folder_is_never_replaced(tmp_path: Path, found: str | None) -> None:
    """A folder with files but without a result of this program is refused even with --overwrite."""
    target = tmp_path / "study"
    target.mkdir()
    (target / "study.toml").write_text("title = 'x'")
    if found is not None:
        (target / "result.json").write_text(found)
    before = content(target)
    with pytest.raises(OutputError, match="holds files that are not a result of compsize"):
        write_folder(target, SECOND, overwrite=True)
    assert content(target) == before
    assert os.listdir(tmp_path) == ["study"]


def test_file_in_the_way(tmp_path: Path) -> None:
    """A file where the folder should be is refused and kept."""
    (tmp_path / "run").write_text("a file")
    with pytest.raises(OutputError, match="is a file"):
        write_folder(tmp_path / "run", FIRST, overwrite=True)
    assert (tmp_path / "run").read_text() == "a file"


def test_current_folder_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The folder a shell stands in, or one above it, is not replaced under its feet."""
    write_folder(tmp_path / "run", FIRST)
    monkeypatch.chdir(tmp_path / "run" / "tables")
    with pytest.raises(OutputError, match="the folder this command runs in"):
        check_folder("..", overwrite=True)


def test_link_to_a_result_stays_a_link(tmp_path: Path) -> None:
    """Writing through a symbolic link replaces the folder it names and leaves the link."""
    write_folder(tmp_path / "run", FIRST)
    (tmp_path / "latest").symlink_to("run")
    write_folder(tmp_path / "latest", SECOND, overwrite=True)
    assert (tmp_path / "latest").is_symlink()
    assert set(content(tmp_path / "run")) == set(SECOND)


def fail_on(call: int, fault: BaseException, real: Callable[..., None]) -> Callable[..., None]:
    count = 0

    def failing(*arguments: object) -> None:
        nonlocal count
        count += 1
        if count == call:
            raise fault
        real(*arguments)

    return failing


@pytest.mark.parametrize("existing", [False, True])
@pytest.mark.parametrize(
    ("fault", "seen"),
    [(OSError(errno.ENOSPC, "No space left on device"), OutputError), (KeyboardInterrupt(), KeyboardInterrupt)],
)
def test_failure_while_writing_leaves_no_trace(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, existing: bool, fault: BaseException, seen: type[BaseException]
) -> None:
    """A full disk or an interrupt after the first file leaves the folder as it was and nothing beside it."""
    target = tmp_path / "run"
    if existing:
        write_folder(target, FIRST)
    before = content(target)
    monkeypatch.setattr(os, "fsync", fail_on(2, fault, os.fsync))
    with pytest.raises(seen, match="Make room on the disk" if seen is OutputError else None):
        write_folder(target, SECOND, overwrite=True)
    assert content(target) == before
    assert os.listdir(tmp_path) == (["run"] if existing else [])


@pytest.mark.parametrize("call", [1, 2])
def test_failure_while_changing_places(tmp_path: Path, monkeypatch: pytest.MonkeyPatch, call: int) -> None:
    """Where a rename fails, the older result has its place back and the new one is gone."""
    target = tmp_path / "run"
    write_folder(target, FIRST)
    before = content(target)
    monkeypatch.setattr(os, "rename", fail_on(call, OSError(errno.EBUSY, "Device or resource busy"), os.rename))
    with pytest.raises(OutputError, match="Name a folder inside it"):
        write_folder(target, SECOND, overwrite=True)
    monkeypatch.undo()
    assert content(target) == before
    assert os.listdir(tmp_path) == ["run"]


@pytest.mark.parametrize("name", ["../x", "/x", "notes.txt", "", "tables/../../x"])
def test_only_own_names_are_written(tmp_path: Path, name: str) -> None:
    """A name outside the result, or one a user's file may have, is a fault of the program."""
    with pytest.raises(InternalError, match="is no name of a result file"):
        write_folder(tmp_path / "run", {name: "x"})
    assert os.listdir(tmp_path) == []


def test_one_file_is_replaced_whole(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """A page rendered again replaces the old one, or leaves it where the disk refuses."""
    page = tmp_path / "report.html"
    write_file(page, "first")
    write_file(page, "second")
    assert page.read_text() == "second"
    monkeypatch.setattr(os, "replace", fail_on(1, OSError(errno.EACCES, "Permission denied"), os.replace))
    with pytest.raises(OutputError, match="Permission denied"):
        write_file(page, "third")
    assert page.read_text() == "second"
    assert os.listdir(tmp_path) == ["report.html"]
