"""Writing and reading result files: never a half-written one, never over an input."""

from __future__ import annotations

import csv
import io
import json
import os
import tempfile
from pathlib import Path
from typing import TYPE_CHECKING, Any

from reconcile.errors import InputError, Problem
from reconcile.report.text import full_report, reduction_report
from reconcile.result import to_json
from reconcile.schema import validate

if TYPE_CHECKING:
    from collections.abc import Iterable, Mapping

__all__ = ["load_result", "write_all", "write_text"]

_MAX_BYTES = 50_000_000


def write_text(path: Path, text: str) -> None:
    """Write a file whole or not at all: to a temporary name, then in its place."""
    handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
    try:
        with os.fdopen(handle, "w", encoding="utf-8", newline="\n") as stream:
            stream.write(text)
            stream.flush()
            os.fsync(stream.fileno())
        umask = os.umask(0)
        os.umask(umask)
        Path(temporary).chmod(0o666 & ~umask)
        Path(temporary).replace(path)
    finally:
        # gone already where it took its place; left behind by whatever stopped us before that
        Path(temporary).unlink(missing_ok=True)


def write_all(document: Mapping[str, Any], out: Path, inputs: Iterable[Path] = ()) -> None:
    """Write result.json, report.txt and the tables of a result document to a folder.

    Parameters
    ----------
    document : mapping
    out : Path
        The folder; made if it does not exist.
    inputs : iterable of Path
        Files that must not be written over.

    Raises
    ------
    InputError
        If the folder cannot be made or written to, or an input lies where a file would go.
    """
    files = {"result.json": to_json(document), "quantities.csv": _quantities_csv(document)}
    if document["estimate"] is None:
        files["report.txt"] = reduction_report(document)
    else:
        files["report.txt"] = full_report(document, verbose=True)
        files["distribution.csv"] = _curves_csv(document)
    kept = {path.resolve() for path in inputs}
    problems = [
        Problem(str(out / name), 0, "", "is an input of this case", "give --out another folder")
        for name in files
        if (out / name).resolve() in kept
    ]
    if problems:
        raise InputError(problems)
    try:
        out.mkdir(parents=True, exist_ok=True)
        for name, text in files.items():
            write_text(out / name, text)
    except OSError as error:
        remedy = "give --out a folder that can be written to"
        raise InputError([Problem(str(out), 0, "", str(error.strerror), remedy)]) from error


def load_result(path: Path) -> dict[str, Any]:
    """Read and check a result document.

    Raises
    ------
    InputError
        If it cannot be read, is not JSON or is not a result document.
    """
    shown = str(path)
    try:
        if path.stat().st_size > _MAX_BYTES:
            raise InputError([Problem(shown, 0, "", "is larger than 50 MB", "give a result.json")])
        document = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        remedy = "give the result.json that `reconcile run --out` wrote"
        raise InputError([Problem(shown, 0, "", str(error.strerror), remedy)]) from error
    except (UnicodeDecodeError, RecursionError, ValueError) as error:
        remedy = "give the result.json that `reconcile run --out` wrote"
        raise InputError([Problem(shown, 0, "", "is not JSON", remedy)]) from error
    problems = [
        Problem(shown, 0, entry.place, entry.text, entry.remedy)
        for entry in validate(document, "result-1")
    ]
    if not problems:
        problems = [
            Problem(shown, 0, f"measurements[{i}].readings", "columns of different lengths")
            for i, entry in enumerate(document["measurements"])
            if len({len(column["values"]) for column in entry["readings"]}) > 1
        ]
    if problems:
        raise InputError(problems[:10])
    assert isinstance(document, dict)  # noqa: S101 - the schema has said so
    return document


def _safe(text: Any) -> Any:
    """Return a cell that a spreadsheet will not run as a formula."""
    if isinstance(text, str) and text[:1] in {"=", "+", "-", "@", "\t", "\r"}:
        return f"'{text}"
    return text


def _csv(rows: list[list[Any]]) -> str:
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerows([[_safe("" if cell is None else cell) for cell in row] for row in rows])
    return stream.getvalue()


def _quantities_csv(document: Mapping[str, Any]) -> str:
    rows: list[list[Any]] = [
        [
            "measurement",
            "technique",
            "form",
            "quantity",
            "unit",
            "value",
            "standard uncertainty",
            "with shared effects",
            "95 % low",
            "95 % high",
            "reading",
        ]
    ]
    for entry in document["measurements"]:
        forms = [(entry["form"], entry["quantities"])]
        forms += [(other["form"], other["quantities"]) for other in entry["alternatives"]]
        for form, quantities in forms:
            for name, q in quantities.items():
                rows.append(
                    [
                        entry["name"],
                        entry["technique"],
                        form,
                        name,
                        q["unit"],
                        q["value"],
                        q["u"],
                        q["u_with_effects"],
                        *q["interval95"],
                        q["reading"] if q["u"] is not None or q["reading"] != "interval" else "",
                    ]
                )
    for form, averages in _joint(document):
        rows += [
            ["joint estimate", "", form, name, a["unit"], a["value"], None, None,
             *a["interval95"], a["reading"]]
            for name, a in averages.items()
        ]  # fmt: skip
    return _csv(rows)


def _joint(document: Mapping[str, Any]) -> list[tuple[str, Any]]:
    """Return the averages of the joint estimate and of each family alone, if there are any."""
    estimate = document["estimate"]
    if estimate is None:
        return []
    own = [(f"{name} alone", fit["averages"]) for name, fit in estimate["families"].items()]
    return [("families averaged", estimate["averages"]), *own]


def _curves_csv(document: Mapping[str, Any]) -> str:
    curves = document["estimate"]["curves"]
    # the molar mass first, then the families
    names = sorted(curves, key=lambda name: (not name.startswith("M "), name))
    return _csv([names, *[list(row) for row in zip(*(curves[n] for n in names), strict=True)]])
