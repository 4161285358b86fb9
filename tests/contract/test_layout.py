"""The outside of the house: what stands where, how long files are, which commands the papers name."""

import re
import tomllib
from collections import Counter

import pytest
from house import LEFT_BEHIND, ROOT, every_file, modules, shell_blocks, top_level

ALLOWED = {
    "README.md",
    "DEVELOPERS.md",
    "LICENSE",
    "pyproject.toml",
    "pipeline",
    "fitters",
    "tests",
    "demo_logs",
    "reports",
}
LONGEST_MODULE = 400  # lines: what one person can hold in mind

USE = (
    "python3 -m venv .venv && .venv/bin/pip install ."
    " && .venv/bin/firstgain tune demo_logs/tunnel_air_temperature.csv"
)
TEST = (
    "python3 -m venv .venv-test && .venv-test/bin/pip install -e '.[test]' && .venv-test/bin/python -m pytest"
)

# Words of a classroom have no place in a tool's papers; written in halves so as not to find themselves.
ELSEWHERE = ("tran" "script", "lec" "ture", "cou" "rse", "home" "work", "sylla" "bus")  # fmt: skip
FOREIGN = re.compile(rf"(?<![a-z])(?:{'|'.join(ELSEWHERE)})(?:s|es)?(?![a-z])", re.I)


def test_top_level_is_the_agreed_set():
    assert {path.name for path in top_level() if not path.name.startswith(".")} == ALLOWED


def test_what_is_left_out_of_the_check_is_left_out_of_the_repository():
    ignored = (ROOT / ".gitignore").read_text(encoding="utf-8").split()
    assert {f"{name}/" for name in LEFT_BEHIND} <= set(ignored)


def test_no_foreign_words():
    found = []
    for path in every_file():
        place = str(path.relative_to(ROOT))
        # in a file name an underscore separates words
        if FOREIGN.search(place.replace("_", " ")):
            found.append(place)
        try:
            text = path.read_text(encoding="utf-8")
        except UnicodeDecodeError:
            continue
        text = re.sub(r"base64,[A-Za-z0-9+/=]+", "", text)
        lines = enumerate(text.replace("_", " ").splitlines(), start=1)
        found += [f"{place}:{number}" for number, line in lines if FOREIGN.search(line)]
    assert found == []


@pytest.mark.parametrize("word", ELSEWHERE)
def test_the_word_check_itself_notices(word):
    assert FOREIGN.search(f"of {word.title()}s.")
    assert not FOREIGN.search(f"re{word}")


def test_modules_are_short():
    lengths = {str(p.relative_to(ROOT)): len(p.read_text(encoding="utf-8").splitlines()) for p in modules()}
    assert {name: n for name, n in lengths.items() if n > LONGEST_MODULE} == {}


def test_test_modules_have_names_of_their_own():
    """pytest imports test modules by bare name, so two of one name hide each other."""
    names = Counter(path.name for path in (ROOT / "tests").rglob("*.py") if path.name != "conftest.py")
    assert [name for name, n in names.items() if n > 1] == []


def test_readme_names_the_two_commands_first():
    commands = shell_blocks((ROOT / "README.md").read_text(encoding="utf-8"))
    assert commands[:2] == [USE, TEST]


def test_checks_run_the_command_the_papers_name():
    assert TEST in shell_blocks((ROOT / "DEVELOPERS.md").read_text(encoding="utf-8"))
    script = (ROOT / ".ci" / "run").read_text(encoding="utf-8").splitlines()
    assert {USE, TEST} <= set(script), "run exactly the README's two commands"
    assert (ROOT / ".ci" / "run").stat().st_mode & 0o111, "the script can be run"


def test_commands_name_what_exists():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    assert "firstgain" in project["scripts"]
    assert "test" in project["optional-dependencies"]
    assert (ROOT / "demo_logs" / "tunnel_air_temperature.csv").is_file()


def test_every_dependency_has_its_reason():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))["project"]
    wanted = [*project["dependencies"], *project["optional-dependencies"]["test"]]
    text = (ROOT / "DEVELOPERS.md").read_text(encoding="utf-8")
    given = set(re.findall(r"^\| `([\w.-]+)` \|", text, re.M))
    assert {re.split(r"[<>=~!\[; ]", name)[0] for name in wanted} <= given


def test_readme_lists_every_key_of_the_loop_sheet():
    from pipeline.settings import LoopSheet

    listed, tables = {}, []
    for line in (ROOT / "README.md").read_text(encoding="utf-8").splitlines():
        cells = [cell.strip() for cell in line.strip("|").split("|")]
        if len(cells) == 3 and cells[1].startswith("`"):
            tables = re.findall(r"`\[(\w+)\]`", cells[0]) or tables
            for table in tables:
                listed.setdefault(table, set()).update(re.findall(r"`(\w+)`", cells[1]))
    known = {name: set(field.annotation.model_fields) for name, field in LoopSheet.model_fields.items()}
    assert listed == known
