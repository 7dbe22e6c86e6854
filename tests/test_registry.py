"""Entry points: anyone's stage by the same door, and a broken plugin costs a warning, not the run."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pytest

from caval import registry
from caval.errors import FileError, InputError, PluginError
from caval.recording import Recording
from caval.registry import Format


@dataclass(frozen=True)
class Package:
    name: str
    version: str = "1.2"


@dataclass(frozen=True)
class Entry:
    name: str
    value: str
    dist: Package | None
    loaded: Any = None

    def load(self) -> Any:
        if isinstance(self.loaded, Exception):
            raise self.loaded
        return self.loaded


@pytest.fixture
def install(monkeypatch: pytest.MonkeyPatch) -> Iterator[Any]:
    """Make these entry points the installed ones."""

    def put(*entries: Entry) -> None:
        monkeypatch.setattr(registry, "entry_points", lambda group: list(entries))  # noqa: ARG005
        registry._installed.cache_clear()

    yield put
    monkeypatch.undo()
    registry._installed.cache_clear()


def read(path: Path) -> Recording:
    return Recording(path.stem, ())


def test_ours_first_then_by_package_whatever_the_order_found(install: Any) -> None:
    entries = [Entry("z", "z:z", Package("zebra"), 1), Entry("b", "b:b", Package("ant"), 2), Entry("a", "a:a", Package("caval"), 3)]
    for order in (entries, entries[::-1]):
        install(*order)
        assert list(registry.stages()) == ["a", "b", "z"]
    assert registry.stages()["b"].package == "ant"
    assert registry.stages()["b"].version == "1.2"


@pytest.mark.parametrize("failure", [ImportError("no module named x"), RuntimeError("boom"), SyntaxError("bad")])
def test_a_broken_plugin_warns_and_is_skipped(install: Any, failure: Exception) -> None:
    install(Entry("good", "g:g", Package("caval"), 1), Entry("bad", "b:b", Package("theirs"), failure))
    with pytest.warns(UserWarning, match="'bad' of theirs did not load"):
        found = registry.stages()
    assert list(found) == ["good"]


def test_a_hidden_duplicate_warns_and_ours_stays(install: Any) -> None:
    ours = Entry("waves", "caval.stages.waves:waves", Package("caval"), "ours")
    install(Entry("waves", "theirs:waves", Package("theirs"), "theirs"), ours)
    with pytest.warns(UserWarning, match="'waves' of theirs is hidden by that of caval"):
        found = registry.stages()
    assert found["waves"].value == "ours"


def test_one_package_seen_twice_on_the_path_is_no_duplicate(install: Any) -> None:
    install(*[Entry("waves", "caval.stages.waves:waves", Package("caval"), "ours")] * 2)
    assert list(registry.stages()) == ["waves"]


def test_a_missing_name_lists_what_there_is(install: Any) -> None:
    install(Entry("waves", "w:w", Package("caval"), 1))
    with pytest.raises(PluginError, match="no stage 'other' is installed; there are: waves"):
        registry.pick(registry.stages(), "other", "stage")


def test_format_by_ending_then_by_asking(install: Any, tmp_path: Path) -> None:
    by_ending = Format("one", "", (".one",), read=read)
    by_name = Format("two", "", (".two",), read=read, owns=lambda path: path.with_suffix(".two").exists())
    writer = Format("out", "", (".out",), write=lambda recording, path: (path,))  # noqa: ARG005
    install(*(Entry(f.name, f"{f.name}:F", Package("caval"), f) for f in (by_ending, by_name, writer)))
    (tmp_path / "rec.two").touch()
    assert registry.format_for(tmp_path / "x.ONE").name == "one"
    assert registry.format_for(tmp_path / "rec").name == "two"
    assert registry.format_for(tmp_path / "x.out", "write").name == "out"
    with pytest.raises(FileError, match="no such file"):
        registry.format_for(tmp_path / "absent")
    (tmp_path / "x.xyz").touch()
    with pytest.raises(FileError, match=r"'.xyz' is not one that caval can read; it can: .one, .two"):
        registry.format_for(tmp_path / "x.xyz")
    with pytest.raises(FileError, match=r"can write; it can: \.out"):
        registry.format_for(tmp_path / "x.one", "write")


def test_a_stage_is_declared_by_its_parameters() -> None:
    @registry.stage(name="s", gives=("marks",), margin_s=2.0)
    def s(beats: Any, cvp: Any, abp: Any = None, *, level: float = 1.0) -> Any:
        return beats, cvp, abp, level

    declared = s.__caval__  # type: ignore[attr-defined]
    assert (declared.needs, declared.wants, dict(declared.settings)) == (("beats", "cvp"), ("abp",), {"level": 1.0})
    assert s(1, 2) == (1, 2, None, 1.0)  # the plain function stays callable
    assert registry.parse_setting("level", declared, 2) == 2
    with pytest.raises(InputError, match="float expected"):
        registry.parse_setting("level", declared, "high")
    with pytest.raises(InputError, match="has no setting 'colour'; it has: level"):
        registry.parse_setting("colour", declared, 1)


def test_what_this_distribution_registers_loads_without_a_warning(recwarn: pytest.WarningsRecorder) -> None:
    registry._installed.cache_clear()
    assert {"anchors", "quality", "waves", "measure"} <= set(registry.stages())
    assert {"qrs", "upstroke", "neurokit", "xqrs"} <= set(registry.detectors())
    assert {"edf", "wfdb", "csv", "bids"} <= set(registry.formats())
    assert not [w for w in recwarn if "caval" in str(w.message)]
