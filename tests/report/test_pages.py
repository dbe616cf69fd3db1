"""What a reader sees: charts say what they show, nothing is cut off, pages fit A4 and Letter."""

from __future__ import annotations

import re
import shutil
import subprocess
import zipfile
from collections import Counter
from pathlib import Path
from typing import Any
from xml.etree import ElementTree

import openpyxl
import pytest
from openpyxl.cell.cell import MergedCell
from openpyxl.utils import get_column_letter, range_boundaries

from xlplan.report.room import lines_needed

from .test_recalculation import PROFILE

CHART = "{http://schemas.openxmlformats.org/drawingml/2006/chart}"
DRAWING = "{http://schemas.openxmlformats.org/drawingml/2006/main}"
FRAME = "{http://schemas.openxmlformats.org/drawingml/2006/spreadsheetDrawing}"
UNIT = re.compile(
    r"\((crowns|crowns/year|EUR|EUR/year|h|h/year|kWh|kWh/year|kW|%|s|p\.u\.)\)|1 = all"
)
EVENTS = "(per year)"

# -- charts ---------------------------------------------------------------------------------------


def chart_parts(path: Path) -> list[ElementTree.Element]:
    with zipfile.ZipFile(path) as package:
        names = [n for n in package.namelist() if n.startswith("xl/charts/chart")]
        return [ElementTree.fromstring(package.read(name)) for name in names]


def alt_texts(path: Path) -> list[str]:
    with zipfile.ZipFile(path) as package:
        names = [n for n in package.namelist() if re.match(r"xl/drawings/drawing\d+\.xml", n)]
        frames = [ElementTree.fromstring(package.read(name)) for name in names]
    return [tag.get("descr", "") for frame in frames for tag in frame.iter(f"{FRAME}cNvPr")]


def title_of(element: ElementTree.Element) -> str:
    title = element.find(f"{CHART}title")
    return "" if title is None else "".join(t.text or "" for t in title.iter(f"{DRAWING}t"))


def check_charts(path: Path) -> None:
    """Every chart has a title, titles on its axes, units on those of numbers, and a text for it."""
    parts, texts = chart_parts(path), alt_texts(path)
    assert len(parts) == len(texts) > 10
    assert all(len(text) >= 30 for text in texts), texts
    for part in parts:
        chart = part.find(f"{CHART}chart")
        assert chart is not None
        title = title_of(chart)
        assert title
        plot = chart.find(f"{CHART}plotArea")
        assert plot is not None
        axes = [a for a in plot if a.tag in (f"{CHART}catAx", f"{CHART}valAx")]
        assert len(axes) == 2, title
        hidden = [a.find(f"{CHART}delete") for a in axes]
        if all(h is not None and h.get("val") == "1" for h in hidden):
            # The drawing of the feeder: a plan without a scale. Its legend says what is what.
            assert chart.find(f"{CHART}legend") is not None
            continue
        for axis in axes:
            words = title_of(axis)
            assert words, f"{title}: an axis without title"
            if axis.tag == f"{CHART}valAx":
                assert UNIT.search(words) or EVENTS in words, f"{title}: {words} has no unit"


def test_charts_say_what_they_show(workbook_path: Path) -> None:
    check_charts(workbook_path)
    shown = [title_of(part.find(f"{CHART}chart")) for part in chart_parts(workbook_path)]  # type: ignore[arg-type]
    assert len(shown) == 24
    assert {"Normal service", "Cost of a year, by percentile"} <= set(shown)


def test_a_chart_without_axis_title_would_be_seen(workbook_path: Path, tmp_path: Path) -> None:
    target = tmp_path / "bare.xlsx"
    with zipfile.ZipFile(workbook_path) as old, zipfile.ZipFile(target, "w") as new:
        for name in old.namelist():
            data = old.read(name)
            if name == "xl/charts/chart1.xml":
                data = data.replace(b"(crowns/year)", b"")
            new.writestr(name, data)
    with pytest.raises(AssertionError, match="has no unit"):
        check_charts(target)


def test_parts_of_the_feeder_differ_in_more_than_colour(workbook_path: Path) -> None:
    """Marker and dash of live, cut off and dead are all different, and names carry the word."""
    markers, dashes, names = {}, {}, set()
    for part in chart_parts(workbook_path):
        for one in part.iter(f"{CHART}ser"):
            name = "".join(t.text or "" for t in one.iter(f"{CHART}v"))[:40]
            symbol = one.find(f"{CHART}marker/{CHART}symbol")
            dash = one.find(f"{CHART}spPr/{DRAWING}ln/{DRAWING}prstDash")
            for word in ("live", "cut off", "dead"):
                if name.startswith(f"bus {word}") and symbol is not None:
                    markers[word] = symbol.get("val")
                if name.startswith(f"line {word}"):
                    dashes[word] = "solid" if dash is None else dash.get("val")
            names |= {t.text for t in one.iter(f"{DRAWING}t") if t.text}
    assert len(set(markers.values())) == len(markers) == 3
    assert len(set(dashes.values())) == len(dashes) >= 2
    assert any(name.endswith("(dead)") for name in names)
    assert any(name.endswith("(cut off)") for name in names)


# -- nothing is cut off ---------------------------------------------------------------------------

STANDARD_POINTS, LINE_POINTS = 15.0, 12.75
CHARS = {True: 1.0, False: 1.15}
"""Characters of bold and of plain Arial 10 in a unit of column width."""

WHOLE_LINE = 8
LEAST_POINTS = 6.4
"""Smallest print on A4 that a page may shrink the body text of 10 points to."""

A4_PIXELS = (297.0 / 25.4 - 0.8) * 96.0


def cut_texts(path: Path) -> list[str]:
    """Texts that do not fit their cells, where they cannot run over empty ones beside them."""
    found = []
    for sheet in openpyxl.load_workbook(path, data_only=True):
        widths, last_col = printed_widths(sheet)
        merged = {(m.min_row, m.min_col): m for m in sheet.merged_cells.ranges}
        for row in sheet.iter_rows(max_col=last_col):
            for cell in row:
                if isinstance(cell, MergedCell) or cell.value is None:
                    continue
                if isinstance(cell.value, int | float):
                    if digits_room(cell) > widths[cell.column - 1]:
                        found.append(f"{sheet.title}!{cell.coordinate} {cell.value}: ####")
                    continue
                if not isinstance(cell.value, str):
                    continue
                size = (cell.font.sz or 10.0) / 10.0
                span = merged.get((cell.row, cell.column))
                end = span.max_col if span is not None else cell.column
                # Over a whole line capitals and figures weigh less than in a heading.
                is_line = end - cell.column >= WHOLE_LINE
                chars = CHARS[bool(cell.font.b) and not is_line] / size
                if not cell.alignment.wrap_text and cell.alignment.horizontal != "right":
                    while end < last_col and is_empty(sheet, cell.row, end + 1):
                        end += 1
                room = chars * sum(widths[cell.column - 1 : end])
                place = f"{sheet.title}!{cell.coordinate} {cell.value[:60]}"
                if not cell.alignment.wrap_text:
                    if len(cell.value) > 1.07 * room:
                        found.append(f"{place}: runs over")
                    continue
                words = cell.value.replace("-", "- ").replace("/", "/ ").split()
                if span is None and cell.font.b and max(map(len, words)) > 1.04 * room:
                    found.append(f"{place}: breaks a word")
                rows = range(cell.row, (span.max_row if span is not None else cell.row) + 1)
                standard = sheet.sheet_format.defaultRowHeight or STANDARD_POINTS
                points = sum(sheet.row_dimensions[r].height or standard for r in rows)
                if lines_needed(cell.value, room) * LINE_POINTS * size > points + 1.0:
                    found.append(f"{place}: too low")
    return found


def digits_room(cell: Any) -> float:
    """Width in characters that a number needs: digits, commas at half a digit, sign, padding."""
    first = cell.number_format.split(";")[0]
    decimals = len(first.partition(".")[2].split("_")[0].strip("%")) if "." in first else 0
    if "E+" in first or first == "General":
        return 0.0
    value = cell.value * 100.0 if "%" in first else cell.value
    whole = len(f"{abs(value):.{decimals}f}".partition(".")[0])
    commas = (whole - 1) // 3 if "," in first else 0
    signs = 1.0 if value < 0.0 or first.startswith("+") else 0.0
    percent = 1.6 if "%" in first else 0.0
    pad = 1.0 if "_W" in first else 0.0
    return whole + 0.5 * commas + (decimals + 0.5 if decimals else 0.0) + signs + percent + pad


def is_empty(sheet: Any, row: int, col: int) -> bool:
    cell = sheet.cell(row, col)
    return cell.value is None and not isinstance(cell, MergedCell)


def printed_widths(sheet: Any) -> tuple[list[float], int]:
    """Widths of all columns in characters, and the last one printed."""
    _, _, last_col, _ = range_boundaries(str(sheet.print_area).rsplit("!", 1)[-1].replace("$", ""))
    widths = []
    for col in range(1, last_col + 1):
        letter = get_column_letter(col)
        found = [d.width - 0.71 for d in sheet.column_dimensions.values() if d.min <= col <= d.max]
        assert letter
        widths.append(found[0] if found else 8.43)
    return widths, last_col


def check_pages(path: Path) -> None:
    """No text is cut off, and no sheet is so wide that its print becomes too small to read."""
    assert cut_texts(path) == []
    for sheet in openpyxl.load_workbook(path):
        widths, _ = printed_widths(sheet)
        points = 10.0 * min(1.0, A4_PIXELS / sum(7.0 * width + 5.0 for width in widths))
        assert points >= LEAST_POINTS, f"{sheet.title}: {points:.1f} points"


def test_nothing_is_cut_off_and_print_is_large_enough(workbook_path: Path) -> None:
    check_pages(workbook_path)


def test_a_text_cut_off_would_be_seen(workbook_path: Path, tmp_path: Path) -> None:
    book = openpyxl.load_workbook(workbook_path)
    book["Operation"]["A2"] = "far too long " * 40
    book.save(tmp_path / "long.xlsx")
    assert [text for text in cut_texts(tmp_path / "long.xlsx") if "far too long" in text]


# -- printed --------------------------------------------------------------------------------------

PAPERS = {"A4": b"9", "Letter": b"1"}


@pytest.mark.skipif(
    not (shutil.which("soffice") and shutil.which("pdftotext")),
    reason="LibreOffice or pdftotext is not installed",
)
def test_pages_fit_both_papers(workbook_path: Path, tmp_path: Path) -> None:
    """One page for the board; sheets with breaks never spill over to the right."""
    user = tmp_path / "profile" / "user"
    user.mkdir(parents=True)
    (user / "registrymodifications.xcu").write_text(PROFILE, encoding="utf-8")
    for paper, code in PAPERS.items():
        with (
            zipfile.ZipFile(workbook_path) as old,
            zipfile.ZipFile(tmp_path / f"{paper}.xlsx", "w") as new,
        ):
            for name in old.namelist():
                data = old.read(name)
                if name.startswith("xl/worksheets/sheet"):
                    assert b'paperSize="9"' in data
                    data = data.replace(b'paperSize="9"', b'paperSize="' + code + b'"')
                new.writestr(name, data)
    profile = f"-env:UserInstallation={(tmp_path / 'profile').as_uri()}"
    command = ["soffice", profile, "--headless", "--convert-to", "pdf", "--outdir", str(tmp_path)]
    papers = [str(tmp_path / f"{paper}.xlsx") for paper in PAPERS]
    subprocess.run([*command, *papers], check=True, capture_output=True, timeout=300)
    book = openpyxl.load_workbook(workbook_path)
    for paper in PAPERS:
        text = subprocess.run(
            ["pdftotext", "-layout", str(tmp_path / f"{paper}.pdf"), "-"],
            check=True,
            capture_output=True,
            text=True,
        ).stdout
        footers = re.findall(r"^.*?\.xlsx\s+(.+?)\s+Page \d+ of \d+\s*$", text, re.MULTILINE)
        pages = Counter(footers)
        assert set(pages) == set(book.sheetnames)
        assert pages["Summary"] == pages["Cautions"] == 1
        # No table of these is longer than a page; what runs over to the right would be one more.
        for name in ("Sensitivities", "Risk", "Feeder"):
            assert pages[name] == len(book[name].row_breaks.brk) + 1, (paper, name)


def test_sheets_with_a_scale_of_their_own_fit_letter(workbook_path: Path) -> None:
    """The scale leaves room for columns as wide as LibreOffice has them: digits of 7.41 pixels."""
    letter = (11.0 - 0.8) * 96.0
    n_scaled = 0
    for sheet in openpyxl.load_workbook(workbook_path):
        if sheet.row_breaks.brk:
            widths, _ = printed_widths(sheet)
            pixels = sum(7.41 * (width + 0.71) for width in widths)
            assert pixels * sheet.page_setup.scale / 100.0 <= letter, sheet.title
            n_scaled += 1
    assert n_scaled == 7
