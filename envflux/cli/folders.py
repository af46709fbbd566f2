"""The folder that results go to: all of them or none, and never over a user's own files.

Results are first written to a hidden folder beside or in the wanted one and moved when all are there. A
list of the files written stays with them, so that a later run knows which ones it may replace.
"""

from __future__ import annotations

import json
import shutil
import tempfile
from collections.abc import Iterable, Iterator
from contextlib import contextmanager
from importlib.metadata import version
from pathlib import Path

from envflux.errors import InputError

MANIFEST = "envflux-files.json"


def check_folder(folder: Path, *, replace: bool, besides: Path | None = None) -> None:
    """Refuse a folder that may not be written to.

    Parameters
    ----------
    folder : Path
        Where the results shall be.
    replace : bool
        Whether an earlier run's results may make way.
    besides : Path, optional
        An entry of `folder` that does not count.

    Raises
    ------
    InputError
        If it is a file, cannot be looked into, or holds anything and `replace` is not set.
    """
    try:
        in_use = folder.exists() and not folder.is_dir()
        filled = not in_use and folder.is_dir() and any(path != besides for path in folder.iterdir())
    except OSError as error:
        raise _unwritable(folder, error) from None
    if in_use:
        raise InputError("--out", str(folder), "a folder, or a name not used yet")
    if not replace and filled:
        raise InputError("--out", str(folder), "empty or new, or --replace given", verb="it holds files and must be")


def check_names(folder: Path, names: Iterable[str]) -> None:
    """Refuse to write over a file that no earlier run wrote.

    Raises
    ------
    InputError
        That names the file.
    """
    if not folder.is_dir():
        return
    earlier = _written_before(folder)
    for name in names:
        if name not in earlier and (folder / name).exists():
            raise InputError(
                "--out", str(folder), "without it: it is not a result of an earlier run",
                verb=f"it holds '{name}' and must be",
            )  # fmt: skip


@contextmanager
def results_folder(folder: Path, *, replace: bool) -> Iterator[Path]:
    """Give a folder to write into; what it holds appears in `folder` if all goes well, else nothing does.

    Parameters
    ----------
    folder : Path
        Where the results shall be.
    replace : bool
        Whether files that an earlier run wrote there make way.

    Yields
    ------
    Path
        An empty folder.

    Raises
    ------
    InputError
        If the folder cannot be written to, or a file of the user's own stands in the way.
    """
    asked, folder = folder, folder.resolve()
    made = _missing_parents(folder)
    try:
        folder.parent.mkdir(parents=True, exist_ok=True)
        # Inside the folder where there is one: it may be a file system of its own, or its parent be read-only.
        beside = folder if folder.is_dir() else folder.parent
        work = Path(tempfile.mkdtemp(dir=beside, prefix=f".{folder.name}.", suffix=".part"))
    except OSError as error:
        _remove_empty(made)
        raise _unwritable(asked, error) from None
    try:
        fresh = work / "new"
        fresh.mkdir()
        yield fresh
        names = sorted(path.name for path in fresh.iterdir())
        record = {"written_by": f"envflux {version('envflux')}", "files": names}
        (fresh / MANIFEST).write_text(json.dumps(record, indent=2) + "\n", encoding="utf-8")
        # Once more: somebody else may have come first while this was being computed.
        check_folder(folder, replace=replace, besides=work)
        check_names(folder, [*names, MANIFEST])
        _move_in(fresh, folder, work / "old")
    except BaseException as error:
        # As it was before, also where only the way to the folder was new.
        shutil.rmtree(work, ignore_errors=True)
        _remove_empty(made)
        if isinstance(error, OSError) and str(work) in str(error.filename):
            # The file it names is gone, and never was one that the user knows.
            raise OSError(error.errno, error.strerror, str(asked)) from error
        raise
    shutil.rmtree(work, ignore_errors=True)


def _unwritable(folder: Path, error: OSError) -> InputError:
    return InputError("--out", str(folder), f"a folder that can be written to ({error.strerror})")


def _remove_empty(folders: list[Path]) -> None:
    for folder in folders:
        if folder.is_dir() and not any(folder.iterdir()):
            folder.rmdir()


def _missing_parents(folder: Path) -> list[Path]:
    return [parent for parent in folder.parents if not parent.exists()]


def _written_before(folder: Path) -> set[str]:
    manifest = folder / MANIFEST
    if not manifest.is_file():
        return set()
    try:
        files = json.loads(manifest.read_text(encoding="utf-8"))["files"]
    except (ValueError, KeyError, TypeError):
        return set()
    # Only plain names of files in this very folder: the list might have been edited.
    return {str(name) for name in files if Path(str(name)).name == name} | {MANIFEST}


def _move_in(fresh: Path, folder: Path, old: Path) -> None:
    """Exchange the earlier run's files for the new ones; if that fails midway, put the earlier ones back."""
    existed = folder.is_dir()
    folder.mkdir(exist_ok=True)
    old.mkdir()
    placed: list[Path] = []
    try:
        for name in sorted(_written_before(folder)):
            if (folder / name).is_file():
                (folder / name).replace(old / name)
        for path in sorted(fresh.iterdir()):
            placed.append(folder / path.name)
            path.replace(folder / path.name)
    except BaseException:
        for path in placed:
            path.unlink(missing_ok=True)
        for path in old.iterdir():
            path.replace(folder / path.name)
        if not existed:
            folder.rmdir()
        raise
