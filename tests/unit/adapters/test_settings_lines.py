"""The key-to-line finder against hand-counted lines and against tomllib's own keys."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

import pytest
from settings_example import EXAMPLE

from platewatch.adapters.settings_lines import Where, key_lines

CONFIG = Path(__file__).parents[3] / "config"

AWKWARD = '''\
# a comment with [brackets] and "quotes
title = "a # no comment ] }"   # one
[a."quoted.key"]
x = 1
'y z' = """
[[not a table]]
k = "v" \\
"""
dotted.one = 1
dotted . "two" = [
  1,          # ] no end
  [2, 3], { deep = { er = 4 }, list = [7,
            8] , more = 5 },
]
[[list]]
v = 1
[list.sub]
w = 2
[[list]]
v = \'\'\'
multi ] line
''\'\'\'
[[list.inner]]
q = 1979-05-27T07:32:00Z
[[list.inner]]
q = -1.5e3
empty = []
'''


def paths(node: Any, where: Where = ()) -> set[Where]:
    """Every table, key and element of parsed TOML."""
    found = {where} if where else set()
    if isinstance(node, dict):
        for key, value in node.items():
            found |= paths(value, (*where, key))
    if isinstance(node, list):
        for position, value in enumerate(node):
            found |= paths(value, (*where, position))
    return found


@pytest.mark.parametrize(
    ("where", "line"),
    [
        (("title",), 2),
        (("a", "quoted.key"), 3),
        (("a", "quoted.key", "x"), 4),
        (("a", "quoted.key", "y z"), 5),
        (("a", "quoted.key", "dotted", "one"), 9),
        (("a", "quoted.key", "dotted", "two"), 10),
        (("a", "quoted.key", "dotted", "two", 0), 11),
        (("a", "quoted.key", "dotted", "two", 1, 1), 12),
        (("a", "quoted.key", "dotted", "two", 2, "deep", "er"), 12),
        (("a", "quoted.key", "dotted", "two", 2, "list", 1), 13),
        (("list", 0), 15),
        (("list", 0, "v"), 16),
        (("list", 0, "sub", "w"), 18),
        (("list", 1), 19),
        (("list", 1, "v"), 20),
        (("list", 1, "inner", 0, "q"), 24),
        (("list", 1, "inner", 1, "q"), 26),
        (("list", 1, "inner", 1, "empty"), 27),
    ],
)
def test_a_key_is_found_on_its_line(where: Where, line: int) -> None:
    """Lines counted by hand: quoted and dotted keys, strings, tables in tables."""
    assert key_lines(AWKWARD)[where] == line


@pytest.mark.parametrize(
    "text",
    [
        AWKWARD,
        EXAMPLE,
        AWKWARD.replace("\n", "\r\n"),
        *(p.read_text() for p in CONFIG.glob("*.toml")),
    ],
)
def test_the_finder_knows_exactly_the_keys_that_tomllib_knows(text: str) -> None:
    """Second route: no key is lost, none invented, whatever the style of the file."""
    assert set(key_lines(text)) == paths(tomllib.loads(text))


def test_windows_line_ends_do_not_move_the_lines() -> None:
    """A file saved on another system is pointed into at the same lines."""
    assert key_lines(AWKWARD.replace("\n", "\r\n")) == key_lines(AWKWARD)
