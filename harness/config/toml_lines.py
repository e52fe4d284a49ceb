"""Where each key of a TOML text stands, so that a problem can name its line.

The text is known to be valid TOML when it comes here; the scan only follows its shape.
"""

from __future__ import annotations

import re

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_BARE_VALUE = re.compile(r"[^,\]}#\n]*")
_BLANK = re.compile(r"(?:[ \t\n]|#[^\n]*)*")
_SPACE = re.compile(r"[ \t]*")
_STRINGS = tuple(
    (opening, re.compile(pattern, re.DOTALL))
    for opening, pattern in (
        ('"""', r'"""(?:\\.|[^\\])*?"""(?!")'),
        ("'''", r"'''.*?'''(?!')"),
        ('"', r'"(?:\\.|[^"\\])*"'),
        ("'", r"'[^']*'"),
    )
)


def line_map(text: str) -> dict[str, int]:
    """Return the line of every key, table and array element of a valid TOML text.

    Parameters
    ----------
    text : str
        The text, with line feeds as line ends.

    Returns
    -------
    dict of str to int
        Line number, from 1, by path, e.g. ``"link[0].items[3].address"`` [-].
    """
    scan = _Scan(text)
    scan.document()
    return scan.lines


def line_of(lines: dict[str, int], path: str) -> int:
    """Return the line of a path, or of the nearest thing around it that is there; else 1.

    Parameters
    ----------
    lines : dict of str to int
        From ``line_map`` [-].
    path : str
        Path of a key, which may be missing from the text.

    Returns
    -------
    int
        Line number, from 1 [-].
    """
    while path and path not in lines:
        path = path[: max(path.rfind("."), path.rfind("["), 0)]
    return lines.get(path, 1)


class _Scan:
    """One pass over the text."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.position = 0
        self.lines: dict[str, int] = {}
        self.elements: dict[str, int] = {}

    def document(self) -> None:
        prefix = ""
        self._skip(_BLANK)
        while self.position < len(self.text):
            start = self.position
            if self.text.startswith("[[", start):
                self.position += 2
                prefix = self._array_table(self._key())
                self.position += 2
                self._record(prefix, start)
            elif self.text.startswith("[", start):
                self.position += 1
                prefix = self._table(self._key(), start)
                self.position += 1
            else:
                self._pair(prefix)
            self._skip(_BLANK)

    def _skip(self, pattern: re.Pattern[str]) -> None:
        found = pattern.match(self.text, self.position)
        self.position = found.end() if found else self.position

    def _record(self, path: str, position: int) -> None:
        self.lines.setdefault(path, self.text.count("\n", 0, position) + 1)

    def _key(self) -> list[str]:
        parts = []
        while True:
            self._skip(_SPACE)
            start = self.position
            if self.text[start] in "\"'":
                self._string()
                parts.append(self.text[start + 1 : self.position - 1])
            else:
                self._skip(_BARE_KEY)
                parts.append(self.text[start : self.position])
            self._skip(_SPACE)
            if not self.text.startswith(".", self.position):
                return parts
            self.position += 1

    def _table(self, parts: list[str], start: int) -> str:
        for depth in range(1, len(parts) + 1):
            self._record(self._within(parts[:depth]), start)
        return self._within(parts)

    def _within(self, parts: list[str]) -> str:
        path = ""
        for part in parts:
            path = _join(path, part)
            if path in self.elements:
                path = f"{path}[{self.elements[path]}]"
        return path

    def _array_table(self, parts: list[str]) -> str:
        path = _join(self._within(parts[:-1]), parts[-1])
        self.elements[path] = self.elements.get(path, -1) + 1
        return f"{path}[{self.elements[path]}]"

    def _pair(self, prefix: str) -> None:
        start = self.position
        path = prefix
        for part in self._key():
            path = _join(path, part)
            self._record(path, start)
        self.position += 1  # the equals sign
        self._skip(_SPACE)
        self._value(path)

    def _value(self, path: str) -> None:
        opening = self.text[self.position]
        if opening == "[":
            self._array(path)
        elif opening == "{":
            self._inline_table(path)
        elif opening in "\"'":
            self._string()
        else:
            self._skip(_BARE_VALUE)

    def _array(self, path: str) -> None:
        self.position += 1
        index = 0
        self._skip(_BLANK)
        while self.text[self.position] != "]":
            self._record(f"{path}[{index}]", self.position)
            self._value(f"{path}[{index}]")
            index += 1
            self._separator()
        self.position += 1

    def _inline_table(self, path: str) -> None:
        self.position += 1
        self._skip(_BLANK)
        while self.text[self.position] != "}":
            self._pair(path)
            self._separator()
        self.position += 1

    def _separator(self) -> None:
        self._skip(_BLANK)
        if self.text[self.position] == ",":
            self.position += 1
            self._skip(_BLANK)

    def _string(self) -> None:
        for opening, pattern in _STRINGS:
            if self.text.startswith(opening, self.position):
                self._skip(pattern)
                return


def _join(path: str, part: str) -> str:
    return f"{path}.{part}" if path else part
