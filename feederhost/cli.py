"""The command line: parse, call one study function, write, exit code.

Nothing heavy is imported until a command needs it, so that ``--help`` answers at once.
"""

from __future__ import annotations

import functools
import sys
import traceback
from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from feederhost import __version__
from feederhost.errors import FeederhostError, InputError, OutputError, fatal
from feederhost.terminal import ProgressLine, as_json, check_lines, host_lines, screen_lines

if TYPE_CHECKING:
    from feederhost.study.reports import Report

_SETTINGS = {"help_option_names": ["-h", "--help"], "max_content_width": 88}
_FEEDER = click.Path(path_type=Path)


def _guarded(command: Callable[..., int | None]) -> Callable[..., None]:
    """Turn this package's errors into their exit codes, one line each, without a traceback."""

    @functools.wraps(command)
    def run(*args: Any, debug: bool, **kwargs: Any) -> None:
        try:
            code = command(*args, **kwargs)
        except InputError as error:
            for finding in fatal(error.findings):
                click.echo(finding.line(), err=True)
            _fail(error, debug)
        except BrokenPipeError:
            raise  # whoever read the output has gone; click ends quietly
        except (FeederhostError, OSError, MemoryError) as error:
            _fail(error, debug)
        except Exception as error:
            click.echo("this is a fault of the program, not of the feeder:", err=True)
            _fail(error, debug)
        else:
            sys.exit(code or 0)

    return click.option("--debug", is_flag=True, help="Show the traceback of an error.")(run)


def _fail(error: BaseException, debug: bool) -> None:
    if debug:
        click.echo("".join(traceback.format_exception(error)), err=True, nl=False)
    text = str(error) or type(error).__name__
    click.echo(f"feederhost: {' '.join(text.split())}", err=True)
    sys.exit(getattr(error, "exit_code", 1))


def _output_options(command: Callable[..., Any]) -> Callable[..., Any]:
    for option in (
        click.option("--json", "json_out", is_flag=True, help="Print the answer as JSON."),
        click.option("-q", "--quiet", is_flag=True, help="Print no summary on standard output."),
        click.option("--csv", "as_csv", is_flag=True,
                     help="Write the output as a folder of csv files."),
    ):  # fmt: skip
        command = option(command)
    return command


@click.group(context_settings=_SETTINGS)
@click.version_option(__version__, prog_name="feederhost")
def main() -> None:
    """Find how much PV and EV charging each node of a radial feeder can host, with proof.

    FEEDER is one .xlsx workbook, or one folder with the same sheets as .csv files.
    """


@main.command()
@click.argument("feeder", type=_FEEDER)
@_guarded
def blank(feeder: Path) -> None:
    """Write an empty, guided input workbook to FEEDER (.xlsx)."""
    from feederhost.sheets.template import write_blank

    if feeder.exists():
        raise OutputError(f"{feeder} is there already; name a new file")
    if feeder.suffix.lower() != ".xlsx":
        raise OutputError(f"{feeder} must end in .xlsx")
    write_blank(feeder)
    click.echo(f"{feeder}: fill in `source` and `lines` first, then `loads`")


@main.command()
@click.argument("feeder", type=_FEEDER)
@click.option("-o", "--output", type=_FEEDER, help="Write audit, base cases and conditions here.")
@_output_options
@_guarded
def check(feeder: Path, output: Path | None, json_out: bool, quiet: bool, as_csv: bool) -> int:
    """Audit the data of FEEDER and solve its base cases.

    Exit code 0: no fatal finding. 3: fatal findings, or a base case without solution.
    """
    from feederhost.study.options import Options
    from feederhost.study.reports import check_report

    return _run(check_report, check_lines, feeder, output, Options, json_out, quiet, as_csv)


@main.command()
@click.argument("feeder", type=_FEEDER)
@click.option("-o", "--output", type=_FEEDER, required=True, help="Result workbook to write.")
@click.option("--node", "nodes", multiple=True, help="Only this node (may be repeated).")
@click.option(
    "--technology",
    "technologies",
    multiple=True,
    help="Only this technology, also one without candidates (may be repeated).",
)
@click.option("--case", "cases", multiple=True, help="Only this case (may be repeated).")
@click.option(
    "--solver",
    type=click.Choice(["ecos", "clarabel"]),
    default=None,
    help="Conic solver to hold the proof against.",
)
@click.option(
    "--plain",
    is_flag=True,
    help="Solve the plain programme for every row, to show why it is not used.",
)
@_output_options
@_guarded
def host(
    feeder: Path,
    output: Path,
    nodes: tuple[str, ...],
    technologies: tuple[str, ...],
    cases: tuple[str, ...],
    solver: str | None,
    plain: bool,
    json_out: bool,
    quiet: bool,
    as_csv: bool,
) -> int:
    """Find and prove the largest PV and EV rating that fits at every node of FEEDER.

    Exit code 0: every row is proven, or capped without need of proof. 4: some row is not; the
    result is written all the same. 3: fatal findings, nothing but their audit is written.
    """
    from feederhost.study.options import Options
    from feederhost.study.reports import host_report

    make = functools.partial(
        Options,
        nodes=nodes,
        technologies=technologies,
        cases=cases,
        solver=solver or "",
        plain=plain,
    )
    return _run(host_report, host_lines, feeder, output, make, json_out, quiet, as_csv)


@main.command()
@click.argument("feeder", type=_FEEDER)
@click.option("-o", "--output", type=_FEEDER, required=True, help="Result workbook to write.")
@click.option(
    "--reserve",
    type=click.Choice(["fitting", "asked", "none"]),
    default="fitting",
    show_default=True,
    help="Size at which earlier requests stand in place.",
)
@click.option("--independent", is_flag=True, help="Judge each request alone (--reserve none).")
@click.option(
    "--remedies/--no-remedies",
    default=True,
    show_default=True,
    help="Look for what would make a request fit.",
)
@click.option("--letters", type=_FEEDER, help="Folder for one plain-text draft per request.")
@click.option("--resume", is_flag=True, help="Take up an interrupted run of the same input.")
@click.option(
    "--solver",
    type=click.Choice(["ecos", "clarabel"]),
    default=None,
    help="Conic solver to hold the proof against.",
)
@_output_options
@_guarded
def screen(
    feeder: Path,
    output: Path,
    reserve: str,
    independent: bool,
    remedies: bool,
    letters: Path | None,
    resume: bool,
    solver: str | None,
    json_out: bool,
    quiet: bool,
    as_csv: bool,
) -> int:
    """Answer every connection request of FEEDER in order, with number and reason.

    Exit code 0: every answer is proven or needs no proof. 4: some answer is not, or has a data
    fault; the result is written all the same. 3: fatal findings outside the requests.
    """
    from feederhost.study.options import Options
    from feederhost.study.queue.journal import journal_of
    from feederhost.study.queue.report import screen_report, write_letters

    make = functools.partial(
        Options,
        reserve="none" if independent else reserve,
        remedies=remedies,
        resume=resume,
        solver=solver or "",
    )
    report_of = functools.partial(screen_report, journal=journal_of(output))
    code = _run(
        report_of,
        screen_lines,
        feeder,
        output,
        make,
        json_out,
        quiet,
        as_csv,
        lambda report: write_letters(report, letters),
    )
    journal_of(output).unlink(missing_ok=True)
    return code


def _run(
    report_of: Callable[..., Report], lines_of: Callable[[dict[str, Any]], list[str]],
    feeder: Path, output: Path | None, make_options: Callable[..., Any], json_out: bool,
    quiet: bool, as_csv: bool, afterwards: Callable[[Report], None] = lambda _: None,
) -> int:  # fmt: skip
    """Run one report: progress, output file, terminal; fatal findings leave their audit only."""
    from feederhost.sheets.writing import write_result

    if output is not None:
        _refuse(feeder, output, as_csv)
    elif as_csv:
        raise click.UsageError("--csv needs an output: -o FOLDER")
    try:
        with ProgressLine(quiet) as progress:
            report = report_of(feeder, make_options(progress=progress))
    except InputError as error:
        if output is not None and error.findings:
            from feederhost.study.results import audit_table

            write_result({"audit": audit_table(error.findings)}, output, as_csv=as_csv)
        raise
    if output is not None:
        write_result(report.tables, output, as_csv=as_csv)
    afterwards(report)
    if json_out:
        click.echo(as_json(report.overview | {"exit_code": report.exit_code}))
    elif not quiet:
        for line in lines_of(report.overview):
            click.echo(line)
        if output is not None:
            click.echo(f"written: {output}")
    return report.exit_code


def _refuse(feeder: Path, output: Path, as_csv: bool) -> None:
    """Refuse, before anything is computed, an output that would spoil the input or cannot be."""
    own, source = output.resolve(), feeder.resolve()
    if own == source:
        raise OutputError(f"the output {output} is the input itself; name another file")
    if source in own.parents:
        raise OutputError(f"the output {output} lies in the input folder; name another place")
    if not own.parent.is_dir():
        raise OutputError(f"cannot write {output}: there is no folder {own.parent.name}")
    if not as_csv and output.suffix.lower() != ".xlsx":
        raise OutputError(f"cannot write {output}: it must end in .xlsx (--csv writes a folder)")
