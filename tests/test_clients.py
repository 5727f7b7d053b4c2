"""Client lists without processes: names, reasons, what is finished, broken executors, kills at any write."""

import hashlib
import io
import json
import threading
from concurrent.futures import BrokenExecutor, Executor, Future, ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path

import client_generator
import openpyxl
import pytest
from hypothesis import given
from hypothesis import strategies as st
from rich.console import Console

from planner.clients import listing, store
from planner.clients.asking import asked_changes, asked_stresses, stress_called
from planner.clients.display import summary, watching
from planner.clients.listing import ListResult, plan_clients
from planner.clients.lists import list_json, list_workbook
from planner.clients.naming import assign_names, find_workbooks, safe_name
from planner.clients.rows import (
    ChangedFigures,
    ClientRow,
    LastPlan,
    by_urgency,
    reasons,
    row_from_json,
    row_json,
)
from planner.clients.running import Engine, run
from planner.clients.store import RECORDS, Store
from planner.clients.worker import Finished, Task, Work, plan_client
from planner.diagnostics import Diagnostic, InputError, PlannerError
from planner.optimum.recursion import SolverSettings
from planner.plan import PlanSettings, make_plan
from planner.reports.export import json_text, results_json
from planner.reports.pdf import render_pdf
from planner.workbook.reading import read_workbook

TINY = PlanSettings(
    n_paths=100,
    n_what_if_paths=100,
    solver=SolverSettings(taxable=12, cash=16),
    what_if_solver=SolverSettings(taxable=10, cash=12),
    rules=(),
    what_ifs=False,
)
WORK = Work(TINY)
A_ROW = ClientRow(
    "ada",
    "ada.xlsx",
    "planned",
    "Ada Alder",
    "2026-03-01",
    "USD",
    spending_this_year=50_000.0,
    essential=40_000.0,
    chance_below_essential=0.01,
    shortfall=2_000.0,
    least_to_take=0.0,
    still_due=0.0,
)


def threads(count: int = 2) -> Engine:
    return Engine(lambda: ThreadPoolExecutor(count), lambda: count)


def cells(content: bytes) -> dict[str, list[tuple[object, ...]]]:
    book = openpyxl.load_workbook(io.BytesIO(content))
    return {sheet.title: list(sheet.iter_rows(values_only=True)) for sheet in book}


# Names ---------------------------------------------------------------------------------------------


@given(st.lists(st.text(max_size=150), min_size=1, max_size=8, unique=True))
def test_names_are_safe_and_never_the_same(stems):
    workbooks = [f"{n}/{stem}.xlsx" for n, stem in enumerate(stem.replace("\0", "") for stem in stems)]
    names = assign_names(workbooks, {})
    assert len({name.casefold() for name in names.values()}) == len(workbooks)
    for name in names.values():
        assert name == name.strip()
        assert not set(name) & set('/\\:*?"<>|\0\n')
        assert not name.startswith(".")
        assert 0 < len(name.encode()) <= 130
        assert name.casefold() not in {"clients", "con", "nul"}


@pytest.mark.parametrize(
    ("stem", "name"),
    [
        ("Smith, A. & B.", "Smith, A. & B"),
        ("a/b:c", "a_b_c"),
        ("..", "_"),
        (".hidden", "hidden"),
        ("CON", "_CON"),
        ("com1.old", "_com1.old"),
        ("Gärtner", "Gärtner"),
        ("Ga\u0308rtner", "Gärtner"),
        ("x" * 300, "x" * 120),
    ],
)
def test_safe_name(stem, name):
    assert safe_name(stem) == name


def test_a_name_stays_when_another_client_of_the_same_name_comes():
    first = assign_names(["south/smith.xlsx"], {})
    both = assign_names(["north/smith.xlsx", "south/smith.xlsx"], first)
    assert both["south/smith.xlsx"] == "smith"
    assert both["north/smith.xlsx"].startswith("smith-")
    assert assign_names(["north/SMITH.xlsx", "south/smith.xlsx"], {})["south/smith.xlsx"] != "smith"


def test_no_client_takes_the_list_s_own_name():
    assert assign_names(["Clients.xlsx"], {})["Clients.xlsx"] != "Clients"


def test_workbooks_of_a_folder(tmp_path):
    for name in (
        "b.xlsx",
        "A.XLSX",
        "in/c.xlsx",
        "~$b.xlsx",
        ".x.xlsx",
        ".git/d.xlsx",
        "out/e.xlsx",
        "f.txt",
    ):
        (tmp_path / name).parent.mkdir(exist_ok=True)
        (tmp_path / name).write_bytes(b"")
    found = find_workbooks(tmp_path, tmp_path / "out")
    assert [path.relative_to(tmp_path).as_posix() for path in found] == ["A.XLSX", "b.xlsx", "in/c.xlsx"]
    with pytest.raises(FileNotFoundError):
        find_workbooks(tmp_path / "nowhere", tmp_path)


# Rows ----------------------------------------------------------------------------------------------

SITUATIONS = {
    "bills cannot be paid this year": replace(A_ROW, spending_this_year=30_000.0),
    "no plan: the workbook has": ClientRow(
        "b", "b.xlsx", "problems", problems=(Diagnostic("x", "People!B2", "wrong"),)
    ),
    "bills are cut in 3 of 10 futures": replace(A_ROW, chance_below_essential=0.3),
    "bills are cut in 2 of 10 futures": replace(A_ROW, chance_below_essential=0.2),
    "with 'fall' bills are cut in 4 of 10": replace(A_ROW, changed=(ChangedFigures("fall", 9.0, 0.4),)),
    "spends 20% less than last year": replace(A_ROW, last=LastPlan("2025-03-01", 62_500.0)),
    "$8,000 still to take": replace(A_ROW, least_to_take=9_000.0, still_due=8_000.0),
    "can spend 25% more than last year": replace(A_ROW, last=LastPlan("2025-03-01", 40_000.0)),
    "1 warning on the workbook": replace(A_ROW, warnings=(Diagnostic("w", "Tax!B4", "odd", "warning"),)),
}


def test_who_needs_a_call_first_and_why():
    quiet = replace(A_ROW, last=LastPlan("2025-03-01", 48_000.0), client="Quiet")
    ordered = by_urgency([quiet, *reversed(SITUATIONS.values())])
    assert ordered == [*SITUATIONS.values(), quiet]
    for words, row in SITUATIONS.items():
        assert words in reasons(row)[0][2]
    assert reasons(quiet) == ()


def test_a_client_with_several_reasons_has_them_all_most_urgent_first():
    row = replace(A_ROW, chance_below_essential=0.3, still_due=10.0, last=LastPlan("2025-03-01", 70_000.0))
    assert [urgency for urgency, _, _ in reasons(row)] == [2, 4, 5]


@pytest.mark.parametrize("row", [A_ROW, *SITUATIONS.values()])
def test_a_row_survives_its_record(row):
    assert row_from_json(json.loads(json.dumps(row_json(row)))) == row


def test_text_in_the_list_is_never_a_formula_and_every_problem_is_listed():
    evil = replace(A_ROW, client='=HYPERLINK("http://example.com")', workbook="+cmd\x01.xlsx")
    broken = SITUATIONS["no plan: the workbook has"]
    book = openpyxl.load_workbook(io.BytesIO(list_workbook([evil, broken], WORK)))
    assert all(cell.data_type != "f" for sheet in book for row in sheet for cell in row)
    assert book["Clients"]["B3"].value == evil.client
    assert book["Problems"]["D3"].value == "People!B2"


def test_list_for_programs_holds_the_figures_and_the_changes():
    row = replace(SITUATIONS["with 'fall' bills are cut in 4 of 10"], last=LastPlan("2025-03-01", 62_500.0))
    data = list_json([row], replace(WORK, stresses=("fall",)))
    assert data["counts"] == {"clients": 1, "planned": 1, "problems": 0, "failed": 0}
    client = data["clients"][0]
    assert client["change_since_last_year"] == -0.2
    assert client["what_ifs"] == [
        {"name": "fall", "spending_this_year": 9.0, "chance_below_essential": 0.4, "note": None}
    ]
    assert client["pdf"] == "ada.pdf"
    json_text(data)  # finite and plain


# What is asked for all -----------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "name"),
    [
        ("fall 30%", "savings fall by 30 % at the start"),
        ("Markets fall by 12.5 %", "savings fall by 12.5 % at the start"),
        ("Care is needed", "care is needed"),
        ("care", "care is needed"),
    ],
)
def test_a_stress_by_its_name_or_part_of_it(text, name):
    assert stress_called(text)[0] == name
    assert stress_called(name)[0] == name


@pytest.mark.parametrize("text", ["fall 0%", "fall 100%", "cares", "nothing like it", " ", "e"])
def test_an_unknown_stress_is_refused(text):
    with pytest.raises(InputError, match="stress-unknown"):
        asked_stresses([text])


def test_what_ifs_for_all_each_by_itself_or_together():
    texts = ["Spending/Essential spending a year=1", "Markets/Inflation=2%"]
    assert [len(pairs) for _, pairs in asked_changes(texts, together=False)] == [1, 1]
    assert [len(pairs) for _, pairs in asked_changes(texts, together=True)] == [2]
    with pytest.raises(InputError, match="address-malformed"):
        asked_changes(["no equals sign"], together=False)


# Executors that break ------------------------------------------------------------------------------


class Fragile(Executor):
    """Runs tasks side by side; one called "poison" breaks it and all that are not done."""

    def __init__(self, *, broken: bool = False) -> None:
        self.lock, self.broken = threading.Lock(), broken
        self.open: list[Future[Finished]] = []

    def submit(self, function, /, its):
        with self.lock:
            if self.broken:
                raise BrokenExecutor("broken")
            future: Future[Finished] = Future()
            self.open.append(future)
        threading.Timer(0.01, self._end, (future, function, its)).start()
        return future

    def _end(self, future: Future[Finished], function, its: Task) -> None:
        with self.lock:
            if future.done():
                return
            if its.name.startswith("poison"):
                self.broken = True
                for left in self.open:
                    if not left.done():
                        left.set_exception(BrokenExecutor("a process died"))
            else:
                future.set_result(function(its))


def task(name: str) -> Task:
    return Task(name, f"{name}.xlsx", "", b"", WORK)


def done(its: Task) -> Finished:
    return Finished(replace(A_ROW, name=its.name, workbook=its.workbook), b"pdf", b"{}")


def test_a_client_that_kills_its_process_is_given_up_and_no_other():
    starts: list[Fragile] = []

    def start() -> Executor:
        starts.append(Fragile())
        return starts[-1]

    tasks = [task(name) for name in ("a", "b", "poison1", "c", "d", "poison2", "e", "f", "g")]
    results = {f.row.name: f.row.state for f in run(tasks, Engine(start, lambda: 3), done)}
    assert results == {t.name: "failed" if t.name.startswith("poison") else "planned" for t in tasks}
    assert len(starts) > 2


def test_processes_that_end_as_soon_as_they_start_end_the_run():
    with pytest.raises(PlannerError, match="as soon as they start"):
        list(run([task("a")], Engine(lambda: Fragile(broken=True), lambda: 2), done))


def test_what_a_worker_raises_is_that_client_s_failure():
    def work(its: Task) -> Finished:
        if its.name == "b":
            raise MemoryError("no room")
        return done(its)

    rows = {f.row.name: f.row for f in run([task("a"), task("b")], threads(), work)}
    assert rows["a"].state == "planned"
    assert "no room" in rows["b"].failure


def test_cancelled_work_ends_the_run_with_a_word_on_how_to_go_on():
    class Cancelling(Executor):
        def submit(self, function, /, its):
            future: Future[Finished] = Future()
            future.cancel()
            future.set_running_or_notify_cancel()
            return future

    with pytest.raises(PlannerError, match="run the same command again"):
        list(run([task("a")], Engine(Cancelling, lambda: 2), done))


def test_no_more_clients_are_handed_over_than_there_is_room_for():
    """Workbooks and plans of 20,000 clients never are in memory together."""
    taken = running = most = 0
    lock = threading.Lock()

    def tasks():
        nonlocal taken, running, most
        for number in range(20):
            with lock:
                taken += 1
                running += 1
                most = max(most, running)
            yield task(f"c{number}")

    for _ in run(tasks(), threads(3), done):
        with lock:
            running -= 1
    assert taken == 20
    # Three in work, and those of a batch that finished together while one of them is handed on.
    assert most <= 2 * 3


def test_a_worker_of_another_version_refuses():
    finished = plan_client(replace(task("a"), version="0.0.0"))
    assert finished.row.state == "failed"
    assert "version" in finished.row.failure


def test_problems_of_the_program_do_not_leave_the_row(monkeypatch):
    def broken(*_: object) -> None:
        raise ZeroDivisionError("oh")

    monkeypatch.setattr("planner.workbook.reading.read_content", broken)
    assert "ZeroDivisionError" in plan_client(task("a")).row.failure


# A folder ------------------------------------------------------------------------------------------


def fake(its: Task) -> Finished:
    """Stand in for a plan: figures and files that follow from the workbook's bytes."""
    if its.content == b"broken":
        problem = Diagnostic("x", "People!B2", "wrong")
        return Finished(ClientRow(its.name, its.workbook, "problems", problems=(problem,)))
    year, _, amount = its.content.decode().partition(" ")
    results = {
        "client": its.name,
        "currency": "USD",
        "plan_date": f"{year}-03-01",
        "this_year": {"spending": float(amount)},
    }
    row = replace(
        A_ROW, name=its.name, workbook=its.workbook, client=its.name, plan_date=f"{year}-03-01",
        spending_this_year=float(amount),
    )  # fmt: skip
    fingerprint = hashlib.sha256(its.content).hexdigest()
    return Finished(row, f"%PDF {fingerprint}".encode(), json.dumps(results).encode())


def clients(folder: Path, **contents: str) -> Path:
    folder.mkdir(exist_ok=True)
    for name, content in contents.items():
        (folder / f"{name}.xlsx").write_text(content)
    return folder


def everything(folder: Path) -> dict[str, object]:
    """Content of every file; of workbooks their cells, since they carry the time they were saved."""
    return {
        path.relative_to(folder).as_posix(): cells(path.read_bytes())
        if path.suffix == ".xlsx"
        else path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file()
    }


def listed(folder: Path, out: Path, work: Work = WORK, **options: object) -> ListResult:
    return plan_clients(folder, out, work, threads(), plan=fake, **options)  # type: ignore[arg-type]


def test_only_what_changed_is_done_again(tmp_path):
    folder = clients(tmp_path / "in", a="2026 50000", b="2026 60000", c="broken")
    assert listed(folder, tmp_path / "out").already == 0
    assert listed(folder, tmp_path / "out").already == 2
    clients(folder, b="2026 61000")
    result = listed(folder, tmp_path / "out")
    assert result.already == 1
    assert {row.name: row.spending_this_year for row in result.rows}["b"] == 61_000
    assert listed(folder, tmp_path / "out", replace(WORK, stresses=("x",))).already == 0
    (tmp_path / "out" / "a.pdf").write_bytes(b"spoilt")
    (tmp_path / "out" / RECORDS / "b.json").write_text("{")
    assert listed(folder, tmp_path / "out", replace(WORK, stresses=("x",))).already == 0
    assert [row.state for row in result.rows].count("problems") == 1


def test_another_program_version_does_everything_again(tmp_path, monkeypatch):
    folder = clients(tmp_path / "in", a="2026 50000")
    listed(folder, tmp_path / "out")
    monkeypatch.setattr(store, "__version__", "99.0")
    assert listed(folder, tmp_path / "out").already == 0


class Killed(BaseException):
    """Stands for the end of the process: nothing may handle it."""


@pytest.mark.parametrize("half_written", [False, True], ids=["between files", "within a file"])
def test_killed_at_any_write_the_next_run_ends_as_an_undisturbed_one(tmp_path, monkeypatch, half_written):
    """Also where last year's plans are being replaced: the change since last year is not lost."""

    def prepared(out: Path) -> Path:
        folder = clients(tmp_path / f"in_{out.name}", a="2025 50000", b="2025 60000", c="2025 1")
        listed(folder, out)
        return clients(folder, a="2026 40000", b="2026 61000", c="broken", d="2026 7")

    listed(prepared(tmp_path / "straight"), tmp_path / "straight")
    expected = everything(tmp_path / "straight")
    assert any(
        row["change_since_last_year"] == -0.2 for row in json.loads(expected["clients.json"])["clients"]
    )

    write = store.write_whole
    for victim in range(20):
        out = tmp_path / f"out{victim}"
        folder = prepared(out)
        count = 0

        def killing(path: Path, content: bytes, victim: int = victim, **options: bool) -> None:
            nonlocal count
            if count == victim:
                if half_written:
                    path.with_name(f".{path.name}.1.part").write_bytes(content[:3])
                raise Killed
            count += 1
            write(path, content)

        with monkeypatch.context() as patch:
            patch.setattr(store, "write_whole", killing)
            patch.setattr(listing, "write_whole", killing)
            try:
                listed(folder, out)
            except Killed:
                pass
            else:
                assert victim == 3 * 3 + 2  # three planned clients with three files each, and the list
                break
        listed(folder, out)
        assert everything(out) == expected
    else:
        pytest.fail("there were more writes than expected")


def test_change_since_last_year_comes_from_the_folder_given_or_the_results_there(tmp_path):
    folder = clients(tmp_path / "in", a="2025 50000")
    listed(folder, tmp_path / "last")
    clients(folder, a="2026 55000")
    row = listed(folder, tmp_path / "out", last=tmp_path / "last").rows[0]
    assert row.change_since_last == pytest.approx(0.1)  # an exact quotient but for its last bit
    assert row.last == LastPlan("2025-03-01", 50_000.0)
    assert listed(folder, tmp_path / "out").rows[0].change_since_last is None  # not kept from that folder
    # Results that the command for a single client wrote, without a record.
    (tmp_path / "there").mkdir()
    (tmp_path / "there" / "a.json").write_bytes((tmp_path / "last" / "a.json").read_bytes())
    assert listed(folder, tmp_path / "there").rows[0].last == LastPlan("2025-03-01", 50_000.0)
    # A correction later in the same year still compares with last year.
    clients(folder, a="2026 56000")
    assert listed(folder, tmp_path / "there").rows[0].last == LastPlan("2025-03-01", 50_000.0)


def test_last_year_s_results_of_somebody_else_do_not_count(tmp_path):
    folder = clients(tmp_path / "in", a="2025 50000")
    listed(folder, tmp_path / "out")
    other = json.loads((tmp_path / "out" / "a.json").read_text())
    (tmp_path / "last").mkdir()
    (tmp_path / "last" / "a.json").write_text(json.dumps(other | {"client": "another"}))
    clients(folder, a="2026 1")
    assert listed(folder, tmp_path / "new", last=tmp_path / "last").rows[0].last is None


def test_two_clients_of_one_name_have_files_of_their_own(tmp_path):
    clients(tmp_path / "in", smith="2026 1")
    clients(tmp_path / "in" / "north", smith="2026 2")
    rows = listed(tmp_path / "in", tmp_path / "out").rows
    spending = {
        json.loads((tmp_path / "out" / f"{row.name}.json").read_text())["this_year"]["spending"]
        for row in rows
    }
    assert spending == {1.0, 2.0}


def test_results_within_the_folder_of_clients_are_not_clients(tmp_path):
    folder = clients(tmp_path / "in", a="2026 1")
    listed(folder, folder / "plans")
    assert len(listed(folder, folder / "plans").rows) == 1
    with pytest.raises(InputError, match="output-clash"):
        listed(folder, folder)


def test_an_empty_folder_is_refused(tmp_path):
    with pytest.raises(InputError, match="no-clients"):
        listed(clients(tmp_path / "in"), tmp_path / "out")


def test_a_second_run_in_the_same_folder_is_kept_out(tmp_path):
    folder = clients(tmp_path / "in", a="2026 1")
    with Store(tmp_path / "out").alone(), pytest.raises(PlannerError, match="another run"):
        listed(folder, tmp_path / "out")


def test_a_full_disk_ends_the_run_and_workers(tmp_path, monkeypatch):
    def full(path: Path, content: bytes, *, clear: bool) -> None:
        raise OSError(28, "No space left on device", str(path))

    folder = clients(tmp_path / "in", a="2026 1", b="2026 2", c="2026 3")
    monkeypatch.setattr(store, "write_whole", full)
    with pytest.raises(OSError, match="No space left"):
        listed(folder, tmp_path / "out")


def test_nothing_is_written_outside_the_results_and_workbooks_stay(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    folder = clients(tmp_path / "in", a="2026 1", b="broken")
    before = everything_raw(folder)
    listed(folder, tmp_path / "out")
    assert everything_raw(folder) == before
    assert sorted(path.name for path in tmp_path.iterdir()) == ["in", "out"]


def everything_raw(folder: Path) -> dict[str, bytes]:
    return {path.name: path.read_bytes() for path in folder.iterdir()}


# Real plans, in threads ----------------------------------------------------------------------------


def test_stress_and_what_if_for_all(tmp_path):
    """A client who cannot have a change keeps the plan, with a note."""
    client_generator.write_list(tmp_path / "in", 2, simple=True)
    first = "State pension " + client_generator.household(7, 0, simple=True)["People"]["people"][0]["Person"]
    changes = asked_changes([f"Income/{first}/Amount a year=0"], together=False)
    work = Work(TINY, changes, asked_stresses(["fall 60%", "care"]))
    result = plan_clients(tmp_path / "in", tmp_path / "out", work, threads())
    rows = {row.name: row for row in result.rows}
    pension, fall, care = rows["client_0000"].changed
    assert pension.chance_below_essential > rows["client_0000"].chance_below_essential
    assert fall.spending_this_year < rows["client_0000"].spending_this_year
    assert (care.chance_below_essential, care.note) == (None, "does not apply to this client")
    assert "no row" in rows["client_0001"].changed[0].note
    results = json.loads((tmp_path / "out" / "client_0000.json").read_text("utf-8"))
    assert [entry["name"] for entry in results["what_ifs"]] == [changes[0][0], fall.name]
    assert (tmp_path / "out" / "client_0000.pdf").read_bytes().startswith(b"%PDF")
    notes = cells((tmp_path / "out" / "clients.xlsx").read_bytes())["Problems"]
    assert any(row[5] == "what-if-not-possible" for row in notes)


def test_a_client_of_a_list_has_the_very_files_of_the_command_for_one(tmp_path):
    (path,) = client_generator.write_list(tmp_path / "in", 1, simple=True)
    plan_clients(tmp_path / "in", tmp_path / "out", WORK, threads())
    plan = make_plan(read_workbook(path), TINY, workbook_name=path.name)
    assert (tmp_path / "out" / "client_0000.pdf").read_bytes() == render_pdf(plan)
    assert (tmp_path / "out" / "client_0000.json").read_text("utf-8") == json_text(results_json(plan))


# Display -------------------------------------------------------------------------------------------


def shown(*, terminal: bool) -> str:
    console = Console(file=io.StringIO(), width=100, force_terminal=terminal, color_system=None)
    with watching(console) as watch:
        watch.begin(3)
        watch.client(A_ROW, already=False)
        watch.client(replace(A_ROW, workbook="b [x].xlsx"), already=True)
        watch.client(SITUATIONS["no plan: the workbook has"], already=False)
    return console.file.getvalue()


def test_a_plain_line_per_client_where_there_is_no_terminal():
    assert shown(terminal=False).splitlines() == [
        "1/3 ada.xlsx: planned",
        "2/3 b [x].xlsx: done before",
        "3/3 b.xlsx: 1 problem, first People!B2: wrong",
    ]


def test_a_bar_with_done_failed_and_time_left_where_there_is_one():
    text = shown(terminal=True)
    assert "3/3" in text
    assert "1 without a plan" in text
    assert "left" in text


def test_summary_names_who_needs_a_call_first():
    fallen = SITUATIONS["with 'fall' bills are cut in 4 of 10"]
    rows = tuple(by_urgency([A_ROW, SITUATIONS["bills cannot be paid this year"], fallen]))
    console = Console(file=io.StringIO(), width=80, color_system=None)
    console.print(summary(ListResult(rows, 1, ())))
    text = console.file.getvalue()
    assert "Ada Alder" in text
    assert "bills cannot be paid this year: short by $10,000" in text
    assert "3 clients: 3 planned (1 before)" in text
    words = "With 'fall' bills are cut in at least 10% of futures for 1 of 1 clients; as planned for 0."
    assert words in " ".join(text.split())
