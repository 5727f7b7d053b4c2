"""The command line: parse, call, print. The only place with exit codes.

0 done; 1 the program could not do it; 2 the workbook or the command line needs fixing. Heavy
imports are local to commands, so that help appears at once.
"""

from __future__ import annotations

import _thread
import os
import signal
import sys
import threading
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any, TypeVar

import typer
from rich.console import Console
from rich.markup import escape

from planner.diagnostics import Diagnostic, InputError, PlannerError
from planner.memory import keep_freed_memory

if TYPE_CHECKING:
    from planner.commands.answers import Answer
    from planner.plan import PlanSettings

app = typer.Typer(
    name="planner",
    help="Retirement drawdown plans from a client workbook.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)

# readable=False: typer would call a file that may not be read a mistake in the command line.
ClientWorkbook = Annotated[
    Path, typer.Argument(metavar="CLIENT.xlsx", readable=False, help="The client workbook.")
]
Futures = Annotated[int | None, typer.Option(min=100, help="Futures to test (default 20,000).")]
Seed = Annotated[int | None, typer.Option(min=0, help="Seed of the drawn futures; same seed, same plan.")]

PASSWORD_VARIABLE = "PLANNER_PDF_PASSWORD"
SNAPSHOT_FUTURES = 5_000
Result = TypeVar("Result")


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
    before, before_ignored = signal.getsignal(signal.SIGTERM), sys.unraisablehook
    try:
        # Being asked to end is an interrupt, so that no temporary file is left behind.
        signal.signal(signal.SIGTERM, signal.default_int_handler)
        sys.unraisablehook = _interrupt_again(before_ignored)
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
    except KeyboardInterrupt:
        console.print("interrupted; nothing half-written is left behind")
        raise typer.Exit(130) from None
    except FileNotFoundError as error:
        console.print(f"[red]error[/] {escape(str(error.filename))}: no such file", soft_wrap=True)
        raise typer.Exit(1) from None
    except PermissionError as error:
        why = "permission denied; is it open in another program, or not yours to read or write?"
        console.print(f"[red]error[/] {escape(str(error.filename))}: {why}", soft_wrap=True)
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
        what = f"{type(error).__name__} at {_place_of(error)}"
        console.print(f"[red]error[/] the program failed ({escape(what)}); please report it", soft_wrap=True)
        raise typer.Exit(1) from None
    finally:
        sys.unraisablehook = before_ignored
        signal.signal(signal.SIGTERM, before)


def _interrupt_again(otherwise: Callable[[sys.UnraisableHookArgs], object]) -> Callable[[Any], object]:
    """Return a hook for exceptions that Python drops: an interrupt among them comes once more.

    One that arrives inside a finaliser or the like (importing has some) would be printed with its
    traceback and the program go on.
    """

    def hook(dropped: sys.UnraisableHookArgs) -> object:
        if dropped.exc_type is not KeyboardInterrupt:
            return otherwise(dropped)
        timer = threading.Timer(0.02, _thread.interrupt_main, (signal.SIGTERM,))
        timer.daemon = True
        timer.start()
        return None

    return hook


def _place_of(error: Exception) -> str:
    """File and line of this program that an exception comes from; its text may hold client data."""
    import traceback

    here = str(Path(__file__).parent)
    frames = [f for f in traceback.extract_tb(error.__traceback__) if f.filename.startswith(here)]
    return f"{Path(frames[-1].filename).name}:{frames[-1].lineno}" if frames else "an unknown place"


@app.command()
def new(
    client: ClientWorkbook,
    as_json: Annotated[bool, typer.Option("--json", help="Print for other programs.")] = False,
) -> None:
    """Write a blank client workbook, with a guide sheet and drop-down lists."""
    with reporting_errors():
        from planner.workbook.writing import write_blank

        if client.suffix.casefold() != ".xlsx":
            message = f"expected a name ending in .xlsx, such as {client.stem or 'client'}.xlsx"
            raise InputError([Diagnostic("file-not-xlsx", str(client), message)])
        write_blank(client)
        if as_json:
            import json

            typer.echo(json.dumps({"written": str(client)}, ensure_ascii=False))
        else:
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


@app.command()
def plan(
    client: ClientWorkbook,
    output: Annotated[
        Path | None,
        typer.Option(
            "-o",
            "--output",
            metavar="PLAN.pdf",
            readable=False,
            help="Default: CLIENT.pdf in the current folder.",
        ),
    ] = None,
    workbook: Annotated[
        Path | None,
        typer.Option(metavar="RESULTS.xlsx", readable=False, help="Also write a results workbook."),
    ] = None,
    as_json: Annotated[
        Path | None,
        typer.Option(
            "--json", metavar="RESULTS.json", readable=False, help="Also write results for programs."
        ),
    ] = None,
    password: Annotated[
        bool,
        typer.Option("--password", help=f"Protect the PDF; asked for, or from {PASSWORD_VARIABLE}."),
    ] = False,
    what_ifs: Annotated[
        bool, typer.Option("--what-ifs/--no-what-ifs", help="Also plan for each what-if (part 8).")
    ] = True,
    futures: Futures = None,
    seed: Seed = None,
    verbose: Annotated[bool, typer.Option("--verbose", help="Say on stderr what is done and how.")] = False,
) -> None:
    """Make the plan for a client and write it as a PDF."""
    with reporting_errors():
        pdf = Path(f"{client.stem}.pdf") if output is None else output
        files = {"-o": pdf, "--workbook": workbook, "--json": as_json}
        _refuse_clashes(client, {option: path for option, path in files.items() if path is not None})
        secret = _password() if password else None

        from dataclasses import replace

        from planner.files import write_all
        from planner.plan import make_plan
        from planner.reports.terminal import plan_summary
        from planner.workbook.reading import read_workbook

        read = read_workbook(client)
        errors = Console(stderr=True, highlight=False)
        for warning in read.warnings:
            print_problem(warning, errors)
        settings = replace(_settings(futures, seed), what_ifs=what_ifs)
        with _progress(errors, verbose) as progress:
            made = make_plan(read, settings, progress, client.name)
        # Everything is made before anything is written.
        contents: dict[Path, bytes] = {}
        if workbook is not None:
            from planner.reports.export import results_workbook

            contents[workbook] = results_workbook(made)
        if as_json is not None:
            from planner.reports.export import json_text, results_json

            contents[as_json] = json_text(results_json(made)).encode("utf-8")
        from planner.reports.pdf import render_pdf

        document = render_pdf(made)
        if secret is not None:
            from planner.reports.protection import protected

            document = protected(document, secret)
        contents = {pdf: document} | contents
        write_all(contents)
        if verbose:
            errors.print(
                f"{settings.n_paths:,} futures, seed {settings.seed}; simulated over solved value "
                f"{made.value_share_simulated:.4f} (about 1)"
            )
            if made.proof is not None:
                terms = ", ".join(f"{name} {value:.3%}" for name, value in made.proof.terms)
                errors.print(
                    f"gap {made.proof.gap_share:.3%} of savings, standard error "
                    f"{made.proof.gap_standard_error:.3%}: {terms}"
                )
        out = _output()
        out.print(plan_summary(made))
        for path in contents:
            out.print(f"{escape(str(path))} written", soft_wrap=True)


@app.command()
def compare(
    client: ClientWorkbook,
    rule: Annotated[
        list[str] | None,
        typer.Option(
            metavar="KEY[:TERM=VALUE]", help="Only this rule, such as constant-real:rate=4.5%; repeatable."
        ),
    ] = None,
    what_if: Annotated[
        list[str] | None,
        typer.Option(
            metavar="ADDRESS=VALUE",
            help="Change a cell, such as 'Income/State pension/From age=70'; repeatable.",
        ),
    ] = None,
    together: Annotated[bool, typer.Option("--together", help="Make one change of all --what-if.")] = False,
    own_what_ifs: Annotated[
        bool, typer.Option("--what-ifs", help="The workbook's own what-ifs, each beside the original.")
    ] = False,
    stresses: Annotated[bool, typer.Option("--stresses", help="If it goes otherwise: stress tests.")] = False,
    pension_cut_year: Annotated[
        int | None,
        typer.Option(metavar="YEAR", help="For --stresses: state pensions a fifth lower from then."),
    ] = None,
    decisions: Annotated[
        bool,
        typer.Option(
            "--decisions", help="Search: start of pensions, annuity, conversions, portfolio, working longer."
        ),
    ] = False,
    history: Annotated[
        bool, typer.Option("--history", help="Every start year of the sheet History, worst and middle named.")
    ] = False,
    bootstrap: Annotated[
        bool, typer.Option("--bootstrap", help="Compare in years drawn in blocks from the sheet History.")
    ] = False,
    risk: Annotated[bool, typer.Option("--risk", help="The plan for a ladder of risk aversion.")] = False,
    legacy: Annotated[
        bool, typer.Option("--legacy", help="The plan for a ladder of wishes to leave.")
    ] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Print for other programs.")] = False,
    futures: Futures = None,
    seed: Seed = None,
) -> None:
    """Compare the plan with rules of thumb, with changed clients, with what could happen."""
    with reporting_errors():
        from planner.commands.comparing import Views, answer
        from planner.workbook.reading import read_workbook

        views = Views(
            rules=tuple(rule or ()),
            what_ifs=tuple(what_if or ()),
            together=together,
            own_what_ifs=own_what_ifs,
            stresses=stresses,
            decisions=decisions,
            history=history,
            risk=risk,
            legacy=legacy,
            bootstrap=bootstrap,
            pension_cut_year=pension_cut_year,
            futures=futures,
        )
        errors = Console(stderr=True, highlight=False)
        read = read_workbook(client)
        with _progress(errors, False) as progress:
            found = answer(read, views, _settings(futures, seed), progress, _warner(errors))
        _show(found, as_json)


@app.command()
def snapshot(
    client: ClientWorkbook,
    as_json: Annotated[bool, typer.Option("--json", help="Print for other programs.")] = False,
    futures: Futures = None,
    seed: Seed = None,
) -> None:
    """Show the numbers of a review meeting on one screen."""
    with reporting_errors():
        from dataclasses import replace

        from planner.commands.answers import Answer
        from planner.reports.export_views import snapshot_json
        from planner.reports.terminal_snapshot import snapshot_screen
        from planner.snapshot import snapshot as take_snapshot
        from planner.workbook.reading import read_workbook

        errors = Console(stderr=True, highlight=False)
        read = read_workbook(client)
        _warner(errors)(read.warnings)
        settings = replace(_settings(futures or SNAPSHOT_FUTURES, seed), late_years=False)
        with _progress(errors, False) as progress:
            shot = take_snapshot(read.household, settings, progress)
        screen = (lambda width, plain: snapshot_screen(shot, width, plain),)
        _show(Answer(snapshot_json(shot), screen), as_json)


@app.command()
def review(
    client: ClientWorkbook,
    last: Annotated[
        Path,
        typer.Option(metavar="RESULTS.json", readable=False, help="Last year's results, from plan --json."),
    ],
    as_json: Annotated[bool, typer.Option("--json", help="Print for other programs.")] = False,
    seed: Seed = None,
) -> None:
    """A year on: where the client stands against last year's plan, and what changes now."""
    with reporting_errors():
        from planner.commands.answers import Answer
        from planner.reports.terminal_review import review_screen
        from planner.review import read_last, review_json
        from planner.review import review as make_review
        from planner.workbook.reading import read_workbook

        errors = Console(stderr=True, highlight=False)
        before = read_last(last)
        read = read_workbook(client)
        _warner(errors)(read.warnings)
        with _progress(errors, False) as progress:
            found = make_review(read.household, before, _settings(None, seed), progress)
        _show(Answer(review_json(found), (lambda width, plain: review_screen(found, width),)), as_json)


@app.command()
def clients(
    folder: Annotated[
        Path, typer.Argument(metavar="FOLDER", readable=False, help="Client workbooks; folders within count.")
    ],
    output: Annotated[
        Path,
        typer.Option(
            "-o", "--output", metavar="OUT", readable=False, help="Folder for the results; made if missing."
        ),
    ] = Path("plans"),
    workers: Annotated[
        int | None, typer.Option(min=1, help="Processes on this machine (default: one a core).")
    ] = None,
    scheduler: Annotated[
        str | None,
        typer.Option(metavar="ADDRESS", help="Use a running Dask cluster, such as tcp://10.0.0.5:8786."),
    ] = None,
    what_if: Annotated[
        list[str] | None,
        typer.Option(metavar="ADDRESS=VALUE", help="A what-if for everybody; repeatable, each by itself."),
    ] = None,
    together: Annotated[bool, typer.Option("--together", help="All --what-if as one.")] = False,
    stress: Annotated[
        list[str] | None,
        typer.Option(metavar="NAME", help="A stress for everybody, such as 'fall 30%'; repeatable."),
    ] = None,
    last: Annotated[
        Path | None,
        typer.Option(
            metavar="FOLDER", readable=False, help="Last year's results (default: earlier plans in OUT)."
        ),
    ] = None,
    what_ifs: Annotated[
        bool, typer.Option("--what-ifs/--no-what-ifs", help="Also plan for each what-if (part 8).")
    ] = True,
    futures: Futures = None,
    seed: Seed = None,
) -> None:
    """Make everybody's plan, and a list by who needs a call first; run again to go on or to update."""
    with reporting_errors():
        from dataclasses import replace

        from planner.clients.command import Options, run_command
        from planner.clients.display import summary

        options = Options(
            folder=folder,
            output=output,
            workers=workers,
            scheduler=scheduler,
            what_if=tuple(what_if or ()),
            stress=tuple(stress or ()),
            together=together,
            last=last,
        )
        settings = replace(_settings(futures, seed), what_ifs=what_ifs)
        result = run_command(options, settings, Console(stderr=True, highlight=False))
        out = _output()
        out.print(summary(result))
        for path in result.files:
            out.print(f"{escape(str(path))} written", soft_wrap=True)
        if any(row.state == "failed" for row in result.rows):
            raise typer.Exit(1)


@app.command()
def tables(
    as_json: Annotated[bool, typer.Option("--json", help="Print for other programs.")] = False,
) -> None:
    """List the life tables and tax rules that come with the program, each with source and year."""
    with reporting_errors():
        from planner import mortality, taxes
        from planner.reports.terminal import shipped_tables

        if as_json:
            import json
            from dataclasses import asdict

            record = {
                "life_tables": [asdict(table) for table in mortality.describe()],
                "tax_rules": [asdict(rules) for rules in taxes.describe()],
            }
            typer.echo(json.dumps(record, indent=2, ensure_ascii=False))
            return
        out = _output()
        out.print(shipped_tables(mortality.describe(), taxes.describe(), out.width))


def _warner(errors: Console) -> Callable[[Sequence[Diagnostic]], None]:
    """Return a function that prints warnings, each once."""
    seen: set[Diagnostic] = set()

    def warn(warnings: Sequence[Diagnostic]) -> None:
        for warning in warnings:
            if warning not in seen:
                print_problem(warning, errors)
                seen.add(warning)

    return warn


def _show(found: Answer, as_json: bool) -> None:
    """Print an answer: JSON, or its blocks with a blank line between them."""
    if as_json:
        from planner.reports.export import json_text

        typer.echo(json_text(found.data), nl=False)
        return
    out = _output()
    plain = not out.encoding.casefold().startswith("utf")
    for number, block in enumerate(found.blocks):
        if number:
            out.print()
        out.print(block(out.width, plain))


def _output() -> Console:
    """Standard output: as wide as the terminal, else 80 columns (or the variable COLUMNS)."""
    return Console(highlight=False, soft_wrap=False)


def _every(convert: Callable[[str], Result], items: list[str]) -> list[Result]:
    """Convert every text; the problems of all of them in one `InputError`."""
    results: list[Result] = []
    found: list[Diagnostic] = []
    for item in items:
        try:
            results.append(convert(item))
        except InputError as error:
            found.extend(error.diagnostics)
    if found:
        raise InputError(found)
    return results


def _settings(futures: int | None, seed: int | None) -> PlanSettings:
    from planner.plan import PlanSettings

    standard = PlanSettings()
    n_paths = standard.n_paths if futures is None else futures
    return PlanSettings(
        n_paths=n_paths,
        n_what_if_paths=min(n_paths, standard.n_what_if_paths),
        seed=standard.seed if seed is None else seed,
    )


def _refuse_clashes(client: Path, files: dict[str, Path]) -> None:
    """Refuse to write over the client workbook, twice to one file, or into a folder's place."""
    found: list[Diagnostic] = []
    seen = {client.resolve(): "the client workbook"}
    for option, path in files.items():
        place = path.resolve()
        if place in seen:
            message = f"{path} is {seen[place]}; expected another name"
            found.append(Diagnostic("output-clash", option, message))
        elif path.is_dir():
            found.append(Diagnostic("output-is-folder", option, f"{path} is a folder; expected a file name"))
        seen.setdefault(place, f"already written by {option}")
    if found:
        raise InputError(found)


def _password() -> str:
    """Return the PDF's password from the environment, else from a prompt; never from the command line."""
    from planner.reports.protection import check_available

    check_available()
    secret = os.environ.get(PASSWORD_VARIABLE, "")
    if not secret and sys.stdin.isatty():
        secret = typer.prompt("Password for the PDF", hide_input=True, confirmation_prompt=True, err=True)
    if not secret:
        message = f"there is no terminal to ask for it, and the variable {PASSWORD_VARIABLE} is empty"
        raise InputError([Diagnostic("password-missing", "--password", message)])
    return secret


@contextmanager
def _progress(console: Console, verbose: bool) -> Iterator[Callable[[float, str], None]]:
    """Draw a bar on stderr where that is a terminal; lines where verbose; else nothing."""
    if verbose:
        last = ""

        def say(share: float, what: str) -> None:
            nonlocal last
            if what != last:
                console.print(f"{share:4.0%} {escape(what)}")
                last = what

        yield say
    elif console.is_terminal:
        from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

        columns = (
            TextColumn("{task.description}"),
            BarColumn(),
            TextColumn("{task.percentage:>3.0f}%"),
            TimeRemainingColumn(compact=True),
        )
        # Drawn when told to: a thread that draws would keep work from a second core (see `beside`).
        with Progress(*columns, console=console, transient=True, auto_refresh=False) as bar:
            task = bar.add_task("reading", total=1.0)
            yield lambda share, what: bar.update(
                task, completed=share, description=escape(what), refresh=True
            )
    else:
        yield lambda share, what: None


def main() -> None:
    """Run the command line.

    Linear algebra in one thread unless the environment says otherwise: the solver's matrices are
    small, and threads that wait for one another cost more than they give (measured: two to three
    times the time where the other core is busy).
    """
    for variable in ("OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
        os.environ.setdefault(variable, "1")
    keep_freed_memory()
    app()


if __name__ == "__main__":
    main()
