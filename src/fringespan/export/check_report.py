"""The report of a magnification check: one HTML page that needs nothing else, or a PDF."""

from __future__ import annotations

import html
import io
import math
import os
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib import metadata
from pathlib import Path
from typing import TYPE_CHECKING

from fringespan.crystal.notation import direction_text, indices_text
from fringespan.exceptions import SettingsError
from fringespan.export.check_figure import check_figure
from fringespan.export.check_text import check_lines, what_to_do
from fringespan.export.figure import figure_bytes, figure_style
from fringespan.export.log_text import conditions_text
from fringespan.export.measurement_figure import measurement_figure
from fringespan.export.plain_text import one_line
from fringespan.magnification.check import MagnificationCheck
from fringespan.magnification.conditions import Conditions
from fringespan.measurement import Measurement
from fringespan.output_file import write_whole_file
from fringespan.uncertainty import NOT_GIVEN, value_text

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["CheckReport", "write_check_report"]

REPORT_SUFFIXES = (".html", ".pdf")

_CARE = (
    "The result holds for the conditions stated, and for them only. It is evidence, not a certificate: where a quality system "
    "asks for one, its rules and an accredited laboratory decide."
)
_PAGE_MM = (210.0, 297.0)
_LINES_A_PAGE = 74
_TEXT_WIDTH = 92


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class CheckReport:
    """What a report is made of.

    Parameters
    ----------
    check : MagnificationCheck
    measurements : sequence of Measurement
        The regions that were checked.
    conditions : Conditions
    made_at : datetime, optional
        With its zone; default: the present.
    """

    check: MagnificationCheck
    measurements: Sequence[Measurement]
    conditions: Conditions
    made_at: datetime | None = None

    @property
    def by_picture(self) -> list[list[Measurement]]:
        """The measurements of each picture."""
        groups: list[list[Measurement]] = []
        for measurement in self.measurements:
            for group in groups:
                if group[0].micrograph is measurement.micrograph:
                    group.append(measurement)
                    break
            else:
                groups.append([measurement])
        return groups

    @property
    def facts(self) -> list[tuple[str, str]]:
        """Conditions, pictures with their checksums, program version: names and values."""
        c, check = self.conditions, self.check
        moment = self.made_at or datetime.now(UTC)
        facts = [
            ("Date", moment.astimezone(UTC).strftime("%Y-%m-%d %H:%M UTC")),
            ("Conditions", conditions_text(c)),
            ("Specimen", one_line(c.specimen) or NOT_GIVEN),
            ("Reference", one_line(check.reference)),
            (
                "Temperature",
                f"{check.temperature_c:g} degrees Celsius{'' if check.temperature_stated else ' (assumed, not measured)'}",
            ),
            ("Nominal pixel size", "{:.6g} nm (down) x {:.6g} nm (right)".format(*check.nominal_pixel_size_nm)),
            ("Remark", one_line(c.remark) or NOT_GIVEN),
            ("Program", f"fringespan {metadata.version('fringespan')}"),
        ]
        for group in self.by_picture:
            micrograph = group[0].micrograph
            facts.append((f"Picture {one_line(micrograph.name)}", f"SHA-256 {micrograph.sha256()}"))
        return facts


def write_check_report(report: CheckReport, path: str | os.PathLike[str]) -> Path:
    """Write a report, whole or not at all, in the form that the file name ends in: .html or .pdf.

    Raises
    ------
    SettingsError
        If it ends in neither.
    RecordError
        If it cannot be written.
    """
    suffix = Path(path).suffix.lower()
    if suffix not in REPORT_SUFFIXES:
        raise SettingsError(f"a report's file name must end in .html or .pdf, got {Path(path).name!r}")
    content = _html(report).encode("utf-8", errors="backslashreplace") if suffix == ".html" else _pdf(report)
    return write_whole_file(path, content)


# --- HTML -----------------------------------------------------------------------------------------------------------

_STYLE = """
body { font: 15px/1.45 system-ui, sans-serif; max-width: 62em; margin: 2em auto; padding: 0 1em;
       color: #1b1b1b; background: #fff; }
h1 { font-size: 1.5em; } h2 { font-size: 1.15em; margin-top: 1.8em; }
.result { border-left: 4px solid #0072b2; padding: .4em 1em; background: #f3f7fa; font-size: 1.05em; }
table { border-collapse: collapse; font-variant-numeric: tabular-nums; } .wide { overflow-x: auto; }
th, td { text-align: left; padding: .2em .9em .2em 0; border-bottom: 1px solid #ddd; vertical-align: top; }
td.n { text-align: right; } tr.out td { color: #8a3200; } figure { margin: 1em 0; } svg { max-width: 100%; height: auto; }
.quiet { color: #555; } .hash { font: 12px monospace; overflow-wrap: anywhere; }
@media print { body { margin: 0; max-width: none; } h2 { break-after: avoid; } figure, table { break-inside: avoid; } }
"""


def _html(report: CheckReport) -> str:
    check = report.check
    verdict = "" if check.tolerance is None else f" Verdict: {check.verdict}."
    parts = [
        "<!DOCTYPE html>\n<html lang=en><head><meta charset=utf-8>",
        '<meta name=viewport content="width=device-width, initial-scale=1">',
        f"<title>Magnification check: {_safe(check.reference)}</title><style>{_STYLE}</style></head><body>",
        "<h1>Magnification check</h1>",
        f'<p class="result">{_safe(check.sentence + verdict)}</p>',
        "<h2>Conditions</h2>",
        _html_facts(report.facts),
        "<h2>Reflections</h2>",
        _html_table(*_reflection_rows(check)),
        f"<figure>{_svg(check_figure(check), 'check')}<figcaption class=quiet>Reflections on the ellipses of the reference, and "
        "the length of each over the expected one.</figcaption></figure>",
        "<h2>Regions</h2>",
        _html_table(*_region_rows(check)),
    ]
    for budget in check.budgets:
        headings, rows = _budget_rows(check, budget.quantity)
        parts += [f"<h2>Uncertainty budget: {_safe(budget.quantity)}</h2>", _html_table(headings, rows)]
    parts.append(f"<p>{_safe(what_to_do(check))}</p>")
    if check.cautions:
        parts.append("<h2>Cautions</h2><ul>")
        parts += [f"<li><b>{c.gravity}:</b> {_safe(c.text)} {_safe(c.remedy)}</li>" for c in check.cautions]
        parts.append("</ul>")
    parts.append("<h2>Pictures</h2>")
    for number, group in enumerate(report.by_picture):
        parts.append(f"<figure>{_svg(measurement_figure(group), f'picture{number}')}</figure>")
    parts.append(f'<p class="quiet">{_safe(_CARE)}</p></body></html>\n')
    return "\n".join(parts)


def _safe(text: str) -> str:
    return html.escape(one_line(text))


def _html_facts(facts: Sequence[tuple[str, str]]) -> str:
    rows = [f"<tr><th>{_safe(name)}</th><td>{_safe(value)}</td></tr>" for name, value in facts]
    return f'<div class="wide"><table>{"".join(rows)}</table></div>'


def _html_table(headings: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    head = "".join(f"<th>{_safe(heading)}</th>" for heading in headings)
    lines = []
    for row in rows:
        out = ' class="out"' if "no" in row[-2:] else ""
        cells = "".join(f"<td{_number_class(cell)}>{_safe(cell)}</td>" for cell in row)
        lines.append(f"<tr{out}>{cells}</tr>")
    return f'<div class="wide"><table><thead><tr>{head}</tr></thead><tbody>{"".join(lines)}</tbody></table></div>'


def _number_class(cell: str) -> str:
    return ' class="n"' if cell[:1].isdigit() or (cell[:1] in "+-" and cell[1:2].isdigit()) else ""


def _svg(figure: Figure, name: str) -> str:
    """Return a figure as an element of the page; ids get a name of their own, so that figures don't share them."""
    text = figure_bytes(figure, "svg").decode("utf-8")
    text = text[text.index("<svg") :]
    for mark in ('id="', 'href="#', "url(#"):
        text = text.replace(mark, f"{mark}{name}-")
    return text


def _reflection_rows(check: MagnificationCheck) -> tuple[list[str], list[list[str]]]:
    headings = ["region", "hkl", "expected nm", "nominal nm", "corrected nm", "residual %", "in u", "used", "why not"]
    rows = [
        [
            r.region,
            NOT_GIVEN if r.hkl is None else indices_text(r.hkl),
            NOT_GIVEN if r.expected_d_nm is None else f"{r.expected_d_nm:.5f}",
            f"{r.nominal_d_nm:.5f}",
            NOT_GIVEN if r.corrected_d_nm is None else f"{r.corrected_d_nm:.5f}",
            NOT_GIVEN if r.deviation_percent is None else f"{r.deviation_percent:+.3f}",
            NOT_GIVEN if r.pull is None else f"{r.pull:+.1f}",
            "yes" if r.used else "no",
            r.reason,
        ]
        for r in check.reflections
    ]
    return headings, rows


def _region_rows(check: MagnificationCheck) -> tuple[list[str], list[list[str]]]:
    headings = ["picture", "region", "zone", "rows", "columns", "shear", "turn of the crystal (deg)"]
    rows = [
        [
            r.picture,
            r.name,
            NOT_GIVEN if r.zone is None else direction_text(r.zone),
            value_text(r.scale[0], r.scale_uncertainty[0]),
            value_text(r.scale[1], r.scale_uncertainty[1]),
            value_text(r.shear, r.shear_uncertainty),
            NOT_GIVEN if r.rotation_deg is None else f"{r.rotation_deg:.2f}",
        ]
        for r in check.regions
    ]
    return headings, rows


def _budget_rows(check: MagnificationCheck, quantity: str) -> tuple[list[str], list[list[str]]]:
    budget = next(b for b in check.budgets if b.quantity == quantity)
    headings = ["source", "standard uncertainty", "sensitivity", "u of the result (%)", "degrees of freedom", "note"]
    rows = [
        [
            line.source,
            f"{line.standard_uncertainty:.3g}",
            f"{line.sensitivity:.4g}",
            f"{100 * line.contribution:.4f}",
            _degrees(line.degrees_of_freedom),
            line.note,
        ]
        for line in budget.lines
    ]
    combined, expanded = budget.standard_uncertainty, budget.expanded_uncertainty(check.coverage)
    rows.append(["combined", "", "", f"{100 * combined:.4f}", _degrees(budget.degrees_of_freedom), ""])
    factor = expanded / combined if combined > 0 else check.coverage_factor
    rows.append(["expanded", "", f"{factor:.3g}", f"{100 * expanded:.4f}", "", check.coverage])
    return headings, rows


def _degrees(value: float) -> str:
    return "infinite" if math.isinf(value) else f"{value:.3g}"


# --- PDF ------------------------------------------------------------------------------------------------------------


def _pdf(report: CheckReport) -> bytes:
    from matplotlib.backends.backend_pdf import PdfPages

    content = io.BytesIO()
    lines = ["Magnification check", ""]
    for name, value in report.facts:
        lines += _wrapped(f"{name}: {value}")
    lines += ["", *(line.text for line in check_lines(report.check, _TEXT_WIDTH)), ""]
    lines += _wrapped(_CARE)
    with figure_style(), PdfPages(content, metadata={"CreationDate": None, "Title": "Magnification check"}) as pages:
        for start in range(0, len(lines), _LINES_A_PAGE):
            pages.savefig(_text_page(lines[start : start + _LINES_A_PAGE]))
        pages.savefig(check_figure(report.check))
        for group in report.by_picture:
            pages.savefig(measurement_figure(group))
    return content.getvalue()


def _wrapped(text: str) -> list[str]:
    from fringespan.export.plain_text import paragraph

    return [line.text for line in paragraph(text, _TEXT_WIDTH)]


def _text_page(lines: Sequence[str]) -> Figure:
    from matplotlib.figure import Figure

    width, height = (side / 25.4 for side in _PAGE_MM)
    page = Figure(figsize=(width, height))
    page.text(
        0.08,
        0.95,
        "\n".join(lines),
        va="top",
        family="DejaVu Sans Mono",
        fontsize=7.2,
        linespacing=1.3,
        parse_math=False,
    )
    return page
