"""The command line: parse, call, print. The only place with exit codes.

0 done; 1 the program could not do it; 2 the workbook or the command line needs fixing. Heavy
imports are local to commands, so that help appears at once.
"""

from __future__ import annotations

import os
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Annotated

import typer
from rich.console import Console
from rich.markup import escape

from planner.diagnostics import Diagnostic, InputError, PlannerError

app = typer.Typer(
    name="planner",
    help="Retirement drawdown plans from a client workbook.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

ClientWorkbook = Annotated[Path, typer.Argument(metavar="CLIENT.xlsx", help="The client workbook.")]


def print_problem(problem: Diagnostic, console: Console) -> None:
    """Print one problem on a line of its own: severity, place, message, code."""
    colour = "red" if problem.severity == "error" else "yellow"
    console.print(
        f"[{colour}]{problem.severity}[/] {escape(problem.where)}: {escape(problem.message)} "
        f"[dim]({escape(problem.code)})[/]",
        soft_wrap=True,
    )


@contextmanager
def reporting_errors() -> Iterator[None]:
    """Print what went wrong on stderr and choose the exit code; never a traceback.

    The environment variable PLANNER_TRACEBACK lets an unforeseen exception through, for
    developers.
    """
    console = Console(stderr=True, highlight=False)
    try:
        yield
    except InputError as error:
        for problem in error.diagnostics:
            print_problem(problem, console)
        raise typer.Exit(2) from None
    except PlannerError as error:
        console.print(f"[red]error[/] {escape(str(error))}", soft_wrap=True)
        raise typer.Exit(1) from None
    except BrokenPipeError:
        raise
    except FileNotFoundError as error:
        console.print(f"[red]error[/] {escape(str(error.filename))}: no such file", soft_wrap=True)
        raise typer.Exit(1) from None
    except OSError as error:
        place = f"{error.filename}: " if error.filename else ""
        reason = error.strerror or type(error).__name__
        console.print(f"[red]error[/] {escape(place)}{escape(reason.lower())}", soft_wrap=True)
        raise typer.Exit(1) from None
    except (typer.Exit, typer.Abort):
        raise
    except Exception as error:
        if os.environ.get("PLANNER_TRACEBACK"):
            raise
        what = f"{type(error).__name__}: {error}"
        console.print(f"[red]error[/] the program failed ({escape(what)}); please report it", soft_wrap=True)
        raise typer.Exit(1) from None


@app.command()
def new(client: ClientWorkbook) -> None:
    """Write a blank client workbook, with a guide sheet and drop-down lists."""
    with reporting_errors():
        from planner.workbook.writing import write_blank

        if client.suffix.casefold() != ".xlsx":
            message = f"expected a name ending in .xlsx, such as {client.stem or 'client'}.xlsx"
            raise InputError([Diagnostic("file-not-xlsx", str(client), message)])
        write_blank(client)
        typer.echo(f"{client} written; its first sheet says how to fill it in")


@app.command()
def check(
    client: ClientWorkbook,
    as_json: Annotated[bool, typer.Option("--json", help="Print for other programs.")] = False,
) -> None:
    """Read and validate a client workbook: household summary, or every problem with its cell."""
    with reporting_errors():
        import json

        from planner.workbook.reading import read_workbook
        from planner.workbook.summary import as_records, show, summarise

        try:
            read = read_workbook(client)
        except InputError as error:
            if as_json:
                record = {"ok": False, "diagnostics": as_records(error.diagnostics)}
                typer.echo(json.dumps(record, indent=2, ensure_ascii=False))
            raise
        if as_json:
            record = {"ok": True} | summarise(read) | {"diagnostics": as_records(read.warnings)}
            typer.echo(json.dumps(record, indent=2, ensure_ascii=False))
        else:
            console = Console(highlight=False)
            show(read, Console(highlight=False, width=80) if not console.is_terminal else console)


def main() -> None:
    """Run the command line."""
    app()


if __name__ == "__main__":
    main()
