"""The PDF's pages as pictures: each one there, none of them blank."""

import os
import shutil
import subprocess
from pathlib import Path

import pytest

REPORTS = Path(__file__).parents[2] / "reports"


@pytest.fixture(scope="module")
def pdftoppm():
    found = shutil.which("pdftoppm")
    if found is None:
        if os.environ.get("CI") == "true":
            pytest.fail("pdftoppm is missing: install poppler-utils")
        pytest.skip("pdftoppm (poppler-utils) is not installed")
    return found


@pytest.mark.parametrize("name", ["tunnel_air_temperature", "sump_level_refused"])
def test_every_page_shows_something(pdftoppm, tmp_path, name):
    subprocess.run([pdftoppm, "-r", "30", "-gray", REPORTS / f"{name}.pdf", tmp_path / "page"], check=True)
    pages = sorted(tmp_path.glob("page-*.pgm"))
    assert pages
    for page in pages:
        _, size, depth, pixels = page.read_bytes().split(b"\n", 3)
        width, height = map(int, size.split())
        assert depth == b"255" and len(pixels) == width * height
        dark = sum(value < 128 for value in pixels)
        assert dark > 0.001 * len(pixels), page.name
