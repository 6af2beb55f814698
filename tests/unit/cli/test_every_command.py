"""Every command has help with an example and stands in the README, and nothing else does."""

from __future__ import annotations

import argparse
import re
import shlex
from pathlib import Path

import pytest

from platewatch.cli import MODULES
from platewatch.cli_parser import COMMANDS, build_parser

README = Path(__file__).resolve().parents[3] / "README.md"


def parsers() -> dict[str, argparse.ArgumentParser]:
    """Each command's own parser."""
    choices = next(
        action.choices
        for action in build_parser()._actions
        if isinstance(action, argparse._SubParsersAction)
    )
    return dict(choices)


def rows() -> list[str]:
    """First cells of the table under "Commands"."""
    section = README.read_text(encoding="utf-8").split("\n## Commands\n", 1)[1].split("\n## ", 1)[0]
    return [line.split(" | ")[0] for line in section.splitlines() if line.startswith("| `")]


def in_readme() -> set[str]:
    return set(re.findall(r"`platewatch ([a-z-]+)", "\n".join(rows())))


def test_the_readme_lists_every_command_and_no_other() -> None:
    """Style, section 9: every command has help and appears in the README."""
    assert in_readme() == set(COMMANDS)


def test_every_command_that_is_parsed_can_be_run_and_guessed() -> None:
    """The three lists of commands agree: parser, code to load, did-you-mean."""
    assert set(parsers()) == set(MODULES) == set(COMMANDS)


@pytest.mark.parametrize("command", COMMANDS)
def test_the_help_of_a_command_shows_an_example_that_is_right_use(command: str) -> None:
    """The example in the help is one that the parser itself takes."""
    text = parsers()[command].format_help()
    example = re.search(rf"^example: platewatch ({command}\b.*)$", text, re.MULTILINE)
    assert example, text
    assert "exit codes: 0 done, 1 finding" in " ".join(text.split())
    build_parser().parse_args(shlex.split(example[1]))


@pytest.mark.parametrize("command", COMMANDS)
def test_every_option_says_what_it_is(command: str) -> None:
    """An option without a word of help leaves a person guessing."""
    mute = [
        action.option_strings[0]
        for action in parsers()[command]._actions
        if action.option_strings and not action.help
    ]
    assert not mute


def test_commands_quoted_in_the_readme_are_right_use() -> None:
    """Each whole `platewatch` line of the README's code blocks is taken by the parser."""
    blocks = re.findall(r"^```\w*\n(.*?)^```", README.read_text(encoding="utf-8"), re.S | re.M)
    lines = [line.strip() for block in blocks for line in block.splitlines()]
    quoted = [line for line in lines if re.match(r"platewatch [a-z]", line)]
    assert quoted
    for line in quoted:
        build_parser().parse_args(shlex.split(line)[1:])
