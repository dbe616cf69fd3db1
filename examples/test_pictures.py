"""The README's pictures: there, small, described; and written as PNG without a picture library."""

from __future__ import annotations

import importlib.util
import re
import struct
import zlib
from pathlib import Path

import numpy as np

HERE = Path(__file__).resolve().parent
README = HERE.parent / "README.md"
MOST_BYTES = 600_000


def test_pictures_of_the_readme_are_there_and_described():
    shown = re.findall(r"!\[([^\]]*)\]\(([^)]*\.png)\)", README.read_text(encoding="utf-8"))
    assert {Path(path).name for _, path in shown} == {"summary.png", "feeder.png", "budget.png"}
    files = [README.parent / path for _, path in shown]
    assert all(len(text) > 40 for text, _ in shown)
    assert sum(file.stat().st_size for file in files) < MOST_BYTES
    for file in files:
        assert file.read_bytes()[:8] == b"\x89PNG\r\n\x1a\n"


def test_a_picture_comes_back_as_it_was(tmp_path):
    spec = importlib.util.spec_from_file_location("pictures", HERE / "pictures/make_pictures.py")
    assert spec is not None
    assert spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    pixels = np.zeros((3, 4, 3), np.uint8)
    pixels[1, 2] = (255, 0, 100)
    pixels[2, 0] = (0, 250, 0)
    module.write_png(pixels, tmp_path / "a.png")
    data = (tmp_path / "a.png").read_bytes()
    parts, at = {}, 8
    while at < len(data):
        (size,) = struct.unpack(">I", data[at : at + 4])
        kind, body = data[at + 4 : at + 8], data[at + 8 : at + 8 + size]
        (check,) = struct.unpack(">I", data[at + 8 + size : at + 12 + size])
        assert check == zlib.crc32(kind + body)
        parts[kind] = body
        at += 12 + size
    width, height = struct.unpack(">II", parts[b"IHDR"][:8])
    palette = np.frombuffer(parts[b"PLTE"], np.uint8).reshape(-1, 3)
    lines = np.frombuffer(zlib.decompress(parts[b"IDAT"]), np.uint8).reshape(height, width + 1)
    assert (palette[lines[:, 1:]] == pixels).all()
