"""Writes ``validation/REPORT.md`` from runs of every case: expected, got, difference, origin.

Run from the root of the repository: ``python -m validation.report``. The text depends on nothing
but the results, shown to the digits compared, so that the same program gives the same text.
"""

from __future__ import annotations

import contextlib
import io
import sys
from pathlib import Path
from types import ModuleType

from validation.baran_wu_33 import case as baran_wu_33
from validation.closed_forms import case as closed_forms
from validation.comparison import Comparison
from validation.economics import case as economics
from validation.ieee13 import case as ieee13
from validation.ieee1366 import case as ieee1366
from validation.line_constants import case as line_constants
from validation.reliability import case as reliability
from validation.stochastic_programs import case as stochastic_programs
from validation.trade_tables import case as trade_tables

REPORT = Path(__file__).resolve().parent / "REPORT.md"

CASES: tuple[ModuleType, ...] = (
    baran_wu_33,
    ieee13,
    line_constants,
    reliability,
    ieee1366,
    closed_forms,
    stochastic_programs,
    economics,
    trade_tables,
)

HEAD = """# Validation report

Figures from outside the program beside the program's own. Written by `python -m validation.report`;
a test writes it again and compares.

Where an expected value comes from:

- *published*: read in a publication or a public copy of its tables
- *recalled and reproduced*: from memory of the publication, and reproduced by a calculation that
  shares no code with the program
- *independent calculation*: other code on the published input data
- *closed form*: a formula
- *common practice*: figures of the trade or of a standard, recalled

Differences and tolerances are rounded; every case has its sources and reasons in its folder.
"""


def report_text() -> str:
    """The whole report."""
    parts = [HEAD]
    summary, sections = [], []
    for case in CASES:
        found: list[Comparison] = case.compare()
        agree = sum(c.agrees for c in found)
        summary.append(f"| {case.TITLE} | {len(found)} | {agree} |")
        sections.append(_section(case, found))
    parts.append("| case | figures | agree |\n| --- | --- | --- |\n" + "\n".join(summary) + "\n")
    return "\n".join([*parts, *sections])


def _section(case: ModuleType, found: list[Comparison]) -> str:
    """One case: source, notes, its table, the reasons of its tolerances."""
    folder = Path(str(case.__file__)).parent.name
    lines = [f"## {case.TITLE}", "", f"Source: {case.SOURCE}. Folder: `validation/{folder}`."]
    lines += ["", *(f"- {note}" for note in case.NOTES)] if case.NOTES else []
    reasons = list(dict.fromkeys(c.reason for c in found))
    lines += ["", "| figure | unit | expected | got | difference | allowed | origin | agrees |"]
    lines.append("| --- | --- | --- | --- | --- | --- | --- | --- |")
    for c in found:
        got = _number(c.got, c.digits)
        # Of the figures as shown, so that noise far below them does not show.
        difference = float(got) - float(_number(c.expected, c.digits))
        note = f" ({reasons.index(c.reason) + 1})" if len(reasons) > 1 else ""
        cells = [
            c.quantity,
            c.unit,
            _number(c.expected, c.digits),
            got,
            _number(difference, c.digits),
            f"{c.tolerance:.2g}{note}",
            str(c.origin),
            "yes" if c.agrees else "NO",
        ]
        lines.append("| " + " | ".join(cells) + " |")
    lines += ["", "Why these tolerances:", ""]
    lines += [
        f"{i}. {reason}" if len(reasons) > 1 else reason for i, reason in enumerate(reasons, 1)
    ]
    return "\n".join(lines) + "\n"


def _number(value: float, digits: int) -> str:
    """Fixed decimals; no minus before 0."""
    text = f"{value:.{digits}f}"
    return text.removeprefix("-") if float(text) == 0.0 else text


def main() -> int:
    """Writes the report; exit status 1 if a figure does not agree."""
    # Runs of the whole program print the path of their results; here they are only noise.
    with contextlib.redirect_stdout(io.StringIO()):
        text = report_text()
        failed = [c.quantity for case in CASES for c in case.compare() if not c.agrees]
    REPORT.write_text(text, encoding="utf-8")
    print(f"{REPORT}: {len(failed)} figures do not agree" if failed else f"{REPORT}: all agree")
    return 1 if failed else 0


if __name__ == "__main__":
    sys.exit(main())
