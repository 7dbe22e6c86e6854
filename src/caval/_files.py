"""Files that appear whole or not at all."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Callable, Iterable, Sequence
from pathlib import Path

from caval.errors import CavalError, FileError

__all__ = ["write_all"]


def write_all(directory: Path, make: Callable[[Path], object], *, force: bool = False, never: Iterable[Path] = ()) -> list[Path]:
    """Let `make` write files into a hidden folder, then move all of them into `directory`, or none.

    Parameters
    ----------
    directory : Path
        Made if missing, and taken away again if it was made and nothing came of it.
    make : callable
        Called with the hidden folder, which lies in `directory` so that moving is renaming.
    force : bool
        Overwrite files of the same names.
    never : paths
        The input: none of it is overwritten, not even with `force`.

    Returns
    -------
    list of Path
        The files in their places, sorted.

    Raises
    ------
    FileError
        A file is in the way, or one cannot be written.
    """
    missing = [folder for folder in (directory, *directory.parents) if not folder.exists()]
    scratch: Path | None = None
    try:
        directory.mkdir(parents=True, exist_ok=True)
        scratch = Path(tempfile.mkdtemp(prefix=".caval-", dir=directory))
        (scratch / "new").mkdir()
        (scratch / "old").mkdir()
        make(scratch / "new")
        made = sorted((scratch / "new").iterdir())
        protected = [path for path in never if path.exists()]
        for path in made:
            _check_free(directory / path.name, force=force, never=protected)
        return _move(made, directory, scratch / "old")
    except CavalError:
        raise
    except OSError as error:
        raise FileError(f"cannot write into {directory}: {error.strerror or error}") from error
    finally:
        if scratch is not None:
            shutil.rmtree(scratch, ignore_errors=True)
        for folder in missing:
            if folder.is_dir() and not any(folder.iterdir()):
                folder.rmdir()


def _move(made: Sequence[Path], directory: Path, aside: Path) -> list[Path]:
    """Move files into their places; when one cannot, those that gave way come back."""
    placed: list[Path] = []
    try:
        for source in made:
            target = directory / source.name
            if target.exists():
                os.replace(target, aside / source.name)
            placed.append(target)
            os.replace(source, target)
    except BaseException:  # an interruption from the keyboard must not leave a mix of two runs either; it goes on from here
        for target in placed:
            target.unlink(missing_ok=True)
            if (aside / target.name).exists():
                os.replace(aside / target.name, target)
        raise
    return placed


def _check_free(target: Path, *, force: bool, never: Sequence[Path]) -> None:
    if not target.exists():
        return
    if not target.is_file():
        raise FileError(f"{target} is in the way and is no file; remove it, or write to another folder")
    if any(target.samefile(path) for path in never):
        raise FileError(f"{target} is the input, which is never overwritten; write to another folder")
    if not force:
        raise FileError(f"{target} exists; use --force to overwrite, or write to another folder")
