"""The JSON Schemas accept what the program accepts, and refuse what a schema can see is wrong."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest
import yaml
from click.testing import CliRunner
from jsonschema import Draft202012Validator

from sercheck.cli.schema import command
from sercheck.record import COLUMNS

HERE = Path(__file__).parent
GOOD = sorted((HERE.parent / "rules").glob("*.yaml"))
BAD = sorted((HERE / "bad_rules").glob("*.yaml"))


def printed(what: str) -> dict:
    """The schema as the command prints it."""
    result = CliRunner().invoke(command, [what])
    assert result.exit_code == 0
    return json.loads(result.output)


@pytest.fixture(scope="module")
def rules() -> Draft202012Validator:
    """The schema of rule files."""
    schema = printed("rules")
    Draft202012Validator.check_schema(schema)
    return Draft202012Validator(schema)


def plain(path: Path) -> object:
    """A rule file as an editor reads it: YAML 1.2, in which a date is text."""
    loader = type("Loader", (yaml.SafeLoader,), {"yaml_implicit_resolvers": {}})
    loader.yaml_implicit_resolvers = {
        first: [(tag, pattern) for tag, pattern in found if not tag.endswith("timestamp")]
        for first, found in yaml.SafeLoader.yaml_implicit_resolvers.items()
    }
    return json.loads(json.dumps(yaml.load(path.read_text(), Loader=loader)))


@pytest.mark.parametrize("path", GOOD, ids=lambda path: path.stem)
def test_the_schema_accepts_the_rule_files(rules, path):
    """Every file of rules/ is valid."""
    assert [error.message for error in rules.iter_errors(plain(path))] == []


@pytest.mark.parametrize("path", BAD, ids=lambda path: path.stem)
def test_the_schema_refuses_what_it_can_see(rules, path):
    """A broken file is refused, unless its mistake lies between two keys; then it is accepted, as its header says."""
    refuses = re.search(r"^# schema: (refuses|cannot say)$", path.read_text(), flags=re.MULTILINE)
    assert refuses is not None
    assert rules.is_valid(plain(path)) == (refuses[1] == "cannot say")


def test_every_measure_has_its_fields_in_the_schema(rules):
    """A measure's own field is accepted for it and refused for a measure that does not have it."""
    file = {"feed": "heat", "columns": {"time": "at", "values": ["kwh"]}, "every": "1h"}
    rule = {"name": "one", "measure": "level", "of_the": "mean", "stays": {"below": 3}}
    assert rules.is_valid({**file, "rules": [rule]})
    assert not rules.is_valid({**file, "rules": [{**rule, "measure": "spread"}]})


def test_the_schema_of_a_record_has_all_its_columns():
    """A record with nulls where nothing is known is valid; one with an unknown outcome or a missing column is not."""
    schema = printed("record")
    Draft202012Validator.check_schema(schema)
    judge = Draft202012Validator(schema)
    record = dict.fromkeys(COLUMNS)
    for name in ("record_id", "feed", "batch_id", "batch_fingerprint", "rule", "measure", "rules_fingerprint"):
        record[name] = "x"
    record.update(sercheck_version="0.1.0", judged_at="2026-01-12T00:00:00Z", outcome="undecided", n=24, p_value=None)
    assert judge.is_valid(record)
    assert not judge.is_valid({**record, "outcome": "maybe"})
    assert not judge.is_valid({**record, "n": 1.5})
    assert not judge.is_valid({name: value for name, value in record.items() if name != "limit"})
