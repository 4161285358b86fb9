"""Every command on arrival: it has help, says what each option is for, and ends in a sentence."""

import pytest
import typer
from typer.testing import CliRunner

from pipeline.cli import app

COMMANDS = sorted(typer.main.get_command(app).commands)


@pytest.mark.parametrize("name", COMMANDS)
def test_a_command_explains_itself(name):
    command = typer.main.get_command(app).commands[name]
    assert command.help and command.help.rstrip().endswith(".")
    for parameter in command.params:
        assert getattr(parameter, "help", None), parameter.name


@pytest.mark.parametrize("name", COMMANDS)
def test_a_command_refuses_what_it_does_not_know(name):
    done = CliRunner().invoke(app, [name, "--no-such-option"])
    assert done.exit_code == 2 and "no-such-option" in done.output and "Traceback" not in done.output


@pytest.mark.parametrize("name", COMMANDS)
def test_a_log_that_is_not_there_is_a_sentence_and_exit_code_three(name, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    done = CliRunner().invoke(app, [name, "missing.csv"])
    assert done.exit_code == 3
    assert "missing.csv" in done.stderr and "Traceback" not in done.output
