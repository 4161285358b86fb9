"""Where the house stands and which files are in it, for the tests that walk it."""

import re
from pathlib import Path

ROOT = Path(__file__).parents[2]
PACKAGES = ("pipeline", "fitters")
#: Dot-entries that are part of the project; other dot-entries are caches and environments.
OWN_DOT_ENTRIES = {".ci", ".github", ".gitignore"}
#: What building leaves behind at the top level, never tracked.
LEFT_BEHIND = {"build", "dist", "__pycache__"}


def top_level():
    """Entries of the top level that belong to the project, dot-entries included."""
    return [
        path
        for path in sorted(ROOT.iterdir())
        if (not path.name.startswith(".") or path.name in OWN_DOT_ENTRIES)
        and path.name not in LEFT_BEHIND
        and path.suffix != ".egg-info"
    ]


def every_file():
    """Every file of the project."""
    for entry in top_level():
        files = [entry] if entry.is_file() else sorted(entry.rglob("*"))
        yield from (f for f in files if f.is_file() and "__pycache__" not in f.parts)


def modules(*packages):
    """Every module of the given packages, as paths."""
    return [path for package in packages or PACKAGES for path in sorted((ROOT / package).rglob("*.py"))]


def shell_blocks(text):
    """Commands in the fenced shell blocks of a Markdown text, one a line."""
    blocks = re.findall(r"^```(?:sh|bash|console)\n(.*?)^```", text, re.M | re.S)
    return [line.strip() for block in blocks for line in block.splitlines() if line.strip()]
