"""Which way imports point, and what the fitters keep their hands off."""

import ast
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from house import ROOT, modules

#: Files, clock, environment, other processes, screen: whoever calls a fitter decides about those.
OUTSIDE_WORLD = {
    "os", "io", "sys", "time", "datetime", "pathlib", "shutil", "tempfile", "glob", "subprocess", "platform",
    "getpass", "socket", "locale", "logging", "argparse", "matplotlib", "rich", "typer", "pandas",
}  # fmt: skip
WORDS = {"open", "print", "input", "exit", "quit", "breakpoint", "exec", "eval"}
METHODS = {
    "savetxt",
    "loadtxt",
    "genfromtxt",
    "fromfile",
    "tofile",
    "memmap",
    "savez",
    "read_csv",
    "read_text",
}


def reaches_outside(source):
    """Everything in a module's source that touches the world outside its arguments."""
    found = []
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            found += [a.name for a in node.names if a.name.split(".")[0] in OUTSIDE_WORLD]
        elif isinstance(node, ast.ImportFrom) and node.level == 0:
            found += [node.module] if node.module.split(".")[0] in OUTSIDE_WORLD else []
        elif isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in WORDS:
            found.append(node.func.id)
        elif isinstance(node, ast.Attribute) and node.attr in METHODS:
            found.append(node.attr)
        elif isinstance(node, ast.Global):
            found.append("global")
    return found


@pytest.mark.parametrize("path", modules("fitters"), ids=lambda p: str(p.relative_to(ROOT)))
def test_fitters_touch_nothing_but_their_arguments(path):
    assert reaches_outside(path.read_text(encoding="utf-8")) == []


def test_the_check_itself_notices():
    source = "import os.path\nfrom time import monotonic\ndef f(x):\n    print(open(x))\n    np.savetxt(x)\n"
    assert sorted(reaches_outside(source)) == ["open", "os.path", "print", "savetxt", "time"]


@pytest.mark.parametrize("path", modules("pipeline"), ids=lambda p: str(p.relative_to(ROOT)))
def test_only_the_command_line_prints_or_exits(path):
    if path == ROOT / "pipeline" / "cli.py":
        return
    calls = [n.func for n in ast.walk(ast.parse(path.read_text(encoding="utf-8"))) if isinstance(n, ast.Call)]
    named = {ast.unparse(func) for func in calls}
    assert (
        named & {"print", "exit", "quit", "sys.exit", "os._exit", "sys.stdout.write", "sys.stderr.write"}
        == set()
    )


def test_imports_point_one_way():
    lint = Path(sys.executable).parent / "lint-imports"
    run = subprocess.run(
        [lint, "--no-cache"], cwd=ROOT, capture_output=True, text=True, timeout=60, check=False
    )
    assert run.returncode == 0, run.stdout + run.stderr


def test_a_fit_runs_with_the_world_shut(monkeypatch):
    """Fit a made-up bump with files, screen and environment booby-trapped.

    The clock is left alone: lmfit reads it for its own use.
    """
    import builtins
    import os

    from fitters.choose import choose
    from fitters.fit import BumpData

    t = np.arange(0.0, 60.0, 0.5)
    after = np.clip(t - 12.0, 0.0, None)
    pv = 20.0 + 3.0 * (1.0 - np.exp(-after / 6.0)) + 0.02 * np.sin(37.0 * t)
    data = BumpData(t=t, pv=pv, co_times=[0.0, 10.0], co_values=[40.0, 42.0])
    choose(data).best.draw(3, 1)  # what is loaded late, code or a library's tables, is loaded now

    def trap(*_args, **_kwargs):
        raise AssertionError("a fitter reached for the world outside")

    with monkeypatch.context() as shut:
        for name in ("open", "print", "input"):
            shut.setattr(builtins, name, trap)
        shut.setattr(os, "getenv", trap)
        shut.setattr(type(os.environ), "__getitem__", trap)
        best = choose(data).best
        best.draw(3, 1)
    assert best.parameter("gain").value == pytest.approx(1.5, rel=0.05)
