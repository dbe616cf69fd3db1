"""Makes the README's pictures from a results workbook: Summary, Feeder and Budget as they print.

    python examples/pictures/make_pictures.py demo-results.xlsx

Needs LibreOffice (``soffice``) and Poppler (``pdftoppm``, ``pdftotext``). Margins are cut off, and
what the pictures hold is not changed. Pictures already there are replaced.
"""

from __future__ import annotations

import re
import struct
import subprocess
import sys
import tempfile
import zlib
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

FOLDER = Path(__file__).resolve().parent
PAGES = {"summary.png": ("Summary", 1), "feeder.png": ("Feeder", 2), "budget.png": ("Budget", 1)}
"""Picture -> sheet and which of its pages: the second of Feeder has a repair."""

DOTS_PER_INCH = 120
FOOTER_INCHES = 0.45
WHITE_ROOM = 12
"""Pixels left around what is drawn."""

N_COLOURS = 256
COLOUR_STEP = 5
"""Colours are rounded to this, so that a palette of 256 holds nearly all of them."""

Pixels = NDArray[np.uint8]


def convert(workbook: Path, folder: Path) -> Path:
    """The workbook as PDF; its program ends with status 0 even where it wrote nothing."""
    profile = f"-env:UserInstallation={(folder / 'profile').as_uri()}"
    command = ["soffice", profile, "--headless", "--convert-to", "pdf", "--outdir", str(folder)]
    subprocess.run([*command, str(workbook)], check=True, capture_output=True, timeout=600)
    pdf = folder / f"{workbook.stem}.pdf"
    if not pdf.exists():
        raise SystemExit(f"'{workbook}' could not be printed.")
    return pdf


def page_of(pdf: Path, sheet: str, which: int) -> int:
    """Page number of the n-th page of a sheet, by the footers."""
    command = ["pdftotext", "-layout", str(pdf), "-"]
    text = subprocess.run(command, check=True, capture_output=True, text=True).stdout
    pages = re.findall(r"^.*  +(\S.*?)  +Page (\d+) of \d+ *$", text, re.MULTILINE)
    found = [int(number) for name, number in pages if name == sheet]
    if len(found) < which:
        raise SystemExit(f"The sheet {sheet} has no page {which}.")
    return found[which - 1]


def read_page(pdf: Path, page: int) -> Pixels:
    """One page as pixels (rows, columns, red green blue), without footer and white margins."""
    command = ["pdftoppm", "-r", str(DOTS_PER_INCH), "-f", str(page), "-l", str(page), str(pdf)]
    data = subprocess.run(command, check=True, capture_output=True).stdout
    head = re.match(rb"P6\s+(\d+)\s+(\d+)\s+255\s", data)
    assert head is not None
    width, height = int(head[1]), int(head[2])
    pixels = np.frombuffer(data, np.uint8, height * width * 3, head.end())
    pixels = pixels.reshape(height, width, 3)[: height - int(FOOTER_INCHES * DOTS_PER_INCH)]
    drawn = (pixels < 250).any(axis=2)
    rows, cols = np.flatnonzero(drawn.any(axis=1)), np.flatnonzero(drawn.any(axis=0))
    top, left = max(0, rows[0] - WHITE_ROOM), max(0, cols[0] - WHITE_ROOM)
    return pixels[top : rows[-1] + WHITE_ROOM, left : cols[-1] + WHITE_ROOM]


def write_png(pixels: Pixels, path: Path) -> None:
    """A PNG with a palette of the most frequent colours (PNG specification, ISO/IEC 15948)."""
    rounded = np.round(pixels / COLOUR_STEP).astype(np.uint8) * COLOUR_STEP
    flat = rounded.reshape(-1, 3)
    colours, counts = np.unique(flat, axis=0, return_counts=True)
    palette = colours[np.argsort(-counts)[:N_COLOURS]].astype(np.int32)
    nearest = {
        tuple(colour): int(((palette - colour) ** 2).sum(axis=1).argmin())
        for colour in colours.astype(np.int32)
    }
    index = np.array([nearest[tuple(colour)] for colour in flat.tolist()], np.uint8)
    rows = index.reshape(rounded.shape[:2])
    lines = b"".join(b"\0" + row.tobytes() for row in rows)
    head = struct.pack(">IIBBBBB", rows.shape[1], rows.shape[0], 8, 3, 0, 0, 0)
    parts = (
        (b"IHDR", head),
        (b"PLTE", palette.astype(np.uint8).tobytes()),
        (b"IDAT", zlib.compress(lines, 9)),
        (b"IEND", b""),
    )
    chunks = (
        struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))
        for kind, data in parts
    )
    path.write_bytes(b"\x89PNG\r\n\x1a\n" + b"".join(chunks))


def make_pictures(workbook: Path, folder: Path = FOLDER) -> list[Path]:
    """Writes the pictures of a results workbook; their paths."""
    paths = []
    with tempfile.TemporaryDirectory() as name:
        pdf = convert(workbook, Path(name))
        for picture, (sheet, which) in PAGES.items():
            write_png(read_page(pdf, page_of(pdf, sheet, which)), folder / picture)
            paths.append(folder / picture)
    return paths


if __name__ == "__main__":
    if len(sys.argv) != 2:
        raise SystemExit("Usage: make_pictures.py RESULTS.xlsx")
    for written in make_pictures(Path(sys.argv[1])):
        print(f"{written} ({written.stat().st_size / 1000:.0f} kB)")
