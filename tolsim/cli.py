"""The command line: read what is asked, call one function, print, set the exit code.

Everything heavy is imported inside the verbs, so that `tolsim --help` answers at once.
"""

from __future__ import annotations

import warnings
from pathlib import Path
from typing import Any

import click

from tolsim import __version__
from tolsim.errors import RequestError, RunError, StudyError, TolsimError, nearest_name
from tolsim.library import find_study, shipped_studies

_WRONG_PLACE = (PermissionError, NotADirectoryError, IsADirectoryError, FileNotFoundError)
_PLAINEST = "tip-heater"  # of the shipped studies: one transistor, starts by itself
_CAUTIONS = """
A self-oscillating stage of some tens of watts makes kilovolts at radio frequency: burns
that go deep, shocks, and near lamps and discharges ultraviolet light and ozone.  Results
are estimates from models; they never replace measurement, guards and interlocks.  Follow
your local codes, and leave mains, high voltage and radio licensing to those who hold the
licence.
"""
_EXIT_CODES = """
Exit codes: 0 all right; 1 the run could not be finished; 2 the request or a file is wrong
(every mistake is listed, nothing is written).
"""


class _Told(click.ClickException):
    """A mistake of the user on its way to the terminal, without traceback."""

    exit_code = 2


class _NotFinished(click.ClickException):
    """A run that could not be finished."""

    exit_code = 1


def _trouble(error: OSError) -> str:
    """What the system says about which file."""
    where = "" if error.filename is None else f"'{error.filename}': "
    return f"{where}{error.strerror or error}."


class _Verbs(click.Group):
    """Group that turns errors of ours into messages and exit codes."""

    def invoke(self, ctx: click.Context) -> Any:  # noqa: ANN401 - as click declares it
        """Call the verb."""
        try:
            return super().invoke(ctx)
        except RunError as error:
            raise _NotFinished(str(error)) from error
        except TolsimError as error:
            raise _Told(str(error)) from error
        except _WRONG_PLACE as error:
            raise _Told(_trouble(error)) from error
        except OSError as error:  # a full disk, a drive that went away
            raise _NotFinished(_trouble(error)) from error

    def format_epilog(self, ctx: click.Context, formatter: click.HelpFormatter) -> None:
        """Write cautions and exit codes under the list of verbs."""
        del ctx
        for text in (_CAUTIONS, _EXIT_CODES):
            formatter.write_paragraph()
            formatter.write_text(" ".join(text.split()))


_tables_option = click.option(
    "--tables",
    "tables_dir",
    metavar="DIR",
    type=click.Path(exists=True, file_okay=False, path_type=Path),
    help="Folder of your own spread tables; they go before shipped ones of the same name.",
)


@click.group(cls=_Verbs, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="tolsim")
def main() -> None:
    """How many of the oscillators you build from real parts will work, and what strains them."""


@main.command()
@click.argument("study")
@_tables_option
@click.option("--files-only", is_flag=True, help="Only check the files, solve nothing.")
def check(study: str, tables_dir: Path | None, *, files_only: bool) -> None:
    """Check STUDY: list every mistake, or show its nominal unit.

    STUDY is a TOML file or the name of a shipped study.
    """
    from tolsim.study import open_study
    from tolsim.terminal import console, show_operating_point, show_study

    opened = open_study(find_study(study), tables_dir)
    show_study(opened)
    if files_only:
        return
    from tolsim.nominals import prepare

    with console(stderr=True).status("Solving the nominal unit ..."):
        cases = prepare(opened.study, opened.tables, jobs=None)
    figures = {name: case.figures for name, case in cases.items()}
    show_operating_point(opened.study, figures)


@main.command()
@click.argument("study")
@click.option(
    "--units", type=click.IntRange(1, 10_000_000), help="Units to build; else as STUDY says."
)
@click.option("--seed", type=click.IntRange(0), help="Seed of chance; else as STUDY says.")
@click.option("--jobs", type=click.IntRange(1), help="Processor cores to use; else all of them.")
@click.option(
    "--out",
    metavar="DIR",
    type=click.Path(file_okay=False, path_type=Path),
    help="Results folder; else results/NAME for NAME.toml.",
)
@_tables_option
@click.option(
    "--law-check/--no-law-check",
    default=None,
    help="Estimate the yield under other laws; else if tolerances rest on guesses.",
)
def run(
    study: str,
    units: int | None,
    seed: int | None,
    jobs: int | None,
    out: Path | None,
    tables_dir: Path | None,
    *,
    law_check: bool | None,
) -> None:
    """Build and judge the units of STUDY; write results and report.

    STUDY is a TOML file or the name of a shipped study.
    """
    from tolsim.run import run_study
    from tolsim.study import open_study
    from tolsim.terminal import progress, show_summary, tell, warn_of

    path = find_study(study)
    opened = open_study(path, tables_dir)
    warn_of(opened.warnings)
    folder = out or Path("results") / path.stem
    if folder.is_file():
        raise RequestError(f"'{folder}' is a file. Name another folder with --out.")
    cases = len(opened.study.states) * len(opened.study.conditions)
    tell(f"Finding the nominal orbit of {cases} case{'' if cases == 1 else 's'} ...")
    warnings.filterwarnings("ignore", "[0-9]+ tasks which were still being processed")
    try:
        with progress() as step:
            results = run_study(
                opened,
                units=units,
                seed=seed,
                jobs=jobs,
                out=folder,
                progress=step,
                law_check=law_check,
            )
    except KeyboardInterrupt:
        told = f"stopped. '{folder}' keeps what is finished; the same command goes on from there."
        raise RunError(told) from None
    show_summary(results.summary, folder)


@main.command("start-map")
@click.argument("study")
@click.option("--units", type=click.IntRange(1, 10_000), help="Units to switch on.")
@click.option("--seed", type=click.IntRange(0), help="Seed of chance; else as STUDY says.")
@click.option("--jobs", type=click.IntRange(1), help="Processor cores to use; else all of them.")
@click.option(
    "--out",
    metavar="DIR",
    type=click.Path(file_okay=False, path_type=Path),
    help="Write the answers (starts.json) and the map (start-map.svg) there too.",
)
@_tables_option
def start_map(
    study: str,
    units: int | None,
    seed: int | None,
    jobs: int | None,
    out: Path | None,
    tables_dir: Path | None,
) -> None:
    """Switch units of STUDY on over ramp time, ambient or supply.

    STUDY is a TOML file or the name of a shipped study; its tables [start_map],
    [supply_contract] and [repeated_starts] say what is asked.
    """
    from tolsim.starts.answers import map_starts
    from tolsim.study import open_study
    from tolsim.terminal import progress, show_starts, warn_of

    opened = open_study(find_study(study), tables_dir)
    warn_of(opened.warnings)
    with progress("done") as step:
        found = map_starts(opened, units=units, seed=seed, jobs=jobs, progress=step)
    show_starts(found)
    if out is not None:
        from tolsim.report.start_section import write_starts

        click.echo(f"Written: {', '.join(str(path) for path in write_starts(found, out))}")


@main.command()
@click.argument("results", type=click.Path(exists=True, file_okay=False, path_type=Path))
@click.argument("number", metavar="UNIT", type=click.IntRange(0))
def unit(results: Path, number: int) -> None:
    """Solve one unit again: waveforms, and why it failed.

    RESULTS is the folder that `tolsim run` wrote, UNIT the number of the unit.
    """
    from tolsim.replay import draw_power_on, draw_replay, replay_unit, story_text

    replay = replay_unit(results, number)
    click.echo(story_text(replay))
    picture = draw_replay(replay, results)
    if picture is not None:
        click.echo(f"Waveforms: {picture}")
    for drawn in draw_power_on(replay, results):
        click.echo(f"Power-on: {drawn}")


@main.command()
@click.argument("name", required=False)
@_tables_option
@click.option(
    "--picture",
    metavar="FILE",
    type=click.Path(dir_okay=False, path_type=Path),
    help="Draw the table NAME to an SVG or PNG file too.",
)
def tables(name: str | None, tables_dir: Path | None, picture: Path | None) -> None:
    """List the spread tables, or show all about one.

    NAME is a table of the list.
    """
    from tolsim.spread.reading import read_shelf
    from tolsim.table_screen import draw, show_table, show_tables
    from tolsim.terminal import warn_of

    shelf = read_shelf(None, tables_dir)
    if name is None:
        if picture is not None:
            raise RequestError("Name the table to draw: tolsim tables NAME --picture FILE.")
        show_tables(shelf.tables)
        warn_of([problem.sentence() for problem in shelf.problems()])
    elif name in shelf.broken:
        raise StudyError(shelf.problems([name]))
    elif name in shelf.tables:
        show_table(shelf.tables[name])
        if picture is not None:
            draw(shelf.tables[name], picture)
            click.echo(f"Picture: {picture}")
    else:
        raise _unknown("spread table", name, list(shelf.tables))


@main.command()
@click.argument("file", type=click.Path(dir_okay=False, path_type=Path))
@click.option(
    "--from",
    "name",
    metavar="NAME",
    default=_PLAINEST,
    show_default=True,
    help=f"Shipped study to start from: {', '.join(shipped_studies())}.",
)
def new(file: Path, name: str) -> None:
    """Write a commented study to FILE, to be changed into your own."""
    shipped = shipped_studies()
    if name not in shipped:
        raise _unknown("shipped study", name, list(shipped))
    source = shipped[name]
    try:
        with file.open("xb") as target:
            target.write(source.read_bytes())
    except FileExistsError:
        raise RequestError(f"'{file}' exists already. Choose another name.") from None
    except OSError as error:
        raise RequestError(f"'{file}' cannot be written: {error.strerror}.") from None
    click.echo(f"{file} written, from the shipped study {name}. Next: tolsim check {_typed(file)}")


def _typed(path: Path) -> str:
    """Path as it is typed: in quotes if it has blanks."""
    return f'"{path}"' if " " in str(path) else str(path)


def _unknown(what: str, name: str, valid: list[str]) -> RequestError:
    near = nearest_name(name, valid)
    hint = f"Did you mean {near}?" if near else f"Known: {', '.join(valid)}."
    return RequestError(f"There is no {what} '{name}'. {hint}")
