"""The terminal report: the answer first, then agreement, findings, and the instruments."""

from __future__ import annotations

import textwrap
from typing import TYPE_CHECKING, Any

from reconcile.report.rounding import interval_text, scaled_unit, value_text

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

__all__ = ["ascii_only", "check_report", "full_report", "reduction_report"]

_FAMILY_LABELS = {"schulz-zimm": "Schulz–Zimm", "log-normal": "log-normal"}
_NAMES = {
    "dispersity": "Mw/Mn (Đ)",
    "limiting_viscosity_number": "[η]",
    "huggins_constant": "Huggins k",
    "kraemer_constant": "Kraemer k",
    "third_virial_ratio": "A3 ratio g",
}
_ORDER = (
    "Mn", "Mw", "Mz", "limiting_viscosity_number", "huggins_constant", "kraemer_constant", "Mv",
    "A2", "third_virial_ratio", "Rg", "dispersity",
)  # fmt: skip
_NO_UNCERTAINTY = "no uncertainty"

_ASCII = str.maketrans(
    {
        "±": "+/-",
        "²": "2",
        "³": "3",
        "·": ".",
        "→": "->",
        "–": "-",
        "—": "-",
        "≤": "<=",
        "≥": ">=",
        "Đ": "D",
        "η": "eta",
        "χ": "chi",
        "°": "deg ",
        "µ": "u",
        "θ": "theta",
        "λ": "lambda",
        "π": "pi",
        "ν": "nu",
        "₀": "0",
        "₂": "2",
        "₃": "3",
        "κ": "kappa",
        "×": "x",
        "−": "-",
        "’": "'",
        "…": "...",
        "√": "sqrt ",
        "∂": "d",
        "ρ": "rho",
        "σ": "sigma",
    }
)


def ascii_only(text: str) -> str:
    """Return the report in ASCII, for terminals that cannot show more."""
    return text.translate(_ASCII).encode("ascii", "replace").decode("ascii")


def full_report(document: Mapping[str, Any], *, width: int = 80, verbose: bool = False) -> str:
    """Return the whole report of a result document at most ``width`` columns wide."""
    page = _Page(width)
    _head(page, document)
    if document["estimate"] is not None:
        _answer(page, document)
        _agreement(page, document)
    _findings(page, document)
    _instruments(page, document, verbose=verbose)
    if document["estimate"] is not None:
        _beneath(page, document, verbose=verbose)
    _tail(page, document)
    return page.text()


def reduction_report(document: Mapping[str, Any], *, width: int = 80) -> str:
    """Return the per-technique reductions alone."""
    page = _Page(width)
    _head(page, document)
    _instruments(page, document, verbose=True)
    _findings(page, document)
    return page.text()


class _Page:
    """Lines of a report that never pass the width."""

    def __init__(self, width: int) -> None:
        self._width = max(width, 40)
        self._lines: list[str] = []

    def heading(self, title: str) -> None:
        if self._lines:
            self._lines.append("")
        self._lines += textwrap.wrap(title, self._width)
        self._lines.append("-" * min(len(title), self._width))

    def line(self, text: str = "", indent: int = 0, hang: int | None = None) -> None:
        if not text:
            self._lines.append("")
            return
        self._lines += textwrap.wrap(
            text,
            self._width,
            initial_indent=" " * indent,
            subsequent_indent=" " * (indent if hang is None else hang),
            break_long_words=True,
            break_on_hyphens=False,
        )

    def table(self, rows: Sequence[Sequence[str]], indent: int = 2) -> None:
        """Add rows of cells; the last column wraps within what is left of the width."""
        if not rows:
            return
        widths = [max(len(row[i]) for row in rows) for i in range(len(rows[0]) - 1)]
        start = indent + sum(widths) + 2 * len(widths)
        for row in rows:
            head = "  ".join(cell.ljust(w) for cell, w in zip(row, widths, strict=False))
            if start > self._width - 20:
                self.line("  ".join(cell for cell in row if cell), indent, indent + 4)
            else:
                self._lines += textwrap.wrap(
                    row[-1],
                    self._width,
                    initial_indent=" " * indent + head + "  ",
                    subsequent_indent=" " * start,
                    break_on_hyphens=False,
                ) or [" " * indent + head.rstrip()]

    def text(self) -> str:
        return "\n".join(line.rstrip() for line in self._lines) + "\n"


def _head(page: _Page, document: Mapping[str, Any]) -> None:
    case = document["case"]
    page.line(f"{case['name']} – {case['polymer']}")
    count = len(document["measurements"])
    page.line(f"{count} measurement{'s' if count != 1 else ''} in {case['file']}")


def _answer(page: _Page, document: Mapping[str, Any]) -> None:
    page.heading("Answer")
    estimate = document["estimate"]
    rows = [
        _answer_row(_NAMES.get(name, name), estimate["averages"][name])
        for name in ("dispersity", "Mn", "Mw", "Mz")
    ]
    rows += [
        _answer_row(f"Mv (a = {entry['exponent']:g}, {entry['measurement']})", entry)
        for entry in estimate["viscosity_averages"]
    ]
    _compact(page, rows)
    page.line(_families_of_mz(estimate), 2, 4)
    limit = estimate["averages"]["dispersity"]["expected_limit95"]
    if limit is not None:
        reading = estimate["averages"]["dispersity"]["reading"]
        sign = "≤" if reading == "upper limit" else "≥"
        page.line(f"Readings in perfect agreement would have given Đ {sign} {limit:.3g} (95 %).", 2)
    page.line()
    consistency = document["consistency"]
    page.line(f"Verdict: {consistency['verdict']}. {consistency['statement']}", 2, 2)
    if consistency["verdict"] == "contradiction":
        page.line("While they contradict each other, no interval above holds.", 2)
    for entry in document["limits"]:
        page.line(_limit_sentence(entry), 2, 4)
    if document["limits"]:
        page.line("Release decisions belong to qualified people under local rules.", 2)


def _families_of_mz(estimate: Mapping[str, Any]) -> str:
    parts = [
        f"{_FAMILY_LABELS[name]} {_mass_interval(fit['averages']['Mz'])}"
        for name, fit in sorted(estimate["families"].items(), reverse=True)
    ]
    return f"Mz rests on the family: {', '.join(parts)} (95 %)."


def _compact(page: _Page, rows: list[tuple[str, str, str]]) -> None:
    """Lay out label, value, interval; long labels get a line of their own."""
    short = [row for row in rows if len(row[0]) <= 24]
    width = max(len(row[0]) for row in short)
    middle = max(len(row[1]) for row in rows)
    for label, value, interval in rows:
        if len(label) > width:
            page.line(label, 2)
            label = ""  # noqa: PLW2901 - the label has been printed
        page.line(f"{label:<{width}}  {value:<{middle}}  {interval}", 2, 4 + width)


def _answer_row(label: str, entry: Mapping[str, Any]) -> tuple[str, str, str]:
    factor, unit = scaled_unit(entry["unit"], _size(entry))
    low, high = (None if end is None else end * factor for end in entry["interval95"])
    if entry["reading"] == "undetermined":
        return label, "undetermined", "these data do not bound it"
    interval = f"{interval_text(low, high)} {unit}".strip()
    if entry["reading"] != "interval":
        return label, interval, "(95 %)"
    # a closed interval has both ends; its half width over 1.96 sets the digits of the value
    half = (high - low) / 3.92 if low is not None and high is not None else None
    value = None if entry["value"] is None else entry["value"] * factor
    shown = value_text(value, half).split(" ±")[0].strip("(")
    return label, f"{shown} {unit}".strip(), f"95 %: {interval}"


def _size(entry: Mapping[str, Any]) -> float | None:
    """Return the number that sets an entry's unit: its finite limit, else its value."""
    ends = [end for end in entry["interval95"] if end is not None]
    size: float | None = ends[0] if entry["reading"] != "interval" and ends else entry["value"]
    return size


def _mass_interval(entry: Mapping[str, Any]) -> str:
    low, high = entry["interval95"]
    factor, unit = scaled_unit(entry["unit"], low or high)
    ends = (None if end is None else end * factor for end in (low, high))
    return f"{interval_text(*ends)} {unit}".strip()


def _count(n: int, noun: str) -> str:
    return f"{n} {noun}" if n == 1 else f"{n} {noun}s"


def _limit_sentence(entry: Mapping[str, Any]) -> str:
    low, high = entry["limit"]
    unit = "" if entry["quantity"] == "dispersity" else "g/mol"
    factor, unit = scaled_unit(unit or "1", high or low)
    text = interval_text(
        None if low is None else low * factor, None if high is None else high * factor
    )
    probability = entry["probability_met"]
    name = _NAMES.get(entry["quantity"], entry["quantity"])
    if probability is None:
        return f"Limit {name} {text} {unit}".rstrip() + ": these data do not decide it."
    shown = (
        f"{probability:.2f}"
        if 0.005 < probability < 0.995
        else ("> 0.99" if probability >= 0.995 else "< 0.01")
    )
    return (
        f"Limit {name} {text} {unit}".rstrip()
        + f": probability that the true value meets it {shown}."
    )


def _agreement(page: _Page, document: Mapping[str, Any]) -> None:
    page.heading("Agreement")
    consistency = document["consistency"]
    rows = []
    for entry in consistency["residuals"]:
        z = "no freedom" if entry["z"] is None else f"z = {round(entry['z'], 1) + 0.0:+.1f}"
        rows.append((_NAMES.get(entry["quantity"], entry["quantity"]), z, entry["measurement"]))
    page.table(rows)
    if consistency["p_value"] is not None:
        page.line(
            f"χ² = {consistency['chi2']:.2f} for {_count(consistency['dof'], 'degree')} of freedom",
            2,
        )
    free = document["family_free"]
    bound = free["dispersity"]
    if bound["lower"] is not None and free["possible"]:
        text = interval_text(bound["lower"], bound["upper"])
        page.line(f"Whatever the distribution's shape, Đ {text} (95 %, from averages alone).", 2)
    sources = [e["measurement"] for e in consistency["residuals"] if e["quantity"] == "Mn"]
    if len(sources) == 1 and len(consistency["residuals"]) > 1:
        page.line(
            f"A fault in {sources[0]}, the only Mn, would change Đ and show in nothing here.", 2
        )
    page.line(
        "Not assessed yet: which fault would explain a disagreement, and which faults these data"
        " could not show.",
        2,
    )


def _findings(page: _Page, document: Mapping[str, Any]) -> None:
    found = [f for m in document["measurements"] for f in m["findings"]] + document["findings"]
    if not found:
        return
    order = {"warning": 0, "caution": 1, "note": 2}
    page.heading("Findings")
    for entry in sorted(found, key=lambda f: order[f["severity"]]):
        where = f"{entry['measurement']}: " if entry["measurement"] else ""
        page.line(f"{entry['severity']}: {where}{entry['text']}.", 2, 4)
        page.line(f"→ {entry['remedy']}.", 4, 6)


def _instruments(page: _Page, document: Mapping[str, Any], *, verbose: bool) -> None:
    for entry in document["measurements"]:
        page.heading(f"{entry['name']} ({entry['technique'].replace('_', ' ')})")
        page.line(_medium(entry) + entry["form"], 2, 4)
        rows = [_quantity_row(name, value) for name, value in _ordered(entry["quantities"])]
        _compact(page, rows)
        if any("[±" in row[1] for row in rows):
            page.line("± is the standard uncertainty, in brackets with shared effects.", 2)
        for text in entry["assumptions"]:
            page.line(f"assumed: {text}.", 2, 4)
        if entry["alternatives"]:
            page.line("Other published forms:", 2)
            for other in entry["alternatives"]:
                page.line(f"{other['form']}: {_inline(other['quantities'])}", 4, 6)
        if verbose:
            _reading_table(page, entry)


def _medium(entry: Mapping[str, Any]) -> str:
    parts = []
    if entry["solvent"]:
        parts.append(entry["solvent"])
    if entry["temperature_K"] is not None:
        parts.append(f"{entry['temperature_K'] - 273.15:.4g} °C")
    return f"{', '.join(parts)}. " if parts else ""


def _quantity_row(name: str, entry: Mapping[str, Any]) -> tuple[str, str, str]:
    factor, unit = scaled_unit(entry["unit"], entry["value"])
    low, high = (None if end is None else end * factor for end in entry["interval95"])
    label = _NAMES.get(name, name)
    if entry["reading"] != "interval":
        factor, unit = scaled_unit(entry["unit"], _size(entry))
        low, high = (None if end is None else end * factor for end in entry["interval95"])
        return label, f"{interval_text(low, high)} {unit}".strip(), entry["why"] or "(95 %)"
    if entry["value"] is None:
        return label, "–", entry["why"]
    value = entry["value"] * factor
    if entry["u"] is None:
        why = entry["why"] or _NO_UNCERTAINTY
        return label, f"{value_text(value)} {unit}".strip(), f"({_NO_UNCERTAINTY}: {why})"
    total = entry["u_with_effects"]
    with_effects = None if total is None or total <= 1.005 * entry["u"] else total * factor
    shown = value_text(value, entry["u"] * factor, with_effects)
    return label, f"{shown} {unit}".strip(), f"95 %: {interval_text(low, high)}"


def _ordered(quantities: Mapping[str, Any]) -> list[tuple[str, Any]]:
    rank = {name: i for i, name in enumerate(_ORDER)}
    return sorted(quantities.items(), key=lambda item: rank.get(item[0], len(rank)))


def _inline(quantities: Mapping[str, Any]) -> str:
    parts = []
    for name, entry in _ordered(quantities):
        factor, unit = scaled_unit(entry["unit"], entry["value"])
        u = None if entry["u"] is None else entry["u"] * factor
        value = None if entry["value"] is None else entry["value"] * factor
        shown = f"{value_text(value, u)} {unit}".strip() if value is not None else "not resolved"
        parts.append(f"{_NAMES.get(name, name)} {shown}")
    return "; ".join(parts)


def _reading_table(page: _Page, entry: Mapping[str, Any]) -> None:
    columns = entry["readings"]
    if not columns:
        return
    names = [column["heading"] for column in columns]
    page.line("Readings and fit:", 2)
    cells = [[f"{x:.5g}" if x is not None else "–" for x in column["values"]] for column in columns]
    widths = [max([8, *(len(c) for c in column)]) for column in cells]
    for i, name in enumerate(names):
        page.line(f"({i + 1}) {name}", 4)
    page.line("  ".join(f"({i + 1})".rjust(w) for i, w in enumerate(widths)), 4)
    for row in zip(*cells, strict=True):
        page.line("  ".join(c.rjust(w) for c, w in zip(row, widths, strict=True)), 4)


def _beneath(page: _Page, document: Mapping[str, Any], *, verbose: bool) -> None:
    page.heading("Beneath the answer")
    estimate = document["estimate"]
    for name, fit in estimate["families"].items():
        d = fit["averages"]["dispersity"]
        page.line(
            f"{_FAMILY_LABELS[name]}: Đ {interval_text(*d['interval95'])} (95 %),"
            f" weight {fit['weight']:.2f}, χ² {fit['chi2']:.2f}",
            2,
            4,
        )
    if verbose and estimate["budget"]:
        page.line("Share of the variance of ln Đ:", 2)
        ranked = sorted(estimate["budget"], key=lambda e: -e["share"])
        page.table(
            [(f"{100 * e['share']:5.1f} %", f"{e['source']} ({e['kind']})") for e in ranked], 4
        )
    check = estimate["self_check"]
    page.line(
        f"Numerical self-check {'passed' if check['passed'] else 'FAILED'}"
        f" (effective fraction {check['effective_fraction']:.3f}).",
        2,
    )


def _tail(page: _Page, document: Mapping[str, Any]) -> None:
    page.line()
    page.line(
        "Solvents, lasers and hot or pressurised cells: follow local codes and licensed practice."
    )
    software = document["software"]
    page.line(f"reconcile {software['reconcile']}, case digest {document['case']['digest'][:12]}")


def check_report(summary: Sequence[Mapping[str, Any]], head: str, *, width: int = 80) -> str:
    """Return what `check` says: each measurement with what will be used of it."""
    page = _Page(width)
    page.line(head)
    for entry in summary:
        page.heading(entry["title"])
        for line in entry["lines"]:
            page.line(line, 2, 4)
    page.line()
    page.line(f"{_count(len(summary), 'measurement')} can be used.")
    return page.text()
