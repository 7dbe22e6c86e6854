"""Files appear whole or not at all, and the input is never touched."""

from __future__ import annotations

from pathlib import Path

import pytest

import caval
from caval._files import write_all
from caval.errors import FileError
from caval.model.sketch import sketch


def _two(folder: Path) -> None:
    (folder / "a.txt").write_text("new a")
    (folder / "b.txt").write_text("new b")


def test_nothing_moves_when_something_that_is_no_file_is_in_the_way(tmp_path: Path) -> None:
    (tmp_path / "a.txt").write_text("old a")
    (tmp_path / "b.txt").mkdir()
    with pytest.raises(FileError, match=r"b\.txt is in the way"):
        write_all(tmp_path, _two, force=True)
    assert (tmp_path / "a.txt").read_text() == "old a"
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.txt", "b.txt"]


def test_what_gave_way_comes_back_when_a_later_file_cannot_be_placed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    import os

    for name in ("a.txt", "b.txt"):
        (tmp_path / name).write_text("old")
    real, calls = os.replace, []

    def failing(source: Path, target: Path) -> None:
        calls.append(target)
        if len(calls) == 4:  # a aside, a placed, b aside, b placed
            raise OSError(28, "No space left on device")
        real(source, target)

    monkeypatch.setattr(os, "replace", failing)
    with pytest.raises(FileError, match="No space left"):
        write_all(tmp_path, _two, force=True)
    assert [(tmp_path / name).read_text() for name in ("a.txt", "b.txt")] == ["old", "old"]


def test_folders_made_for_nothing_go_again(tmp_path: Path) -> None:
    def fail(_folder: Path) -> None:
        raise FileError("no")

    with pytest.raises(FileError):
        write_all(tmp_path / "p" / "q" / "r", fail)
    assert not list(tmp_path.iterdir())


def test_samples_of_the_input_are_never_overwritten(tmp_path: Path) -> None:
    caval.write(sketch(minutes=0.1, events=False).recording, tmp_path / "bar.hea")
    header = (tmp_path / "bar.hea").read_text()
    (tmp_path / "foo.hea").write_text(header.replace("bar 3", "foo 3", 1))
    (tmp_path / "bar.hea").unlink()
    before = (tmp_path / "bar.dat").read_bytes()
    with pytest.raises(FileError, match="is the input"):
        caval.convert(tmp_path / "foo.hea", tmp_path / "bar.hea", force=True)
    assert (tmp_path / "bar.dat").read_bytes() == before
