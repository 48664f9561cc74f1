"""What README shows works: settings load, commands and options exist."""

import re
import shlex
import tomllib
from pathlib import Path

import click
import pytest

from identkit.cli import commands
from identkit.settings import Settings

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(kind):
    return re.findall(rf"```{kind}\n(.*?)```", README, flags=re.DOTALL)


@pytest.mark.parametrize("text", blocks("toml"))
def test_settings_shown_are_accepted(text):
    Settings.from_tables(tomllib.loads(text), path="README.md", text=text)


def shown():
    for block in blocks("sh"):
        for line in block.splitlines():
            words = shlex.split(line, comments=True)
            if words[:1] == ["identkit"]:
                yield words[1:]


@pytest.mark.parametrize("words", list(shown()), ids=" ".join)
def test_commands_shown_exist_with_their_options(words):
    command = commands.get_command(click.Context(commands), words[0])
    assert command is not None
    known = {option for p in command.params for option in p.opts}
    assert {word for word in words if word.startswith("--")} <= known


def test_the_picture_is_there():
    for place in re.findall(r"!\[.*?\]\((.*?)\)", README):
        assert (ROOT / place).is_file(), place


def test_opening_is_in_the_order_a_reader_needs():
    places = [README.index(mark) for mark in ("![", "## Quick start", "## Your own", "## Cautions")]
    assert places == sorted(places)
