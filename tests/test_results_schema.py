"""The shipped JSON Schema of the results file: real results obey it, changed ones do not."""

import copy
import json
from importlib import resources

import pytest
from client_workbooks import SAMPLES
from golden_text import GOLDEN
from jsonschema import Draft202012Validator
from plan_builder import build, couple, single
from typer.testing import CliRunner

from planner.cli import app
from planner.reports.export import results_json

SCHEMA = json.loads(resources.files("planner").joinpath("data", "results.schema.json").read_text("utf-8"))
VALIDATOR = Draft202012Validator(SCHEMA)


def complaints(results):
    return [f"{error.json_path}: {error.message}" for error in VALIDATOR.iter_errors(results)]


def test_the_schema_is_one():
    Draft202012Validator.check_schema(SCHEMA)


@pytest.mark.parametrize("household", [single(), couple()], ids=["single", "couple"])
def test_invented_plans_obey_it(household):
    assert complaints(results_json(build(household))) == []


def test_what_the_command_writes_obeys_it(tmp_path):
    results = tmp_path / "results.json"
    options = ["--futures", "100", "--no-what-ifs", "-o", str(tmp_path / "p.pdf"), "--json", str(results)]
    done = CliRunner().invoke(app, ["plan", str(SAMPLES / "late_retired.xlsx"), *options])
    assert done.exit_code == 0, done.stderr
    assert complaints(json.loads(results.read_text("utf-8"))) == []


def test_it_names_every_key_of_the_results():
    """A key that is new in the results belongs into the schema, too."""

    def undeclared(value, schema, path=""):
        if "$ref" in schema:
            schema = SCHEMA["$defs"][schema["$ref"].rpartition("/")[2]]
        if isinstance(value, dict) and "properties" in schema:
            for key, inner in value.items():
                if key not in schema["properties"]:
                    yield f"{path}/{key}"
                else:
                    yield from undeclared(inner, schema["properties"][key], f"{path}/{key}")
        elif isinstance(value, list) and "items" in schema:
            for inner in value:
                yield from undeclared(inner, schema["items"], path)

    for household in (single(), couple()):
        assert list(undeclared(results_json(build(household)), SCHEMA)) == []


@pytest.mark.parametrize(
    "path", ["client", "this_year/spending", "value/gap_share", "sources/program_version", "strategies"]
)
def test_a_missing_key_is_found(path):
    results = json.loads((GOLDEN / "results.json").read_text("utf-8"))
    assert complaints(results) == []
    broken = copy.deepcopy(results)
    *groups, key = path.split("/")
    group = broken
    for name in groups:
        group = group[name]
    del group[key]
    assert complaints(broken)


def test_figures_of_the_wrong_kind_are_found():
    results = json.loads((GOLDEN / "results.json").read_text("utf-8"))
    for group, key, value in (
        (results["this_year"], "spending", "22,649"),
        (results["strategies"][0], "chance_below_essential", 3.1),
        (results["sources"], "workbook_sha256", "none"),
    ):
        kept, group[key] = group[key], value
        assert len(complaints(results)) == 1
        group[key] = kept
