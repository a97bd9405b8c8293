"""The walls: imports run one way, heavy packages live in one place, help imports nothing heavy."""

import ast
import subprocess
import sys
from pathlib import Path

import reconcile

PACKAGE = Path(reconcile.__file__).parent

# lowest first; a module may import only what stands above it in this list
ORDER = [
    "errors",
    "measurement",
    "units",
    "linalg",
    "distribution",
    "observables",
    "evidence",
    "nonlinear",
    "adapters.common",
    "adapters.flask_fit",
    "adapters.scattering_fit",
    "adapters.scattering_series",
    "adapters.light_scattering",
    "adapters.osmometry",
    "adapters.mark_houwink",
    "adapters.viscometry",
    "adapters.stated",
    "adapters.registry",
    "estimate.virial_link",
    "estimate.system",
    "estimate.engine",
    "estimate.linearised",
    "estimate.intervals",
    "estimate.joint",
    "estimate.selfcheck",
    "bounds",
    "applicability",
    "judge.consistency",
    "toml_lines",
    "tables",
    "schema",
    "case",
    "result",
    "report.rounding",
    "report.text",
    "report.files",
    "pipeline",
    "cli",
    "__main__",
]

ONE_PLACE = {
    "lmfit": {"nonlinear"},
    "click": {"cli"},
    "jsonschema": {"schema"},
    "matplotlib": set(),
    "pandas": set(),
}


def modules():
    for path in sorted(PACKAGE.rglob("*.py")):
        name = ".".join(path.relative_to(PACKAGE).with_suffix("").parts)
        yield name, ast.parse(path.read_text(encoding="utf-8"))


def imports(tree):
    for node in ast.walk(tree):
        if isinstance(node, ast.ImportFrom):
            assert node.level == 0, "imports are absolute"
            yield node.module
            # `from reconcile.adapters import osmometry` imports a module too
            yield from (f"{node.module}.{alias.name}" for alias in node.names)
        elif isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)


def test_every_module_has_its_layer():
    found = {name for name, _ in modules() if not name.endswith("__init__")}

    assert found == set(ORDER)


def test_imports_run_one_way():
    rank = {name: i for i, name in enumerate(ORDER)}
    wrong = [
        f"{name} imports {target}"
        for name, tree in modules()
        if name in rank
        for target in {t.removeprefix("reconcile.") for t in imports(tree) if t}
        if target in rank and rank[target] >= rank[name]
    ]

    assert wrong == []


def test_heavy_packages_live_in_one_place():
    wrong = [
        f"{name} imports {target}"
        for name, tree in modules()
        for target in imports(tree)
        if target.split(".")[0] in ONE_PLACE and name not in ONE_PLACE[target.split(".")[0]]
    ]

    assert wrong == []


def test_the_estimator_knows_no_technique():
    names = ("osmometry", "light_scattering", "viscometry", "stated")
    for path in (PACKAGE / "estimate").glob("*.py"):
        text = path.read_text(encoding="utf-8")
        assert not [name for name in names if f'"{name}"' in text], path


def test_help_imports_nothing_heavy():
    code = (
        "import sys\n"
        "from reconcile.cli import main\n"
        "try:\n    main(['--help'])\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'pandas', 'lmfit', 'matplotlib', 'jsonschema'}\n"
        "print(sorted(heavy & set(sys.modules)))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=60
    )

    assert done.stdout.splitlines()[-1] == "[]"
    assert "Exit codes" in done.stdout


def test_files_and_functions_stay_readable():
    too_long = []
    for path in PACKAGE.rglob("*.py"):
        text = path.read_text(encoding="utf-8")
        if text.count("\n") > 500:
            too_long.append(f"{path.name}: {text.count(chr(10))} lines")
        too_long += [
            f"{path.name}:{node.name}"
            for node in ast.walk(ast.parse(text))
            if isinstance(node, ast.FunctionDef) and node.end_lineno - node.lineno > 75
        ]

    assert too_long == []
