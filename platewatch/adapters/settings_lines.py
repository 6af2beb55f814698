"""Where each key of a TOML text stands: a key-to-line finder.

tomllib throws the positions away.  This scanner walks a text that tomllib has
already accepted, so it needs no error handling of its own; it knows tables,
arrays of tables, dotted and quoted keys, inline tables, multi-line arrays and
the four kinds of strings (TOML 1.0.0).
"""

from __future__ import annotations

import re
import tomllib

Where = tuple[str | int, ...]  # keys and positions (from 0), e.g. ("sensor", 1, "x_mm")

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_SPACE = re.compile(r"[ \t]*")
_BLANK = re.compile(r"(?:[ \t\r\n]|#[^\n]*)*")
_SCALAR = re.compile(r"[^,\]}#\n]*")
_STRINGS = (
    re.compile(r'"""(?:\\.|[^\\])*?"{3,5}', re.DOTALL),
    re.compile(r"'''.*?'{3,5}", re.DOTALL),
    re.compile(r'"(?:\\.|[^"\\])*"'),
    re.compile(r"'[^']*'"),
)


def key_lines(text: str) -> dict[Where, int]:
    """Line (from 1) of every table, key and array element of a valid TOML text."""
    return _Scanner(text.replace("\r\n", "\n")).lines


class _Scanner:
    """Walks the text once; `at` is the position, `lines` what was found so far."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.lines: dict[Where, int] = {}
        self._counted_to = 0
        self._line = 1
        self._lengths: dict[Where, int] = {}  # of arrays of tables
        self._document()

    def _document(self) -> None:
        table: Where = ()
        self._skip(_BLANK)
        while self.at < len(self.text):
            if self.text.startswith("[[", self.at):
                table = self._array_header()
            elif self.text[self.at] == "[":
                table = self._header()
            else:
                self._pair(table)
            self._skip(_BLANK)

    def _header(self) -> Where:
        self.at += 1
        line = self._here()
        where = self._last_of(self._keys())
        self._note_chain(where, line)
        self.lines[where] = line
        self.at += 1
        return where

    def _array_header(self) -> Where:
        self.at += 2
        line = self._here()
        *parents, name = self._keys()
        array = (*self._last_of(parents), name)
        count = self._lengths.get(array, 0)
        self._lengths[array] = count + 1
        self._note_chain(array, line)
        self.lines[(*array, count)] = line
        self.at += 2
        return (*array, count)

    def _last_of(self, keys: list[str]) -> Where:
        """The path of a header, through the newest element of arrays of tables."""
        where: Where = ()
        for key in keys:
            where = (*where, key)
            if where in self._lengths:
                where = (*where, self._lengths[where] - 1)
        return where

    def _pair(self, table: Where) -> None:
        line = self._here()
        where = (*table, *self._keys())
        self._note_chain(where, line)
        self.at += 1  # the equals sign
        self._skip(_SPACE)
        self._value(where)

    def _note_chain(self, where: Where, line: int) -> None:
        for depth in range(1, len(where) + 1):
            self.lines.setdefault(where[:depth], line)

    def _keys(self) -> list[str]:
        keys = []
        while True:
            self._skip(_SPACE)
            keys.append(self._key())
            self._skip(_SPACE)
            if self.text[self.at] != ".":
                return keys
            self.at += 1

    def _key(self) -> str:
        if self.text[self.at] in "\"'":
            quoted = self._string()
            return str(tomllib.loads(f"v = {quoted}")["v"])
        match = _BARE_KEY.match(self.text, self.at)
        assert match is not None, "tomllib accepted this text"
        self.at = match.end()
        return match.group()

    def _value(self, where: Where) -> None:
        match self.text[self.at]:
            case "[":
                self._array(where)
            case "{":
                self._inline_table(where)
            case '"' | "'":
                self._string()
            case _:
                self._skip(_SCALAR)

    def _array(self, where: Where) -> None:
        self.at += 1
        self._skip(_BLANK)
        position = 0
        while self.text[self.at] != "]":
            element = (*where, position)
            self.lines[element] = self._here()
            self._value(element)
            self._skip_comma()
            position += 1
        self.at += 1

    def _inline_table(self, where: Where) -> None:
        self.at += 1
        self._skip(_BLANK)
        while self.text[self.at] != "}":
            self._pair(where)
            self._skip_comma()
        self.at += 1

    def _skip_comma(self) -> None:
        self._skip(_BLANK)
        if self.text[self.at] == ",":
            self.at += 1
            self._skip(_BLANK)

    def _string(self) -> str:
        for pattern in _STRINGS:
            if match := pattern.match(self.text, self.at):
                self.at = match.end()
                return match.group()
        raise AssertionError("tomllib accepted this text")

    def _skip(self, pattern: re.Pattern[str]) -> None:
        match = pattern.match(self.text, self.at)
        assert match is not None, "the pattern matches the empty text"
        self.at = match.end()

    def _here(self) -> int:
        self._line += self.text.count("\n", self._counted_to, self.at)
        self._counted_to = self.at
        return self._line
