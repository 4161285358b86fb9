"""What the commands print, write and return."""

import json
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner

import pipeline.commission
from pipeline import cli
from pipeline.errors import ChecksDisagree, LogUnreadable
from pipeline.record import read_record

RECORDS = Path(__file__).parents[1] / "records"
# pydantic is not among them: the command library itself loads it to convert options.
HEAVY = {
    "scipy",
    "pandas",
    "lmfit",
    "control",
    "matplotlib",
    "numpy",
    "typst",
    "jinja2",
    "joblib",
}

#: Seconds within which help must appear; the median of five runs, to leave out a busy machine's worst.
HELP_WITHIN = 0.3


def outcome_by_name(path, *, request):
    """Stand in for the main job: the name of the log says what becomes of it."""
    name = path.stem
    if name.startswith("unreadable"):
        raise LogUnreadable("There is no time column.", file=str(path), line=3)
    if name.startswith("disagree"):
        raise ChecksDisagree("Frequency and time disagree.", file=str(path))
    if name.startswith("broken"):
        raise ZeroDivisionError("float division by zero")
    kind = "withheld" if name.startswith("withheld") else "ready"
    record = read_record(RECORDS / f"v1_{kind}.json")
    return record.model_copy(update={"log": record.log.model_copy(update={"file": path.name})})


@pytest.fixture
def run(tmp_path, monkeypatch):
    """Run the command in an empty folder, one log after another in this process."""
    monkeypatch.setattr(pipeline.commission, "commission", outcome_by_name)
    monkeypatch.chdir(tmp_path)

    def go(*words, jobs=True):
        more = ["--jobs", "1"] if jobs and words[0] == "tune" else []
        return CliRunner().invoke(cli.app, [*map(str, words), *more])

    return go


def touch(*names):
    for name in names:
        Path(name).parent.mkdir(parents=True, exist_ok=True)
        Path(name).write_text("t,pv,co\n", encoding="utf-8")


def python(code):
    return subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, timeout=30
    ).stdout


def test_one_log_gives_record_report_text_and_zero(run):
    touch("a.csv")
    done = run("tune", "a.csv")
    assert done.exit_code == 0 and done.stderr == ""
    assert sorted(p.name for p in Path("reports").iterdir()) == ["a.html", "a.json", "a.pdf"]
    assert "3.07 min per repeat" in done.stdout and "reports/a.pdf" in done.stdout.replace("\\", "/")


def test_withheld_settings_return_four_and_still_a_report(run):
    touch("withheld.csv")
    assert run("tune", "withheld.csv").exit_code == 4
    assert Path("reports/withheld.pdf").stat().st_size > 1000


@pytest.mark.parametrize(
    ("logs", "code"),
    [
        (["unreadable.csv"], 3),
        (["disagree.csv"], 5),
        (["broken.csv"], 1),
        (["a.csv", "withheld.csv", "unreadable.csv"], 4),
        (["disagree.csv", "withheld.csv"], 5),
    ],
)
def test_the_exit_code_is_the_worst(run, logs, code):
    touch(*logs)
    assert run("tune", "--no-report", *logs).exit_code == code


def test_one_bad_log_never_stops_the_rest(run):
    touch("unreadable.csv", "broken.csv", "z.csv")
    done = run("tune", "--no-report", "unreadable.csv", "broken.csv", "z.csv")
    assert [line.split(":")[0] for line in done.stdout.splitlines()] == ["z.csv"]
    first, second = done.stderr.splitlines()
    assert first == "unreadable.csv, line 3: There is no time column."
    assert "Please report this with the log broken.csv" in second and "Traceback" not in done.stderr


def test_json_alone_on_standard_output(run):
    touch("a.csv", "unreadable.csv", "b.csv")
    assert json.loads(run("tune", "--json", "--no-report", "a.csv").stdout)["record_version"] == 1
    several = run("tune", "--json", "--no-report", "b.csv", "unreadable.csv", "a.csv")
    assert [r["log"]["file"] for r in json.loads(several.stdout)] == ["b.csv", "a.csv"]
    assert "no time column" in several.stderr


def test_json_on_standard_output_is_the_record_on_disk(run):
    touch("a.csv")
    done = run("tune", "--json", "--no-report", "a.csv")
    assert done.stdout_bytes == Path("reports/a.json").read_bytes()
    assert [p.name for p in Path("reports").iterdir()] == ["a.json"]


def test_a_folder_stands_for_the_logs_in_it(run):
    touch(
        "logs/b.csv",
        "logs/a.txt",
        "logs/b.toml",
        "logs/README.md",
        "logs/x.json",
        "logs/make.py",
        "logs/.x.csv",
    )
    Path("logs/b.toml").write_text('[loop]\ntag = "FIC-7"\n', encoding="utf-8")
    done = run("tune", "--no-report", "logs")
    assert [Path(line.split(":")[0]).name for line in done.stdout.splitlines()] == ["a.txt", "b.csv"]


def test_an_empty_folder_is_a_usage_error(run):
    Path("logs").mkdir()
    done = run("tune", "logs")
    assert done.exit_code == 2 and "no log in this folder" in done.stderr


def test_logs_of_one_name_get_files_of_their_own(run):
    touch("x/a.csv", "y/A.txt", "a-2.csv")
    run("tune", "--no-report", "x/a.csv", "y/A.txt", "a-2.csv")
    assert sorted(p.name for p in Path("reports").iterdir()) == ["A-2.json", "a-2-2.json", "a.json"]


def test_the_sheet_beside_the_log_is_taken_unless_another_is_given(run, monkeypatch):
    touch("a.csv")
    Path("a.toml").write_text('[loop]\ntag = "FIC-7"\n', encoding="utf-8")
    Path("other.toml").write_text('[loop]\ntag = "LIC-8"\n', encoding="utf-8")
    asked = []

    def note(path, *, request):
        asked.append(request)
        return outcome_by_name(path, request=request)

    monkeypatch.setattr(pipeline.commission, "commission", note)
    run("tune", "--no-report", "a.csv")
    run(
        "tune",
        "--no-report",
        "a.csv",
        "--loop",
        "other.toml",
        "--controller",
        "pid",
        "--pm",
        "55",
        "--gm",
        "3",
    )
    assert [r.sheet.loop.tag for r in asked] == ["FIC-7", "LIC-8"]
    assert asked[0].controller is None and asked[0].phase_margin is None
    assert type(asked[1].controller) is str and asked[1].controller == "PID"
    assert (asked[1].phase_margin, asked[1].gain_margin, asked[1].overshoot) == (55.0, 3.0, None)


def test_a_wrong_sheet_beside_one_log_leaves_the_other_alone(run):
    touch("a.csv", "b.csv")
    Path("a.toml").write_text("[loop]\ntga = 1\n", encoding="utf-8")
    done = run("tune", "--no-report", "a.csv", "b.csv")
    assert "tga" in done.stderr and done.stdout.startswith("b.csv")


@pytest.mark.parametrize(
    "words",
    [
        ("--pm", "0"),
        ("--pm", "180"),
        ("--pm", "nan"),
        ("--gm", "1"),
        ("--ms", "0.9"),
        ("--overshoot", "-1"),
        ("--controller", "PDD"),
        ("--jobs", "0"),
        ("--loop", "missing.toml"),
        ("--margin", "60"),
    ],
)
def test_a_wrong_command_line_returns_two_before_any_work(run, words):
    touch("a.csv")
    done = run("tune", "a.csv", *words, jobs=False)
    assert done.exit_code == 2 and words[0].strip("-") in done.stderr + "loop"
    assert not Path("reports").exists() and "Traceback" not in done.output


def test_results_come_in_the_order_given_when_worked_on_side_by_side(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    names = [f"log{i}.csv" for i in (3, 1, 2)]
    wish = cli._Wish(loop=None)
    work = [
        cli._Job(log=Path(n), wish=wish, out=tmp_path / "out", stem=n, report=False, short=True)
        for n in names
    ]
    outcomes = list(cli._run(work, 2))
    # none of these files is there: each worker says so for its own log
    assert [re.search(r"log\d\.csv", o.error)[0] for o in outcomes] == names
    assert {o.code for o in outcomes} == {3}


def test_an_output_folder_that_is_a_file_is_a_sentence(run):
    touch("a.csv", "taken")
    done = run("tune", "a.csv", "--out", "taken")
    assert done.exit_code == 2 and "--out" in done.stderr


@pytest.mark.parametrize("words", ["--help", "--version", "tune --help", "read --help"])
def test_help_loads_nothing_heavy(words):
    code = (
        "import sys\nfrom pipeline.cli import main\n"
        f"sys.argv = ['firstgain', *{words.split()!r}]\n"
        "try:\n    main()\nexcept SystemExit as end:\n    assert not end.code\n"
        "print('LOADED', *sorted({m.split('.')[0] for m in sys.modules}))"
    )
    out = python(code)
    loaded = set(out.rsplit("LOADED", 1)[1].split())
    assert sorted(loaded & HEAVY) == []


def test_help_appears_at_once():
    """Processor time, the least of five: a busy machine is not the program's doing."""
    code = (
        "import os, subprocess, sys\n"
        "def spent():\n    t = os.times()\n    return t.children_user + t.children_system\n"
        "def once():\n    before = spent()\n"
        "    subprocess.run([sys.executable, '-c', 'from pipeline.cli import main; main()', '--help'],"
        " check=True, capture_output=True)\n    return spent() - before\n"
        "print(min(once() for _ in range(5)))"
    )
    assert float(python(code)) < HELP_WITHIN


def test_read_says_what_was_understood(run):
    path = Path("log.csv")
    rows = [f"{t},{20 + (0 if t < 105 else 3)},{40 if t < 100 else 45}" for t in range(300)]
    path.write_text("Time [s],TT-101,TIC-101.OUT\n" + "\n".join(rows) + "\n", encoding="utf-8")
    Path("log.toml").write_text('[columns]\ntime=1\npv=2\nco=3\n[time]\nunit="s"\n', encoding="utf-8")
    done = run("read", "log.csv")
    assert done.exit_code == 0, done.output
    assert "300 rows" in done.stdout and "TT-101" in done.stdout and "40 to 45 at 100 s" in done.stdout
    assert [p.name for p in Path("reports").iterdir()] == ["log_log.png"]
    assert Path("reports/log_log.png").read_bytes()[:4] == b"\x89PNG"
    shutil.rmtree("reports")
    data = json.loads(run("read", "log.csv", "--json").stdout)
    assert data["log"]["columns"]["co"]["name"] == "TIC-101.OUT"
    assert data["bumps"][0]["moves"][0] == {"at_s": 100.0, "from": 40.0, "to": 45.0}
    assert not Path("reports").exists()


def test_read_tells_a_missing_log_in_a_sentence(run):
    done = run("read", "missing.csv")
    assert done.exit_code == 3 and "missing.csv" in done.stderr and "Traceback" not in done.output
