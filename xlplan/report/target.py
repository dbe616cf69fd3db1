"""Files that appear whole or not at all: temporary file in the target folder, then one rename.

Whatever happens before the rename leaves the final name untouched; whatever happens after it finds
a whole file. Nothing is ever deleted but our own temporary file.
"""

from __future__ import annotations

import contextlib
import os
import tempfile
from collections.abc import Iterator
from pathlib import Path

from xlplan.base.errors import ResultFileError

MAX_TRIES = 10_000
TEMP_PREFIX = ".xlplan-"


def check_folder(path: Path) -> None:
    """Raises ResultFileError unless a file can be made beside ``path``; call before a long run."""
    with temporary_beside(path):
        pass


def check_not_study(path: Path, forbidden: Path) -> None:
    """Raises ResultFileError if ``path`` is the study file, by whatever name or link."""
    is_same = path.resolve() == forbidden.resolve()
    if not is_same and path.exists() and forbidden.exists():
        is_same = path.samefile(forbidden)
    if is_same:
        raise ResultFileError(
            f"The results cannot be written over the study itself: '{path}'. Give another name."
        )


@contextlib.contextmanager
def temporary_beside(path: Path) -> Iterator[Path]:
    """An empty temporary file in the folder of ``path``; removed at the end if still there."""
    folder = path.parent
    if not folder.is_dir():
        raise ResultFileError(f"There is no folder '{folder}' to write '{path.name}' in.")
    if path.is_dir():
        raise ResultFileError(f"'{path}' is a folder; give the name of a file.")
    try:
        handle, name = tempfile.mkstemp(prefix=TEMP_PREFIX, suffix=path.suffix, dir=folder)
        os.close(handle)
    except OSError as error:
        raise ResultFileError(
            f"Cannot write in the folder '{folder}': {error.strerror}."
        ) from error
    temporary = Path(name)
    try:
        yield temporary
    finally:
        temporary.unlink(missing_ok=True)


def use_default_mode(temporary: Path) -> None:
    """Gives the file the permissions of any new file; temporary files are private at first."""
    mask = os.umask(0)
    os.umask(mask)
    temporary.chmod(0o666 & ~mask)


def replace_whole(path: Path, text: str) -> None:
    """Writes a text file in one step, over a file of that name if there is one."""
    with temporary_beside(path) as temporary:
        try:
            temporary.write_text(text, encoding="utf-8")
            use_default_mode(temporary)
            os.replace(temporary, path)
        except OSError as error:
            raise ResultFileError(f"Cannot write '{path}': {error.strerror}.") from error


def put_in_place(temporary: Path, path: Path, force: bool) -> Path:
    """Gives a finished file its name, or the next free one where that is taken or locked.

    Parameters
    ----------
    temporary : Path, whole and closed, in the folder of ``path``
    path : Path, the name asked for
    force : bool, replace a file of that name; if it is locked, the next free name all the same

    Returns
    -------
    Path, the name it got; ``name-2.xlsx``, ``name-3.xlsx`` and so on where ``path`` was taken
    """
    use_default_mode(temporary)
    if force:
        try:
            os.replace(temporary, path)
        except PermissionError:
            # Open in a spreadsheet program on Windows: keep the run under another name.
            pass
        else:
            return path
    for candidate in _candidates(path):
        if _claim(temporary, candidate):
            return candidate
    raise ResultFileError(f"No free name beside '{path}'.")


def _candidates(path: Path) -> Iterator[Path]:
    yield path
    for number in range(2, MAX_TRIES):
        yield path.with_name(f"{path.stem}-{number}{path.suffix}")


def _claim(temporary: Path, candidate: Path) -> bool:
    """Moves the file to a name that nothing holds; False if something does.

    A hard link fails where the name is taken, so that two runs at once never replace each other.
    Where the file system has no links, the name is looked up first.
    """
    try:
        os.link(temporary, candidate)
    except FileExistsError:
        return False
    except OSError:
        if candidate.exists():
            return False
        try:
            os.replace(temporary, candidate)
        except PermissionError:
            return False
        except OSError as error:
            raise ResultFileError(f"Cannot write '{candidate}': {error.strerror}.") from error
    return True
