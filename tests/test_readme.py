"""What the README shows runs as it stands, with the invented data in place of the reader's file."""

import re
import shlex
import shutil
from pathlib import Path

import pytest
import renew

import mixbridge
from mixbridge import cli, demo

TEXT = (Path(__file__).parents[1] / "README.md").read_text(encoding="utf-8")


@pytest.fixture
def honey(tmp_path, monkeypatch):
    shutil.copy(demo.path(), tmp_path / "honey.csv")
    monkeypatch.chdir(tmp_path)


def blocks(language: str) -> list[str]:
    return re.findall(rf"^```{language}\n(.*?)^```", TEXT, flags=re.DOTALL | re.MULTILINE)


@pytest.mark.usefixtures("honey")
def test_the_script_runs_and_has_ten_lines(capsys):
    (script,) = blocks("python")
    assert len([line for line in script.splitlines() if line]) <= 10
    names: dict[str, object] = {}
    exec(script, names)
    shown = capsys.readouterr().out
    study = names["study"]
    assert isinstance(study, mixbridge.Study)
    assert str(study) in shown
    assert str(study.ledger) in shown


def test_the_screen_is_the_one_that_is_printed():
    assert renew.renewed(TEXT) == TEXT
    assert blocks("text") == [renew.screen()]


@pytest.mark.usefixtures("honey")
def test_the_check_command_runs(capsys):
    (command,) = [line for block in blocks("sh") for line in block.splitlines() if "mixbridge check" in line]
    program, *arguments = shlex.split(command)
    assert program == ".venv/bin/mixbridge"
    assert cli.main(arguments) == 0
    assert "forage" in capsys.readouterr().out


def test_the_picture_is_the_one_that_is_drawn():
    """Letters are placed by the fonts and versions at hand, so that the words of the picture are compared, in order."""

    def words(svg):
        return re.findall(r"<text[^>]*>([^<]*)</text>", svg)

    kept = renew.PICTURE.read_text(encoding="utf-8")
    assert words(kept) == words(renew.picture())
    assert "swamy_arora" in words(kept)


def test_the_worked_study_prints_what_it_shows():
    text = renew.WORKED_PAGE.read_text(encoding="utf-8")
    assert len(renew.WORKED.findall(text)) >= 8
    assert renew.worked(text) == text


def test_two_commands_set_everything_up():
    """CI runs them word for word; here only that both stand there, each complete."""
    commands = [line for block in blocks("sh") for line in block.splitlines() if "python3 -m venv" in line]
    assert len(commands) == 2
    for command in commands:
        assert re.match(r"python3 -m venv \.venv && \.venv/bin/pip install -q .+ && \.venv/bin/", command)
