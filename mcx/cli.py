"""The command line: options to `mcx.api`, results to tables or JSON, trouble to exit codes.

0 done; 1 the answer is no; 2 the input or the request is wrong; 130 interrupted.
"""

from __future__ import annotations

import atexit
import gc
import json
import os
import re
import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING

import click
from click.shell_completion import CompletionItem

if TYPE_CHECKING:
    from mcx.report.results import Result
    from mcx.report.terminal import Page

NO, WRONG, INTERRUPTED = 1, 2, 130

MOVES = "-5%,-4%,-3%,-2%,-1%,0,1%,2%,3%,4%,5%"  # of a ladder or grid, where none are named

EXPONENT = re.compile(r"[+-]?[0-9]+(\.[0-9]*)?[eE][+-]?[0-9]{1,2}")


def _files(context: click.Context, parameter: click.Parameter, begun: str) -> list[CompletionItem]:
    """The shell completes names of files itself; without a word from us it would offer none."""
    return [CompletionItem(begun, type="file")]


def _methods(context: click.Context, parameter: click.Parameter, begun: str) -> list[CompletionItem]:
    """The methods of variance reduction, each after those that stand before it in the list."""
    from mcx.estimators.reduction.names import AUTO, NAMES, NONE

    listed, _, last = begun.rpartition(",")
    names = [name for name in NAMES if name not in listed.split(",")] if listed else (NONE, AUTO, *NAMES)
    return [CompletionItem(f"{listed},{name}" if listed else name) for name in names if name.startswith(last)]


def _definitions(context: click.Context, parameter: click.Parameter, begun: str) -> list[CompletionItem]:
    from mcx.checked.library import shipped_names

    return [CompletionItem(name) for name in shipped_names() if name.startswith(begun)]


REPORT = click.option("--report", type=click.Path(), help="Write a page of HTML to this file.")
PICTURE = click.option("--picture", type=click.Path(), metavar="FILE",
                       help="Draw the pictures of that page, as .png or .svg.")
FILES = click.argument("files", nargs=-1, required=True, metavar="FILES…", shell_complete=_files)
AS_JSON = click.option("--json", "as_json", is_flag=True, help="One JSON object, full precision.")
THREADS = click.option("--threads", type=int, help="Processors to use; changes no digit.  [all]")


class Whole(click.ParamType):
    """A whole number, in exponent form too: 1000000 or 1e6."""

    name = "integer"

    def convert(self, value: object, parameter: click.Parameter | None, context: click.Context | None) -> int:
        if EXPONENT.fullmatch(str(value)):
            from decimal import Decimal

            number = Decimal(value)
            value = int(number) if number == number.to_integral_value() else value
        return click.INT.convert(value, parameter, context)


def sampling(command: Callable) -> Callable:
    """The options that mean the same on every command that draws paths."""
    for option in (
        click.option("--reduction", default="none", metavar="A,B,…", shell_complete=_methods,
                     help="Variance reduction: none, or methods that 'mcx methods' lists; price also takes auto, "
                          "verify only none.  [none]"),
        THREADS,
        click.option("--seed", type=int, help="Seed of the random numbers.  [1]"),
        click.option("--seconds", type=float, help="As many paths as this time allows, by a pilot run."),
        click.option("--within", help="95 % half-width to reach, as 2bp; money per unit, as 0.01, for 'units'."),
        click.option("--paths", type=Whole(), help="Number of paths, as 1000000 or 1e6.  [1048576]"),
    ):
        command = option(command)
    return command


class ReaderGone(Exception):
    """Whoever read standard output has gone away."""


class Commands(click.Group):
    """Commands whose reader may go away, which is nobody's fault: click would answer 1, and that means 'no' here."""

    def parse_args(self, ctx: click.Context, args: list[str]) -> list[str]:
        with _reader():
            return super().parse_args(ctx, args)

    def invoke(self, ctx: click.Context) -> object:
        with _reader():
            return super().invoke(ctx)


@contextmanager
def _reader() -> Iterator[None]:
    try:
        yield
    except BrokenPipeError:
        raise ReaderGone from None


def _show_version(context: click.Context, _: click.Parameter, wanted: bool) -> None:
    if wanted and not context.resilient_parsing:
        from mcx import __version__

        click.echo(__version__)
        context.exit()


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option("--version", is_flag=True, is_eager=True, expose_value=False, callback=_show_version,
              help="Show the version and exit.")
def cli() -> None:
    """Independent values, with their errors, for structured notes and exotic options declared in YAML.

    FILES hold contracts, one market, and definitions of your own; '-' is standard input.
    """


@cli.command()
@FILES
@sampling
@AS_JSON
@click.option("--record", type=click.Path(), help="Write a valuation record to this new file.")
@REPORT
@PICTURE
def price(files: tuple[str, ...], as_json: bool, **wishes: object) -> None:
    """What is it worth? Value, error, legs, probabilities and checks."""
    from mcx import api

    with _progress() as (progress, notice):
        result = api.price(*files, progress=progress, notice=notice, **wishes)
    _show(result, as_json, _price_view)
    _end_if_interrupted(result, wishes["record"])


@cli.command()
@FILES
@click.option("--estimator", default="auto", help="auto, pathwise, likelihood or mixed.  [auto]")
@click.option("--bump", metavar="SIZE", help="Revalue as well, for comparison: 1% moves spots by 1 %, vols by a point.")
@click.option("--asset", "assets", multiple=True, help="Only this asset; may be given again.")
@click.option("--ladder", is_flag=True, help="Price and deltas as all spots move.")
@click.option("--grid", is_flag=True, help="The ladder, and the price as all spots and all vols move.")
@click.option("--spot-moves", metavar="A,B,…", help="Moves of the ladder or grid, as -10%,-5%,0,5%.  [-5% to 5%]")
@click.option("--vol-moves", metavar="A,B,…", help="Moves of the grid, in points.  [-5% to 5%]")
@sampling
@AS_JSON
@click.option("--record", type=click.Path(), help="Write a valuation record to this new file.")
@REPORT
@PICTURE
def greeks(files: tuple[str, ...], as_json: bool, ladder: bool, grid: bool, spot_moves: str | None,
           vol_moves: str | None, **wishes: object) -> None:
    """How does it move? Delta, gamma, vega, rho, theta and more, each with its error and its estimator."""
    from mcx import api

    if vol_moves is not None and not grid or spot_moves is not None and not (ladder or grid):
        raise click.UsageError("'--spot-moves' goes with '--ladder' or '--grid', '--vol-moves' with '--grid'")
    moves = {"spot_moves": (MOVES if spot_moves is None else spot_moves) if ladder or grid else (),
             "vol_moves": (MOVES if vol_moves is None else vol_moves) if grid else ()}
    with _progress() as (progress, notice):
        result = api.greeks(*files, progress=progress, notice=notice, **moves, **wishes)
    _show(result, as_json, _greeks_view)
    _end_if_interrupted(result, wishes["record"])


@cli.command()
@FILES
@click.option("--paths", type=int, help="Paths for each choice, in place of a time.")
@click.option("--seconds", type=float, help="Time for each choice.  [1]")
@click.option("--seed", type=int, help="Seed of the random numbers.  [1]")
@THREADS
@AS_JSON
@REPORT
@PICTURE
def methods(files: tuple[str, ...], as_json: bool, **wishes: object) -> None:
    """Which variance reduction pays? Every choice that applies, each for the same time."""
    from mcx import api

    with _progress() as (_, notice):
        result = api.methods(*files, notice=notice, **wishes)
    _show(result, as_json, _methods_view)
    _end_if_interrupted(result, None)


@cli.command()
@FILES
@click.option("--solve", default="", metavar="TERM", help="At which value of this term is it worth the quote?")
@click.option("--target", metavar="PRICE", help="Solve for this price instead: 99.5%, or money per unit.")
@sampling
@AS_JSON
@click.option("--record", type=click.Path(), help="Write a valuation record to this new file.")
@REPORT
@PICTURE
def verify(files: tuple[str, ...], as_json: bool, **wishes: object) -> None:
    """Can the dealer's quote be right? What would explain the gap?"""
    from mcx import api

    with _progress() as (progress, notice):
        result = api.verify(*files, progress=progress, notice=notice, **wishes)
    _show(result, as_json, _verify_view)
    _end_if_interrupted(result, wishes["record"])
    if not result.explained:
        sys.exit(NO)


@cli.command()
@FILES
@click.option("--path", type=click.Path(), help="Levels (YAML or CSV) to run through the contract.")
@click.option("--calendar", is_flag=True, help="Fixings, decisions and payments to come, of all contracts.")
@AS_JSON
def readback(files: tuple[str, ...], path: str | None, calendar: bool, as_json: bool) -> None:
    """What does the contract say? Plain sentences, and every date."""
    from mcx import api

    _show(api.readback(*files, path=path, calendar=calendar), as_json, _calendar_view if calendar else _readback_view)


@cli.command()
@click.argument("name", required=False, shell_complete=_definitions)
@click.option("--blank", is_flag=True, help="Contract, market and quote to fill in.")
@click.option("--assets", metavar="A,B", help="The assets to write into them.")
@click.option("--schema", is_flag=True, help="JSON schema for editors: contracts on NAME, or on any definition.")
@AS_JSON
def payoffs(name: str | None, blank: bool, assets: str | None, schema: bool, as_json: bool) -> None:
    """Which definitions are there? NAME prints one in full."""
    from mcx import api

    if blank != (assets is not None) or (blank and name is None):
        raise click.UsageError("a blank needs all three: 'mcx payoffs NAME --blank --assets a,b'")
    if blank and schema:
        raise click.UsageError("'--blank' and '--schema' are two answers; ask for one at a time")
    if schema:
        click.echo(json.dumps(api.schema(name), indent=2, ensure_ascii=False))
    elif blank:
        text = api.blank(name, [asset.strip() for asset in assets.split(",")])
        click.echo(json.dumps({"blank": text}, indent=2, ensure_ascii=False) if as_json else text, nl=as_json)
    elif name:
        found = api.definition(name)
        click.echo(_as_json(found) if as_json else found.text, nl=as_json)
    else:
        _show(api.payoffs(), as_json, _library_view)


@cli.command()
@click.argument("file", type=click.Path())
@THREADS
@AS_JSON
def replay(file: str, threads: int | None, as_json: bool) -> None:
    """Does a stored valuation reproduce?"""
    from mcx import api

    with _progress() as (progress, notice):
        result = api.replay(file, threads=threads, progress=progress, notice=notice)
    _show(result, as_json, _replay_view)
    if not result.identical:
        sys.exit(NO)


def main(arguments: list[str] | None = None) -> None:
    """The door: runs a command and ends the process with its exit code."""
    from mcx.faults import InputError, Refusal, RequestError

    # What imports make stays until the process ends. Looking through it for garbage, on the way and once more before
    # the end, would take a quarter of a short command's time.
    gc.set_threshold(1_000_000)
    atexit.register(gc.freeze)
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):
            stream.reconfigure(errors="replace")  # a terminal without '±' is no reason to fail
    try:
        cli.main(arguments, prog_name="mcx", standalone_mode=False)
    except (InputError, RequestError, Refusal) as trouble:
        _complain(str(trouble))
        sys.exit(WRONG)
    except click.ClickException as trouble:
        context, said = getattr(trouble, "ctx", None), trouble.format_message().rstrip(".")
        hint = f" (see '{context.command_path} --help')" if context and "\n" not in said else ""  # many lines: the help
        _complain(f"{said}{hint}")
        sys.exit(WRONG)
    except (KeyboardInterrupt, click.Abort):
        _complain("interrupted before there was an estimate")
        sys.exit(INTERRUPTED)
    except ReaderGone:  # it has read what it wanted
        _stop_writing()
        sys.exit(0)
    except OSError as trouble:  # every file that is read has its own sentence by now
        _stop_writing()
        _complain(f"the answer cannot be written: {trouble.strerror or trouble}")
        sys.exit(WRONG)


def _stop_writing() -> None:
    """What is still waiting for standard output goes nowhere, so that the end of the process cannot fail on it."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _end_if_interrupted(result: Result, record: str | None) -> None:
    if result.interrupted:
        if record:
            _complain("interrupted: no record was written")
        sys.exit(INTERRUPTED)


def _complain(text: str) -> None:
    click.echo(text, err=True)


def _tell_in_a_pipe(text: str) -> None:
    """Half a minute of compiling is not worth a line there."""
    from mcx.machine.run import COMPILING

    if text != COMPILING:
        _complain(text)


def _as_json(result: Result) -> str:
    return json.dumps(result.to_dict(), indent=2, ensure_ascii=False, allow_nan=False)


def _show(result: Result, as_json: bool, view: Callable[[Result, Page], None]) -> None:
    """A result as JSON, or by its view on a page."""
    if as_json:
        click.echo(_as_json(result))
        return
    from mcx.report.terminal import Page

    page = Page()
    view(result, page)
    page.write()


def _price_view(result: Result, page: Page) -> None:
    from mcx.report.price_view import show_price, show_prices
    from mcx.report.results import PriceTable

    (show_prices if isinstance(result, PriceTable) else show_price)(result, page)


def _greeks_view(result: Result, page: Page) -> None:
    from mcx.report.greek_results import GreeksTable
    from mcx.report.greek_view import show_greeks

    several = isinstance(result, GreeksTable)
    for number, each in enumerate(result.contracts if several else (result,)):
        if number:
            page.line()
        show_greeks(each, page)
    if several and result.not_valued:
        page.line()
        page.line(f"interrupted: not valued are {', '.join(result.not_valued)}", style="bold")


def _verify_view(result: Result, page: Page) -> None:
    from mcx.report.verify_results import VerifyTable
    from mcx.report.verify_view import show_verification, show_verifications

    (show_verifications if isinstance(result, VerifyTable) else show_verification)(result, page)


def _methods_view(result: Result, page: Page) -> None:
    from mcx.report.method_results import MethodsTable
    from mcx.report.method_view import show_methods

    several = isinstance(result, MethodsTable)
    for number, each in enumerate(result.contracts if several else (result,)):
        if number:
            page.line()
        show_methods(each, page)
    if several and result.not_compared:
        page.line()
        page.line(f"interrupted: not compared are {', '.join(result.not_compared)}", style="bold")


def _readback_view(result: Result, page: Page) -> None:
    from mcx.report.readback_view import show_readback
    from mcx.report.results import ReadbackTable

    for number, each in enumerate(result.readbacks if isinstance(result, ReadbackTable) else (result,)):
        if number:
            page.line()
        show_readback(each, page)


def _calendar_view(result: Result, page: Page) -> None:
    from mcx.report.readback_view import show_calendar

    show_calendar(result, page)


def _library_view(result: Result, page: Page) -> None:
    from mcx.report.readback_view import show_library

    show_library(result, page)


def _replay_view(result: Result, page: Page) -> None:
    from mcx.report.readback_view import show_replay

    show_replay(result, page)


@contextmanager
def _progress() -> Iterator[tuple[Callable | None, Callable | None]]:
    """Callbacks that show progress on a terminal; in a pipe no more than what takes very long is told."""
    if not sys.stderr.isatty():
        yield None, _tell_in_a_pipe
        return
    from mcx.report.progress import Bar

    with Bar() as bar:
        yield bar.progress, bar.notice
