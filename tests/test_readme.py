"""What the README shows is what the program does."""

import re
import tomllib
from pathlib import Path

import pytest
from conftest import DEMO, run_cli

from reconcile.measurement import EFFECT_TARGETS
from reconcile.schema import load_schema

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def block(marker):
    """Return the fenced block after a marker comment."""
    return re.search(rf"<!-- {marker} -->\n```\n(.*?)```", README, re.DOTALL)[1]


def test_the_output_shown_is_the_output():
    text = run_cli("run", DEMO).stdout

    assert text.startswith(block("output of the run command").rstrip("\n"))


def test_ci_reads_the_test_command_from_here():
    command = block("test command").strip()

    assert "\n" not in command
    assert "-m pytest" in command
    assert "README.md" in (ROOT / ".ci" / "run").read_text(encoding="utf-8")


def test_the_run_command_names_the_shipped_example():
    command = block("run command").strip()

    assert command.endswith("reconcile run examples/binder-lot-0417/case.toml")


TARGETS = load_schema("case-1")["$defs"]["effect"]["properties"]["target"]["enum"]


@pytest.mark.parametrize("target", TARGETS)
def test_every_target_a_user_can_name_is_documented(target):
    assert target in EFFECT_TARGETS
    assert f"`{target}`" in README


def test_top_level_is_what_the_design_card_says():
    names = {p.name for p in ROOT.iterdir() if not p.name.startswith(".")}
    allowed = {
        "README.md", "DEVELOPERS.md", "pyproject.toml", "reconcile", "tests", "examples", "schemas",
    }  # fmt: skip

    assert names <= allowed | {"build", "dist"}  # a local build may leave the last two


def test_every_field_of_the_case_schema_is_described_with_an_example():
    def walk(schema, path):
        for key, entry in schema.get("properties", {}).items():
            if "$ref" not in entry and entry.get("type") not in ("array", "object"):
                assert entry.get("description"), (*path, key)
                assert "examples" in entry or "const" in entry, (*path, key)
            walk(entry, (*path, key))

    schema = load_schema("case-1")
    walk(schema, ())
    for name, entry in schema["$defs"].items():
        walk(entry, (name,))


def test_the_version_is_stated_once():
    data = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))

    assert "version" in data["project"]["dynamic"]
