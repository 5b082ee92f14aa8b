"""Writing a result folder whole or not at all.

The files are first written to a new folder beside the target, which then takes the target's name in
one rename. An older result is only replaced when that is asked for, and a folder that holds anything
but a result of this program never is. Files that somebody else put into a result folder are carried
over to the new one.
"""

from __future__ import annotations

import errno
import json
import os
import shutil
from collections.abc import Mapping
from pathlib import Path, PurePosixPath

from compsize.errors import InternalError, OutputError
from compsize.report.result_json import FORMAT_FAMILY

__all__ = ["OWN_NAMES", "check_folder", "write_file", "write_folder"]

RESULT_FILE = "result.json"

OWN_NAMES = frozenset(
    {
        RESULT_FILE,
        "margins.csv",
        "margins_before.csv",
        "margins_after.csv",
        "plan.csv",
        "sites.csv",
        "report.html",
        "report.xlsx",
        "tables",
    }
)
"""Names in a result folder that belong to the program; everything else there is left as it is."""


def check_folder(folder: Path | str, overwrite: bool) -> Path:
    """The real path of ``folder``, once it is clear that a result may be written there.

    A long run calls this before it starts. Raises :class:`OutputError` where the folder is a file, is the
    current folder, holds a result and ``overwrite`` is False, or holds files but no result.
    """
    target = Path(folder)
    try:
        target = target.resolve()
        if not target.exists():
            return target
        if not target.is_dir():
            raise OutputError(f"{folder} is a file. Name a folder for the result.")
        names = os.listdir(target)
        stands_in = Path.cwd().resolve()
    except OSError as fault:
        raise OutputError(f"{folder} cannot be read: {_why(fault)}. Name another folder for the result.") from fault
    if target == stands_in or target in stands_in.parents:
        raise OutputError(f"{folder} is the folder this command runs in. Name a new folder inside it for the result.")
    if not names:
        return target
    if not _holds_result(target):
        raise OutputError(
            f"{folder} holds files that are not a result of compsize, and none of them is touched. "
            "Name a new or an empty folder for the result."
        )
    if not overwrite:
        raise OutputError(f"{folder} already holds a result. Name another folder, or say --overwrite to replace it.")
    return target


def write_folder(folder: Path | str, files: Mapping[str, bytes | str], overwrite: bool = False) -> Path:
    """Write ``files`` (relative name with ``/`` to content; text becomes UTF-8) as the result ``folder``.

    Missing parent folders are made. Whatever stops the writing, the folder is afterwards either the new
    result or what it was before, and no part of the new one is left over. Returns the real path. Raises
    :class:`OutputError` as :func:`check_folder` does, and where the disk refuses.
    """
    for name in files:
        path = PurePosixPath(name)
        if path.is_absolute() or not path.parts or ".." in path.parts or path.parts[0] not in OWN_NAMES:
            raise InternalError(f"{name!r} is no name of a result file.")
    target = check_folder(folder, overwrite)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        fresh = _new_sibling(target, "new")
    except OSError as fault:
        raise _refused(folder, fault) from fault
    try:
        for name, content in files.items():
            _write(fresh.joinpath(*PurePosixPath(name).parts), content)
        if target.exists():
            _carry_over(target, fresh)
        _take_place(fresh, target)
    except OSError as fault:
        raise _refused(folder, fault) from fault
    finally:
        shutil.rmtree(fresh, ignore_errors=True)
    return target


def write_file(path: Path, content: bytes | str) -> None:
    """Write one file of a result folder anew, whole or not at all. Raises :class:`OutputError`."""
    fresh = path.with_name(f".compsize-{os.getpid()}-{path.name}")
    try:
        _write(fresh, content)
        os.replace(fresh, path)
    except OSError as fault:
        raise OutputError(f"{path} cannot be written: {_why(fault)}.") from fault
    finally:
        fresh.unlink(missing_ok=True)


def _holds_result(folder: Path) -> bool:
    try:
        found = json.loads((folder / RESULT_FILE).read_text(encoding="utf-8"))
    except (OSError, ValueError, RecursionError):
        return False
    return isinstance(found, dict) and str(found.get("format", "")).startswith(FORMAT_FAMILY)


def _new_sibling(target: Path, use: str) -> Path:
    """A new folder on the same disk as the target, with the usual permissions (which tempfile would narrow)."""
    number = 0
    while True:
        path = target.with_name(f".compsize-{use}-{os.getpid()}-{number}")
        try:
            path.mkdir()
        except FileExistsError:
            number += 1
        else:
            return path


def _write(path: Path, content: bytes | str) -> None:
    path.parent.mkdir(parents=True, exist_ok=True)
    with path.open("xb") as stream:
        stream.write(content.encode("utf-8") if isinstance(content, str) else content)
        stream.flush()
        os.fsync(stream.fileno())


def _carry_over(old: Path, fresh: Path) -> None:
    """Copy what is not ours, so that the old folder stays complete until the new one has its place."""
    for entry in sorted(old.iterdir()):
        if entry.name in OWN_NAMES:
            continue
        copy = fresh / entry.name
        if entry.is_dir() and not entry.is_symlink():
            shutil.copytree(entry, copy, symlinks=True)
        else:
            shutil.copy2(entry, copy, follow_symlinks=False)
    shutil.copymode(old, fresh)


def _take_place(fresh: Path, target: Path) -> None:
    """Give ``fresh`` the name of ``target``; the old folder returns if that does not succeed."""
    if not target.exists():
        os.rename(fresh, target)
        return
    aside = _new_sibling(target, "old")
    aside.rmdir()
    try:
        os.rename(target, aside)
        os.rename(fresh, target)
    except BaseException:
        if aside.exists() and not target.exists():
            os.rename(aside, target)
        raise
    shutil.rmtree(aside, ignore_errors=True)


def _why(fault: OSError) -> str:
    return fault.strerror or str(fault)


def _refused(folder: Path | str, fault: OSError) -> OutputError:
    remedy = "Name another folder for the result"
    if fault.errno == errno.ENOSPC:
        remedy = "Make room on the disk or name another folder"
    elif fault.errno == errno.EBUSY:
        remedy = "Name a folder inside it for the result"
    return OutputError(f"{folder} cannot be written: {_why(fault)}. {remedy}; nothing was changed.")
