"""The front door: commands are found, mistakes are one line, exit codes are as documented."""

from __future__ import annotations

import click
import pytest

from planner import errors
from planner.cli import main


@pytest.mark.parametrize("name", main.COMMANDS)
def test_every_command_loads_and_its_help_has_an_example(name):
    command = main.syzygraph.get_command(click.Context(main.syzygraph), name)
    text = command.get_help(click.Context(command, info_name=f"syzygraph {name}"))
    assert "Example" in text
    assert "syzygraph" in text


def test_a_misspelt_command_is_answered_with_the_near_one(capsys):
    assert main.run_with(["predikt"]) == errors.EXIT_INPUT_WRONG
    assert "'predict'" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("raised", "code"),
    [
        (errors.InputError("site.latitude_deg: found 91; allowed are -90 to 90"), 2),
        (errors.NoSolutionError("only two stars were found"), 2),
        (KeyboardInterrupt(), 130),
        (click.UsageError("no such option"), 2),
    ],
)
def test_errors_become_exit_codes_without_a_traceback(raised, code, monkeypatch, capsys):
    def fail(*_, **__):
        raise raised

    monkeypatch.setattr(main.syzygraph, "main", fail)
    assert main.run_with([]) == code
    assert "Traceback" not in capsys.readouterr().err


def test_a_defect_of_ours_writes_a_log_and_names_it(monkeypatch, capsys, tmp_path):
    def fail(*_, **__):
        raise ZeroDivisionError("a bug")

    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(main.syzygraph, "main", fail)
    assert main.run_with(["predict"]) == errors.EXIT_DEFECT
    (log,) = tmp_path.glob("syzygraph-defect-*.log")
    assert log.name in capsys.readouterr().err
    assert "ZeroDivisionError" in log.read_text(encoding="utf-8")
