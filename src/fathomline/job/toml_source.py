"""TOML text with the line of every key.

The parser of the standard library decides what a document means; it keeps no line numbers. A
second, simpler pass over the same text finds them. That pass relies on the text being valid TOML:
it only has to tell keys, strings, brackets and comments apart, and to count the entries of arrays
of tables.

A *key path* is a tuple of table keys and array indices (from 0), as one would index the data:
``("region", 1, "window")`` or ``("component", 0, "logN", "Fe II")``.
"""

from __future__ import annotations

import contextlib
import re
import tomllib
from bisect import bisect_right
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from fathomline.errors import JobError

__all__ = ["MAXIMUM_DEPTH", "KeyPath", "TomlSource", "locate_keys", "parse_toml"]

KeyPath = tuple[str | int, ...]

#: Deepest nesting of tables and arrays that is read. A job needs six levels.
MAXIMUM_DEPTH = 32

_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")
_SPACE = re.compile(r"[ \t]*")
_SPACE_LINES_COMMENTS = re.compile(r"(?:[ \t\n]+|#[^\n]*)*")
_SCALAR = re.compile(r"[^,\]}\n#]+")
# The repetitions are possessive: a long string costs no backtracking stack. A closing delimiter of
# three quotes may be preceded by one or two quotes that belong to the string.
_STRINGS = (
    re.compile(r'"""(?:[^"\\]++|\\.|"{1,2}(?!"))*+"{3,5}', re.DOTALL),
    re.compile(r"'''(?:[^']++|'{1,2}(?!'))*+'{3,5}", re.DOTALL),
    re.compile(r'"(?:[^"\\\n]++|\\.)*+"'),
    re.compile(r"'[^'\n]*+'"),
)
_ERROR_PLACE = re.compile(r"\s*\(at (?:line (\d+), column (\d+)|end of document)\)$")
_LONG_INTEGER = re.compile(r"[0-9_]{4000,}")


@dataclass(frozen=True)
class TomlSource:
    """The name of a TOML document and the line of each of its keys.

    Two sources are equal whatever they hold: where a value was written is no part of the value.
    """

    name: str = field(default="job", compare=False)
    lines: Mapping[KeyPath, int] = field(default_factory=dict, compare=False, repr=False)
    #: Where relative file names start.
    folder: Path = field(default_factory=Path.cwd, compare=False)

    def line(self, path: KeyPath) -> int | None:
        """Line (from 1) of a key, else of the nearest table or array around it.

        A key that is not in the document is at the header of the table that lacks it; a table that
        is not in the document is at line 1. None if the document has no text (built in memory).
        """
        for length in range(len(path), 0, -1):
            found = self.lines.get(path[:length])
            if found is not None:
                return found
        return self.lines.get(())

    def place(self, path: KeyPath = ()) -> str:
        """The place of a key as ``"name:line"``, or only the name if there is no text."""
        line = self.line(path)
        return self.name if line is None else f"{self.name}:{line}"


def parse_toml(
    text: str, name: str, folder: Path | None = None
) -> tuple[dict[str, Any], TomlSource]:
    """Parse TOML text.

    Parameters
    ----------
    text
        The document.
    name
        What messages call it, usually the path as the user gave it.
    folder
        Where relative file names in it start; the working directory if not given.

    Returns
    -------
    The parsed data, and the source that knows each key's line.

    Raises
    ------
    JobError
        The text is not TOML, has a key twice, or is nested deeper than `MAXIMUM_DEPTH`.

    """
    # The scan comes first: it stops at a depth that would exhaust the parser's stack or memory.
    scanner = _Scanner(text)
    try:
        with contextlib.suppress(_UnreadableError):
            scanner.scan()
    except _TooDeepError as error:
        raise JobError(
            f"{name}:{error.line}: nested deeper than {MAXIMUM_DEPTH} levels; a job needs six"
        ) from None
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise JobError(_syntax_fault(scanner, name, str(error))) from None
    except ValueError:
        # The standard library refuses to convert integers of thousands of digits.
        match = _LONG_INTEGER.search(text)
        line = 1 if match is None else text.count("\n", 0, match.start()) + 1
        raise JobError(f"{name}:{line}: a number has too many digits") from None
    return data, TomlSource(name, scanner.lines, Path.cwd() if folder is None else folder)


def locate_keys(text: str) -> dict[KeyPath, int]:
    """Line (from 1) of each key, table header and array element of a valid TOML document.

    The empty path is at line 1. A table that is only implied (``a`` in ``[a.b]`` or in ``a.b = 1``)
    is where it is first implied, unless it has a header of its own.
    """
    scanner = _Scanner(text)
    scanner.scan()
    return scanner.lines


def _syntax_fault(scanner: _Scanner, name: str, message: str) -> str:
    """One line for a document that the parser refused."""
    place = _ERROR_PLACE.search(message)
    what = message if place is None else message[: place.start()]
    if place is None or place[1] is None:
        line, column = scanner.text.rstrip("\n").count("\n") + 1, ""
    else:
        line, column = int(place[1]), f" (column {place[2]})"
    # A repeated key is named with both its lines; the parser only says where the second one ends.
    if scanner.repeated and scanner.repeated[0][2] <= line:
        written, first, second = scanner.repeated[0]
        return f"{name}:{second}: {written} is given twice; the first is in line {first}"
    return f"{name}:{line}: not valid TOML: {what}{column}"


class _UnreadableError(Exception):
    """The text is not valid TOML at this point."""


class _TooDeepError(Exception):
    def __init__(self, line: int) -> None:
        self.line = line
        super().__init__(line)


class _Scanner:
    """One pass over the text; `lines` and `repeated` are its results."""

    def __init__(self, text: str) -> None:
        self.text = text.replace("\r\n", "\n")
        self.position = 0
        # TOML ends lines with \n only, so str.splitlines would count too many.
        self.starts = [0, *(match.end() for match in re.finditer("\n", self.text))]
        self.lines: dict[KeyPath, int] = {(): 1}
        #: (what is repeated, first line, second line)
        self.repeated: list[tuple[str, int, int]] = []
        self._assigned: dict[KeyPath, int] = {}
        self._headers: dict[KeyPath, int] = {}
        self._entries: dict[KeyPath, int] = {}

    def scan(self) -> None:
        table: KeyPath = ()
        while True:
            self._skip(_SPACE_LINES_COMMENTS)
            if self.position >= len(self.text):
                return
            if self.text.startswith("[", self.position):
                table = self._header()
            else:
                self._assignment(table, 0)

    def _line(self) -> int:
        return bisect_right(self.starts, self.position)

    def _skip(self, pattern: re.Pattern[str]) -> None:
        match = pattern.match(self.text, self.position)
        if match is not None:
            self.position = match.end()

    def _accept(self, token: str) -> bool:
        if self.text.startswith(token, self.position):
            self.position += len(token)
            return True
        return False

    def _expect(self, token: str) -> None:
        if not self._accept(token):
            raise _UnreadableError

    def _string(self) -> str | None:
        """The string token at this place with its quotes, or None if there is no string."""
        if self.text[self.position : self.position + 1] not in ('"', "'"):
            return None
        for pattern in _STRINGS:
            match = pattern.match(self.text, self.position)
            if match is not None:
                self.position = match.end()
                return match[0]
        raise _UnreadableError

    def _key(self) -> list[str]:
        """The parts of a dotted key, with the space around them."""
        parts: list[str] = []
        while True:
            if len(parts) > MAXIMUM_DEPTH:
                raise _TooDeepError(self._line())
            self._skip(_SPACE)
            quoted = self._string()
            if quoted is None:
                match = _BARE_KEY.match(self.text, self.position)
                if match is None:
                    raise _UnreadableError
                self.position = match.end()
                parts.append(match[0])
            elif "\\" in quoted and quoted[0] == '"':
                try:
                    parts.append(str(tomllib.loads(f"key = {quoted}")["key"]))
                except tomllib.TOMLDecodeError:
                    raise _UnreadableError from None
            else:
                parts.append(quoted[1:-1])
            self._skip(_SPACE)
            if not self._accept("."):
                return parts

    def _header(self) -> KeyPath:
        line = self._line()
        brackets = 2 if self.text.startswith("[[", self.position) else 1
        self.position += brackets
        parts = self._key()
        self._expect("]" * brackets)
        path: KeyPath = ()
        for part in parts[:-1]:
            path = self._current_entry((*path, part))
            self.lines.setdefault(path, line)
        path = (*path, parts[-1])
        self._check_depth(path, line)
        if brackets == 2:
            self.lines.setdefault(path, line)
            index = self._entries.get(path, 0)
            self._entries[path] = index + 1
            path = (*path, index)
        elif path in self._headers:
            header = repr("[" + ".".join(parts) + "]")[1:-1]  # one line in any case
            self.repeated.append((f"table {header}", self._headers[path], line))
        else:
            self._headers[path] = line
        self.lines[path] = line
        return path

    def _current_entry(self, path: KeyPath) -> KeyPath:
        """The last entry, if the path is an array of tables, else the path."""
        entries = self._entries.get(path)
        return path if entries is None else (*path, entries - 1)

    def _check_depth(self, path: KeyPath, line: int) -> None:
        if len(path) > MAXIMUM_DEPTH:
            raise _TooDeepError(line)

    def _assignment(self, table: KeyPath, depth: int) -> None:
        self._skip(_SPACE)
        line = self._line()
        parts = self._key()
        path = table
        for part in parts[:-1]:
            path = (*path, part)
            self._check_depth(path, line)
            self.lines.setdefault(path, line)
        path = (*path, parts[-1])
        if path in self._assigned:
            self.repeated.append((f"key {'.'.join(parts)!r}", self._assigned[path], line))
        self._assigned.setdefault(path, line)
        self.lines[path] = line
        self._expect("=")
        self._value(path, depth)

    def _value(self, path: KeyPath, depth: int) -> None:
        self._skip(_SPACE)
        if depth > MAXIMUM_DEPTH:
            raise _TooDeepError(self._line())
        self._check_depth(path, self._line())
        if self._accept("["):
            self._array(path, depth)
        elif self._accept("{"):
            self._inline_table(path, depth)
        elif self._string() is None:
            match = _SCALAR.match(self.text, self.position)
            if match is None:
                raise _UnreadableError
            self.position = match.end()

    def _array(self, path: KeyPath, depth: int) -> None:
        index = 0
        while True:
            self._skip(_SPACE_LINES_COMMENTS)
            if self._accept("]"):
                return
            self.lines[(*path, index)] = self._line()
            self._value((*path, index), depth + 1)
            index += 1
            self._skip(_SPACE_LINES_COMMENTS)
            if not self._accept(","):
                self._expect("]")
                return

    def _inline_table(self, path: KeyPath, depth: int) -> None:
        # Newer TOML allows line ends here; the parser has already decided whether it does.
        while True:
            self._skip(_SPACE_LINES_COMMENTS)
            if self._accept("}"):
                return
            self._assignment(path, depth + 1)
            self._skip(_SPACE_LINES_COMMENTS)
            if not self._accept(","):
                self._expect("}")
                return
