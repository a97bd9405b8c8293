"""The command line: parse, call the library, write.

Imports stand inside the commands, so that help and usage errors cost nothing but click.
"""

# ruff: noqa: PLC0415 - see above

from __future__ import annotations

import os
import shutil
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from reconcile import __version__
from reconcile.errors import ReconcileError

if TYPE_CHECKING:
    from collections.abc import Callable, Mapping

__all__ = ["main"]


class _Group(click.Group):
    """The one boundary between our errors and the user."""

    def invoke(self, ctx: click.Context) -> Any:
        # a user's mistake is told in its own words; anything else is our defect and keeps its trace
        try:
            return super().invoke(ctx)
        except ReconcileError as error:
            click.echo(str(error), err=True)
            ctx.exit(error.exit_code)


@click.group(
    cls=_Group,
    context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 80},
    epilog="Exit codes: 0 done; 2 usage; 3 the input cannot be used; 4 no usable estimate;"
    " 5 contradiction, where --fail-on-contradiction is given.",
)
@click.version_option(__version__, prog_name="reconcile")
@click.pass_context
def main(ctx: click.Context) -> None:
    """Molar-mass averages and dispersity from osmometry, light scattering, viscometry.

    Give a case document (TOML) that names the readings of one sample; the answer says what they
    determine together, and whether they agree.
    """
    if os.environ.get("NO_COLOR") or os.environ.get("TERM") == "dumb":
        ctx.color = False
    for stream in (sys.stdout, sys.stderr):
        reconfigure = getattr(stream, "reconfigure", None)
        if reconfigure is not None:
            reconfigure(errors="replace")


_CASE = click.argument("case", type=click.Path(path_type=Path), metavar="CASE.toml")
_JSON = click.option(
    "--json", "as_json", is_flag=True, help="Print the result document and nothing else."
)
_OUTSIDE = click.option(
    "--allow-outside", is_flag=True, help="Allow tables outside the case's own folder."
)
_OUT = click.option(
    "--out", type=click.Path(path_type=Path, file_okay=False), help="Folder to write the files to."
)
_VERBOSE = click.option(
    "-v", "--verbose", is_flag=True, help="Also readings and the uncertainty budget."
)

_CONTRADICTIONS = {"contradiction likely", "contradiction"}


def _width() -> int:
    # without a terminal 80 columns, so that files and pipes are the same everywhere
    return min(shutil.get_terminal_size((80, 24)).columns, 100) if sys.stdout.isatty() else 80


def _show(text: str) -> None:
    from reconcile.report.text import ascii_only

    encoding = getattr(sys.stdout, "encoding", None) or "utf-8"
    try:
        "±²·→Đη".encode(encoding)
    except (UnicodeEncodeError, LookupError):
        text = ascii_only(text)
    click.echo(text, nl=False)


@main.command()
@_CASE
@_OUTSIDE
def check(case: Path, *, allow_outside: bool) -> None:
    """Read and check a case; say what will be used. Computes nothing."""
    from reconcile.pipeline import describe, load, prepare
    from reconcile.report.text import check_report

    prepared = prepare(load(case, allow_outside=allow_outside))
    head, summary = describe(prepared)
    _show(check_report(summary, head, width=_width()))


@main.command("reduce")
@_CASE
@_OUTSIDE
@_JSON
def reduce(case: Path, *, allow_outside: bool, as_json: bool) -> None:
    """Reduce each measurement alone, without the joint estimate."""
    from reconcile.pipeline import load, prepare, reduce_case
    from reconcile.report.text import reduction_report

    document = reduce_case(prepare(load(case, allow_outside=allow_outside)))
    _print(document, as_json=as_json, render=lambda d: reduction_report(d, width=_width()))


@main.command()
@_CASE
@_OUT
@_OUTSIDE
@_JSON
@_VERBOSE
@click.option(
    "--fail-on-contradiction", is_flag=True, help="Exit with 5 where the measurements contradict."
)
@click.pass_context
def run(  # noqa: PLR0913 - one parameter per option
    ctx: click.Context,
    case: Path,
    *,
    out: Path | None,
    allow_outside: bool,
    as_json: bool,
    verbose: bool,
    fail_on_contradiction: bool,
) -> None:
    """Reduce, estimate jointly and judge; print the answer."""
    from reconcile.pipeline import load, prepare, run_case
    from reconcile.report.files import write_all
    from reconcile.report.text import full_report

    document = run_case(prepare(load(case, allow_outside=allow_outside)))
    if out is not None:
        write_all(document, out, [case.parent / entry["path"] for entry in document["inputs"]])
    _print(
        document,
        as_json=as_json,
        render=lambda d: full_report(d, width=_width(), verbose=verbose),
    )
    if fail_on_contradiction and document["consistency"]["verdict"] in _CONTRADICTIONS:
        ctx.exit(5)


@main.command()
@click.argument("result", type=click.Path(path_type=Path), metavar="RESULT.json")
@_OUT
@_VERBOSE
def report(result: Path, *, out: Path | None, verbose: bool) -> None:
    """Redraw the reports of a result document, without fitting anything."""
    from reconcile.report.files import load_result, write_all
    from reconcile.report.text import full_report, reduction_report

    document = load_result(result)
    if out is not None:
        write_all(document, out)
    if document["estimate"] is None:
        _show(reduction_report(document, width=_width()))
    else:
        _show(full_report(document, width=_width(), verbose=verbose))


def _print(
    document: Mapping[str, Any], *, as_json: bool, render: Callable[[Mapping[str, Any]], str]
) -> None:
    from reconcile.result import to_json

    if as_json:
        click.echo(to_json(document), nl=False)
    else:
        _show(render(document))
