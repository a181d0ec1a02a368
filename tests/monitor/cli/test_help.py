"""Every command and option says what it is for, and the top page says how commands end."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path

import pytest
import typer

from monitor.cli import app
from monitor.commands.exits import MEANINGS, ExitCode

PROMISED = {
    "demo", "check", "once", "run", "backfill", "report", "pages", "baseline list",
    "baseline fit", "alarms list", "alarms acknowledge", "alarms shelve", "alarms unshelve",
    "event add", "event list", "notify test", "notify list", "explain", "state", "status", "export",
}  # fmt: skip


def commands(group, before=()):
    for name, command in group.commands.items():
        if hasattr(command, "commands"):
            yield from commands(command, (*before, name))
        else:
            yield (*before, name), command


ALL = dict(commands(typer.main.get_command(app)))


def test_the_commands_are_the_promised_ones():
    assert {" ".join(name) for name in ALL} == PROMISED


@pytest.mark.parametrize("name", ALL, ids=" ".join)
def test_the_help_of_a_command_teaches_with_an_example(lostwork, name):
    ran = lostwork(*name, "--help")
    assert ran.code == 0
    assert f"Example: lostwork {' '.join(name)}" in ran.out
    assert ran.err == ""


@pytest.mark.parametrize("name", ALL, ids=" ".join)
def test_every_option_and_argument_has_a_help_text(name):
    for parameter in ALL[name].params:
        assert getattr(parameter, "help", None), parameter.name


@pytest.mark.parametrize("name", ALL, ids=" ".join)
def test_the_example_of_a_command_names_only_options_it_has(name):
    known = {option for p in ALL[name].params for option in (*p.opts, *p.secondary_opts)}
    (example, *_) = re.findall(r"Example: (.*?)(?:\n\s*\n|\Z)", ALL[name].help, re.DOTALL)
    assert set(re.findall(r"--[a-z0-9-]+", example)) <= known


def test_the_top_page_lists_every_command_and_every_exit_code(lostwork):
    ran = lostwork("--help")
    text = " ".join(ran.out.split())
    for name in {name.split()[0] for name in PROMISED}:
        assert re.search(rf"\b{name}\b", text)
    for code in ExitCode:
        assert f"{int(code)} {MEANINGS[code]}" in text


def test_no_summary_of_a_command_is_cut_short(lostwork):
    assert "..." not in lostwork("--help").out.partition("Commands:")[2]


DOCUMENTS = ("README.md", "DEVELOPERS.md", "config/README.md", "config/demo/site.toml")


@pytest.mark.parametrize("document", DOCUMENTS)
def test_documents_name_only_commands_and_options_that_exist(document):
    path = Path(__file__).parents[3] / document
    if not path.exists():
        pytest.skip(f"there is no {document}")
    names = {name[0] for name in ALL}
    groups = {name[0] for name in ALL if len(name) > 1}
    for line in re.findall(r"lostwork ([a-z]+(?: [^`\n#]*)?)[`\n#]", path.read_text()):
        words = line.split()
        if words[0] not in names:
            # Prose: "lostwork is a daemon".
            assert not re.search(r"--|\.toml", line), line
            continue
        name = tuple(words[:2]) if words[0] in groups else (words[0],)
        assert name in ALL, line
        known = {o for p in ALL[name].params for o in (*p.opts, *p.secondary_opts)}
        assert set(re.findall(r"--[a-z0-9-]+", line)) <= known | {"--help"}, line


def test_the_version_is_that_of_the_project(lostwork):
    project = Path(__file__).parents[3] / "pyproject.toml"
    stated = tomllib.loads(project.read_text())["project"]["version"]
    assert lostwork("--version").out == f"lostwork {stated}\n"


def test_without_a_command_the_help_is_shown(lostwork):
    ran = lostwork()
    assert ran.code == ExitCode.WRONG_USE
    assert "Usage: lostwork" in ran.out + ran.err
