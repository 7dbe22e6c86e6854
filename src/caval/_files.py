"""Files that appear whole or not at all."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable
from pathlib import Path

from caval.errors import CavalError, FileError

__all__ = ["write_all"]


def write_all(directory: Path, make: Callable[[Path], object], *, force: bool = False, never: Path | None = None) -> list[Path]:
    """Let `make` write files into a hidden folder, then move all of them into `directory`, or none.

    Parameters
    ----------
    directory : Path
        Made if missing, and taken away again if it was made and nothing came of it.
    make : callable
        Called with the hidden folder, which lies in `directory` so that moving is renaming.
    force : bool
        Overwrite files of the same names.
    never : Path, optional
        The input: it is not overwritten, not even with `force`.

    Returns
    -------
    list of Path
        The files in their places, sorted.

    Raises
    ------
    FileError
        A file is in the way, or one cannot be written.
    """
    is_new = not directory.exists()
    scratch: Path | None = None
    try:
        directory.mkdir(parents=True, exist_ok=True)
        scratch = Path(tempfile.mkdtemp(prefix=".caval-", dir=directory))
        make(scratch)
        made = sorted(scratch.iterdir())
        targets = [directory / path.name for path in made]
        for target in targets:
            _check_free(target, force=force, never=never)
        for source, target in zip(made, targets, strict=True):
            os.replace(source, target)
        return targets
    except CavalError:
        raise
    except OSError as error:
        raise FileError(f"cannot write into {directory}: {error.strerror or error}") from error
    finally:
        if scratch is not None:
            shutil.rmtree(scratch, ignore_errors=True)
        if is_new and directory.is_dir() and not any(directory.iterdir()):
            directory.rmdir()


def _check_free(target: Path, *, force: bool, never: Path | None) -> None:
    if not target.exists():
        return
    if never is not None and never.exists() and target.samefile(never):
        raise FileError(f"{target} is the input, which is never overwritten; write to another folder")
    if not force:
        raise FileError(f"{target} exists; use --force to overwrite, or write to another folder")
