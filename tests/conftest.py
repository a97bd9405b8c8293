"""What several test files share: the command line in-process, and the published cases."""

import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from reconcile.cli import main

HERE = Path(__file__).parent
CASES = HERE / "cases"
DEMO = HERE.parent / "examples" / "binder-lot-0417" / "case.toml"


def run_cli(*arguments):
    """Run the command line; an exception that is not an exit is a defect and is raised."""
    result = CliRunner().invoke(main, [str(a) for a in arguments])
    if result.exception is not None and not isinstance(result.exception, SystemExit):
        raise result.exception
    return result


@pytest.fixture
def cli():
    return run_cli


@pytest.fixture(scope="session")
def reduced():
    """Return a function: case folder name → reduced result document, by measurement name."""
    cache = {}

    def load(name):
        if name not in cache:
            result = run_cli("reduce", CASES / name / "case.toml", "--json")
            assert result.exit_code == 0, result.stderr
            document = json.loads(result.stdout)
            cache[name] = {m["name"]: m for m in document["measurements"]} | {"": document}
        return cache[name]

    return load


@pytest.fixture(scope="session")
def demo():
    """Return the result document of the shipped example."""
    result = run_cli("run", DEMO, "--json")
    assert result.exit_code == 0, result.stderr
    return json.loads(result.stdout)


def alternative(measurement, form):
    """Return the quantities of a named alternative."""
    return next(a["quantities"] for a in measurement["alternatives"] if a["form"] == form)
