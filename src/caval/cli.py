"""The command line. Heavy imports stand inside the functions that need them, so that ``caval --help`` answers at once."""

from __future__ import annotations

# ruff: noqa: ARG001 -- `debug` is read in `main`, before a command runs; it stands in each signature for the help
import sys
import warnings
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

import caval

if TYPE_CHECKING:
    from caval.result import Result

__all__ = ["CAUTION", "app", "main"]

_DEMO_NOTE = "demo_readme.txt"
"""Stands in a folder that `caval demo` made; only there does a later demo overwrite."""
CAUTION = (
    "Caution: research software, not a medical device. It describes recordings; it neither diagnoses nor advises, and must not "
    "be used to monitor or treat a patient. Local protocols and licensed practice come first."
)


def _epilog(*examples: str) -> str:
    return "\n\n".join(["Examples:", *(f"  $ {e}" for e in examples), " ", CAUTION])


app = typer.Typer(
    name="caval",
    help="Find the a, c, x, v and y of every beat of a central venous pressure recording, and bring them back to where you work: "
    "EDF+, WFDB, NeuroKit2, MNE.",
    epilog=_epilog("caval demo", "caval look record.edf", "caval mark record.edf --out marked", "caval mark --help"),
    add_completion=False,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)


class Table(StrEnum):
    """Kinds of table file."""

    parquet = "parquet"
    csv = "csv"


Record = Annotated[Path, typer.Argument(metavar="RECORD", help="An .edf, .bdf or .hea file, or a WFDB record name.", show_default=False)]
Debug = Annotated[bool, typer.Option("--debug", help="Show the traceback of a failure.")]
Force = Annotated[bool, typer.Option("--force", help="Overwrite files of the same names. The input is never overwritten.")]
Quiet = Annotated[bool, typer.Option("--quiet", "-q", help="No progress bar and no summary; warnings still go to stderr.")]
Roles = Annotated[
    list[str] | None,
    typer.Option("--role", metavar="ROLE=LABEL", help="Which channel is who: --role cvp=P2 --role ecg='ECG II'.", show_default=False),
]
Units = Annotated[
    list[str] | None,
    typer.Option("--unit", metavar="LABEL=UNIT", help="Unit of a pressure channel whose header is silent or wrong.", show_default=False),
]


def main(argv: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code: 0, 2 for a usage error, 1 for any other failure.

    Parameters
    ----------
    argv : sequence of str, optional
        Arguments without the program's name; ``sys.argv[1:]`` by default.
    """
    words = list(sys.argv[1:] if argv is None else argv)
    from caval.errors import CavalError

    try:
        with _plain_warnings():
            app(args=words, prog_name="caval")
    except SystemExit as done:
        return done.code if isinstance(done.code, int) else int(done.code is not None)
    except (CavalError, OSError, MemoryError) as error:
        if "--debug" in words:
            raise
        return _fail(_message(error))
    except Exception as error:  # a defect of caval or of a plugin: one line, and the way to see more
        if "--debug" in words:
            raise
        return _fail(f"unexpected {type(error).__name__}: {_message(error)}; re-run with --debug to see where")
    return 0


def _message(error: BaseException) -> str:
    text = " ".join(str(error).split())
    return text or ("out of memory" if isinstance(error, MemoryError) else type(error).__name__)


def _fail(text: str) -> int:
    typer.echo(f"caval: {text}", err=True)
    return 1


def _warn(text: object) -> None:
    typer.echo(f"caval: warning: {' '.join(str(text).split())}", err=True)


@contextmanager
def _plain_warnings() -> Iterator[None]:
    """Python warnings as one line each, without file names."""
    with warnings.catch_warnings():
        warnings.showwarning = lambda message, *_args, **_kwargs: _warn(message)
        yield


def _show_version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"caval {caval.__version__}")
        raise typer.Exit


@app.callback(no_args_is_help=True)
def _root(
    version: Annotated[bool, typer.Option("--version", callback=_show_version, is_eager=True, help="Show the version and leave.")] = False,
) -> None:
    """Central venous pressure analysis: see the commands below."""


_root.__doc__ = app.info.help if isinstance(app.info.help, str) else None


@app.command(
    epilog=_epilog(
        "caval mark record.edf --out marked",
        "caval mark 100s --out marked --table csv --track wfdb,csv",
        "caval mark record.edf --out marked --role cvp=P2 --unit P2=cmH2O",
        "caval mark record.edf --out marked --beats record.qrs --start 600 --stop 1200",
        "caval mark record.edf --out marked --stage anchors=their-name --settings mine.toml",
    )
)
def mark(
    record: Record,
    out: Annotated[Path, typer.Option("--out", "-o", metavar="DIR", help="Folder for the files; made if missing.", show_default=False)],
    table: Annotated[Table, typer.Option(help="Kind of table.")] = Table.parquet,
    track: Annotated[
        list[str] | None,
        typer.Option(metavar="KIND,…", help="Annotation tracks: edf, wfdb, csv, bids; else the record's own format.", show_default=False),
    ] = None,
    beats: Annotated[
        Path | None, typer.Option(metavar="ANNOTATION", help="R times to use: a WFDB annotation, EDF+ or CSV file.", show_default=False)
    ] = None,
    role: Roles = None,
    unit: Units = None,
    start: Annotated[float, typer.Option(min=0.0, metavar="S", help="Begin here, seconds of the record.")] = 0.0,
    stop: Annotated[float | None, typer.Option(metavar="S", help="End here, seconds of the record.", show_default=False)] = None,
    stage: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME=IMPL", help="Another implementation of a stage; see caval stages.", show_default=False),
    ] = None,
    settings: Annotated[
        Path | None, typer.Option(metavar="FILE.toml", help="Settings of stages, one heading a stage: \\[waves] …", show_default=False)
    ] = None,
    workers: Annotated[int, typer.Option(min=1, metavar="N", help="Threads; the result does not depend on it.")] = 1,
    force: Force = False,
    quiet: Quiet = False,
    debug: Debug = False,
) -> None:
    """Mark a, c, x, v and y in every beat, and write tables, the annotation track and a figure.

    Beats come from the ECG and the arterial trace together. Stretches that carry no usable pressure are named, not marked; a wave
    that cannot be told is left out or called fused, never guessed.
    """
    if stop is not None and stop <= start:
        raise typer.BadParameter(f"{stop:g} s is not after --start {start:g} s", param_hint="--stop")
    roles, unit_of, choose = _roles(role), _units(unit), _pairs(stage, "--stage")
    tracks = _tracks(track)
    tuned = _settings(settings)
    from caval import api

    given = api.read_track(beats) if beats is not None else None
    with _progress(quiet) as progress:
        result = api.mark(
            record, roles=roles, units=unit_of, beats=given, start_s=start, stop_s=stop, choose=choose, settings=tuned, workers=workers,
            progress=progress,
        )
        if progress is not None:
            progress("files", 0.0)
        written = result.write(out, table=table.value, track=tracks, force=force)
        if progress is not None:
            progress("files", 1.0)
    _report(result, written, quiet=quiet)


@app.command(epilog=_epilog("caval look record.edf", "caval look 100s"))
def look(
    record: Record,
    role: Roles = None,
    unit: Units = None,
    quiet: Quiet = False,
    debug: Debug = False,
) -> None:
    """Show what a record holds: channels, rates, roles, gaps, value ranges, how much is usable, annotations."""
    from caval import api
    from caval._look import print_record

    recording = api.read(record)
    if not quiet:
        print_record(recording, roles=_roles(role), unit_of=_units(unit))


@app.command(epilog=_epilog("caval convert record.edf record.hea", "caval convert 100s.hea 100s.edf"))
def convert(
    source: Annotated[Path, typer.Argument(metavar="SRC", help="The record to read.", show_default=False)],
    target: Annotated[Path, typer.Argument(metavar="DST", help="The file to write; its ending says the format.", show_default=False)],
    force: Force = False,
    quiet: Quiet = False,
    debug: Debug = False,
) -> None:
    """Convert between formats by file ending: signals bit for bit, annotations included."""
    from caval import api

    written = api.convert(source, target, force=force)
    if not quiet:
        for path in written:
            typer.echo(str(path))


@app.command(
    epilog=_epilog(
        "caval simulate healthy healthy.edf",
        "caval simulate fibrillation af.hea --minutes 10 --seed 7",
        "caval simulate healthy fast.edf --set rhythm.heart_rate=120 --set line.damping=0.6 --set ra.e_rest=0.4",
        "caval simulate mine.toml mine.edf",
    )
)
def simulate(
    scenario: Annotated[str, typer.Argument(metavar="SCENARIO", help="A name, or a .toml file. A name that is none lists them.")],
    out: Annotated[Path, typer.Argument(metavar="OUT", help="The record to write: .edf, .bdf or .hea.")],
    minutes: Annotated[float | None, typer.Option(metavar="M", help="Length; the scenario's own by default.", show_default=False)] = None,
    seed: Annotated[int, typer.Option(metavar="N", min=0, help="The same seed gives the same record.")] = 1,
    set_: Annotated[
        list[str] | None, typer.Option("--set", metavar="KEY=VALUE", help="Change a value of the scenario.", show_default=False)
    ] = None,
    force: Force = False,
    quiet: Quiet = False,
    debug: Debug = False,
) -> None:
    """Simulate a patient whose every wave, volume and compliance is known; write the record, and the truth beside it.

    The record carries the truth as annotations (truth/a, truth/R, truth/flush …); OUT_truth_marks.csv, OUT_truth_beats.csv and
    OUT_truth_spans.csv hold it as tables, OUT_truth.json what was asked and the line's delay. The patient is a closed-loop model, no
    person.
    """
    settings = {name: _number(value) for name, value in _pairs(set_, "--set").items()}
    from caval.model.simulate import simulate as run

    with _progress(quiet) as progress:
        if progress is not None:
            progress("simulate", 0.0)
        made = run(scenario, minutes=minutes, seed=seed, settings=settings)
    written = made.write(out, force=force)
    if not quiet:
        typer.echo(f"{made.scenario.title or made.scenario.name}: {made.scenario.shows}")
        typer.echo("\n".join(str(path) for path in written))


@app.command(epilog=_epilog("caval demo", "caval demo --out elsewhere --minutes 3"))
def demo(
    out: Annotated[Path, typer.Option("--out", "-o", metavar="DIR", help="Folder for the record and what is found in it.")] = Path("demo"),
    minutes: Annotated[float | None, typer.Option(min=0.2, max=60.0, help="Length; 6 by default.", show_default=False)] = None,
    quiet: Quiet = False,
    debug: Debug = False,
) -> None:
    """Simulate a patient in theatre, write the record as EDF, mark it as `caval mark` would, and say what to look at."""
    from caval import api
    from caval.model.simulate import simulate as run

    record = out / "demo.edf"
    again = (out / _DEMO_NOTE).exists()
    with _progress(quiet) as progress:
        if progress is not None:
            progress("simulate", 0.0)
        run("theatre", minutes=minutes).write(record, force=again)
        result = api.mark(record, progress=progress)
        written = result.write(out, table="csv", force=again)
    (out / _DEMO_NOTE).write_text("Files called demo in this folder are made by `caval demo`, which overwrites them.\n", encoding="utf-8")
    _report(result, written, quiet=quiet)
    if not quiet:
        typer.echo(
            f"\nOpen {out / 'demo.png'}: ECG, venous and arterial pressure with every wave marked, the median beat, the trend.\n"
            "The patient is a model, no person. What happens, where the record is long enough: a flush at 45 s and the zeroing of the\n"
            f"line at 90 s, which carry no marks ({out / 'demo_spans.csv'} has what was seen of them); diathermy at 130 and 150 s,\n"
            "which costs no beat because the arterial trace shows it; fluid from 170 s; from 300 s on atrial fibrillation without a.\n"
            f"What is true of it stands in {out / 'demo_truth_marks.csv'}.\n"
            f"Next: caval look {record}, then caval mark YOUR_RECORD --out DIR"
        )


def _number(text: str) -> float | str:
    try:
        return float(text)
    except ValueError:
        return text


@app.command(epilog=_epilog("caval stages"))
def stages(quiet: Quiet = False, debug: Debug = False) -> None:
    """List the stages, detectors and formats that are installed, and which package each comes from."""
    from caval._look import print_installed

    if not quiet:
        print_installed()


def _report(result: Result, written: Sequence[Path], *, quiet: bool) -> None:
    """Summary to stdout, warnings to stderr."""
    for text in result.warnings:
        _warn(text)
    if not quiet:
        from caval._look import summary

        typer.echo(summary(result, written))


def _pairs(words: Sequence[str] | None, option: str) -> dict[str, str]:
    """``NAME=VALUE`` options as a mapping."""
    pairs: dict[str, str] = {}
    for word in words or ():
        name, sign, value = word.rpartition("=") if option == "--unit" else word.partition("=")
        if not (name.strip() and sign and value.strip()):
            raise typer.BadParameter(f"{word!r}: NAME=VALUE is needed", param_hint=option)
        if name.strip() in pairs:
            raise typer.BadParameter(f"{name.strip()!r} is given twice", param_hint=option)
        pairs[name.strip()] = value.strip()
    return pairs


def _roles(words: Sequence[str] | None) -> dict[str, str]:
    pairs = {name.lower(): label for name, label in _pairs(words, "--role").items()}
    if pairs:
        from caval.roles import ROLES

        for name in pairs:
            if name not in ROLES:
                raise typer.BadParameter(f"no role {name!r}; roles are: {', '.join(ROLES)}", param_hint="--role")
    return pairs


def _units(words: Sequence[str] | None) -> dict[str, str]:
    pairs = _pairs(words, "--unit")
    for unit in pairs.values():
        from caval.units import PRESSURE_UNITS, is_pressure_unit

        if not is_pressure_unit(unit):
            raise typer.BadParameter(f"{unit!r} is no pressure unit; allowed: {', '.join(PRESSURE_UNITS)}", param_hint="--unit")
    return pairs


def _tracks(words: Sequence[str] | None) -> list[str] | None:
    """Names of track formats, given with commas or one by one."""
    names = [name.strip() for word in words or () for name in word.split(",") if name.strip()]
    if not names:
        return None
    from caval import registry

    able = [name for name, item in registry.formats().items() if item.value.write_marked is not None]
    for name in names:
        if name not in able:
            raise typer.BadParameter(f"{name!r} holds no annotation track; allowed: {', '.join(able)}", param_hint="--track")
    return list(dict.fromkeys(names))


def _settings(path: Path | None) -> dict[str, dict[str, Any]]:
    """Settings of stages from a TOML file, a table a stage."""
    if path is None:
        return {}
    import tomllib

    from caval.errors import FileError, InputError

    try:
        content = tomllib.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise FileError(f"cannot read settings {path}: {error.strerror or error}") from error
    except ValueError as error:
        raise InputError(f"settings {path}: not a TOML file ({error})") from error
    for name, value in content.items():
        if not isinstance(value, dict):
            raise InputError(f"settings {path}: {name} = {value!r} stands outside a stage; write it under a heading such as [waves]")
    return content


@contextmanager
def _progress(quiet: bool) -> Iterator[Callable[[str, float], None] | None]:
    """A bar a stage on stderr when that is a terminal; else nothing."""
    if quiet or not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TaskID, TaskProgressColumn, TextColumn, TimeRemainingColumn

    columns = TextColumn("{task.description:<10}"), BarColumn(), TaskProgressColumn(), TimeRemainingColumn()
    with Progress(*columns, console=Console(stderr=True), transient=True) as bars:
        known: dict[str, TaskID] = {}

        def show(stage: str, share: float) -> None:
            if stage not in known:
                known[stage] = bars.add_task(stage, total=1.0)
            bars.update(known[stage], completed=share)

        yield show


if __name__ == "__main__":
    sys.exit(main())
