"""Files to double-click: they check the study beside them, or those dropped on them, and offer to
solve them.

One for Windows (``.cmd``) and one for macOS and Linux (``.command``, a shell script). Both call the
Python that wrote them; the window stays open until a key is pressed. Results appear beside the
study. Nothing is solved unasked.
"""

from __future__ import annotations

import os
import shlex
from pathlib import Path

from xlplan.base.errors import PathError, ResultFileError

_WINDOWS = r"""@echo off
rem Checks the study beside this file, or those dropped on it, and offers to solve them.
chcp 65001 >nul
set "PYTHON={python}"
if not exist "%PYTHON%" set "PYTHON=py"
set "WORST=0"
set "STUDY=%~dp0{study}"
if not "%~1"=="" set "STUDY=%~1"
:study
echo.
echo "%STUDY%"
"%PYTHON%" -m xlplan check "%STUDY%"
if errorlevel 1 set "WORST=2" & goto next
choice /c YN /m "Solve it now"
if errorlevel 2 goto next
"%PYTHON%" -m xlplan solve "%STUDY%"
if errorlevel 1 set "WORST=1"
:next
shift
if "%~1"=="" goto end
set "STUDY=%~1"
goto study
:end
pause
exit /b %WORST%
"""

_SHELL = """#!/bin/sh
# Checks the study beside this file, or those dropped on it, and offers to solve them.
python={python}
[ -x "$python" ] || python=python3
[ "$#" -gt 0 ] || set -- "$(dirname "$0")/"{study}
worst=0
for study in "$@"; do
    printf '\\n%s\\n' "$study"
    "$python" -m xlplan check "$study"
    status=$?
    if [ "$status" -eq 0 ]; then
        printf 'Solve it now? [y/N] '
        read -r answer || answer=n
        case "$answer" in
            [yY]*) "$python" -m xlplan solve "$study" || status=$? ;;
        esac
    fi
    [ "$status" -eq 0 ] || worst=$status
done
if [ -t 0 ]; then
    printf 'Press Enter to close. '
    read -r answer
fi
exit "$worst"
"""


def launcher_paths(study: Path) -> tuple[Path, Path]:
    """Names of the two launchers of a study: for Windows, and for macOS and Linux."""
    return study.with_suffix(".cmd"), study.with_suffix(".command")


def write_launchers(study: Path, python: str) -> tuple[Path, Path]:
    """Writes the launchers of a study beside it.

    Parameters
    ----------
    study : Path of the workbook
    python : path of the Python that has xlplan

    Returns
    -------
    their two paths

    Raises PathError if one is there already, ResultFileError if they cannot be written.
    """
    windows, shell = launcher_paths(study)
    check_no_launchers(study)
    batch = _WINDOWS.replace("{python}", _in_batch(python)).replace(
        "{study}", _in_batch(study.name)
    )
    script = _SHELL.replace("{python}", shlex.quote(python)).replace(
        "{study}", shlex.quote(study.name)
    )
    try:
        windows.write_bytes(batch.replace("\n", "\r\n").encode("utf-8"))
        shell.write_bytes(script.encode("utf-8"))
        shell.chmod(shell.stat().st_mode | 0o111 & ~_mask())
    except OSError as error:
        raise ResultFileError(f"Cannot write beside '{study}': {error.strerror}.") from error
    return windows, shell


def check_no_launchers(study: Path) -> None:
    """Raises PathError where a launcher of the study is there already."""
    for path in launcher_paths(study):
        if path.exists():
            raise PathError(f"'{path}' is there already. Nothing was changed.")


def _in_batch(text: str) -> str:
    """Text within quotes of a batch file, where a percent sign stands for a variable."""
    return text.replace("%", "%%")


def _mask() -> int:
    mask = os.umask(0)
    os.umask(mask)
    return mask
