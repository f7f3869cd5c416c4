"""Lines of the keys in a TOML text, so that messages can point at them.

``tomllib`` gives values without their places. The text handed in here has already been read by it, so the scanner may
take the syntax as sound and only has to keep count.
"""

from __future__ import annotations

import bisect
import tomllib

__all__ = ["Path", "key_lines", "line_of"]

Path = tuple[str | int, ...]

_SPACE = " \t"
_BARE_END = ",]}\n#"


def key_lines(text: str) -> dict[Path, int]:
    """Return the line (from 1) of every key and table header of a TOML text.

    Parameters
    ----------
    text : str
        Sound TOML.

    Returns
    -------
    dict
        Path of the key, e.g. ``("plots", "design", "circles", 0, "radius_m")``, to its line.
    """
    return _Scanner(text).scan()


def line_of(lines: dict[Path, int], path: Path) -> int | None:
    """Return the line of a key or, where it does not stand in the text, of the nearest table above it."""
    for length in range(len(path), 0, -1):
        if path[:length] in lines:
            return lines[path[:length]]
    return None


class _Scanner:
    """Walk through the text once; each method leaves ``at`` behind what it has read."""

    def __init__(self, text: str) -> None:
        self.text = text.replace("\r\n", "\n")
        self.at = 0
        self.starts = [0] + [index + 1 for index, letter in enumerate(self.text) if letter == "\n"]
        self.lines: dict[Path, int] = {}
        self.counts: dict[Path, int] = {}

    def scan(self) -> dict[Path, int]:
        table: Path = ()
        self._skip(newlines=True)
        while self.at < len(self.text):
            if self.text[self.at] == "[":
                table = self._header()
            else:
                self._pair(table)
            self._skip(newlines=True)
        return self.lines

    def _line(self) -> int:
        return bisect.bisect_right(self.starts, self.at)

    def _note(self, path: Path) -> None:
        line = self._line()
        for length in range(1, len(path) + 1):
            self.lines.setdefault(path[:length], line)

    def _skip(self, *, newlines: bool) -> None:
        """Go past blanks and, if asked, line ends and comments."""
        while self.at < len(self.text):
            letter = self.text[self.at]
            if letter in _SPACE or (newlines and letter == "\n"):
                self.at += 1
            elif letter == "#" and newlines:
                end = self.text.find("\n", self.at)
                self.at = len(self.text) if end < 0 else end
            else:
                return

    def _header(self) -> Path:
        many = self.text.startswith("[[", self.at)
        start = self.at
        self.at += 2 if many else 1
        path = self._anchored(self._key())
        if many:
            number = self.counts.get(path, -1) + 1
            self.counts[path] = number
            path = (*path, number)
        end, self.at = self.at, start
        self._note(path)
        self.at = end
        self._skip(newlines=False)
        self.at += 2 if many else 1
        return path

    def _anchored(self, key: Path) -> Path:
        """Insert the running number of arrays of tables into a header's path."""
        path: Path = ()
        for part in key:
            path = (*path, part)
            if path in self.counts and path != key:
                path = (*path, self.counts[path])
        return path

    def _pair(self, table: Path) -> None:
        start = self.at
        key = self._key()
        end, self.at = self.at, start
        path = (*table, *key)
        self._note(path)
        self.at = end + 1  # the equals sign
        self._value(path)

    def _key(self) -> Path:
        """Read a dotted key up to the sign behind it."""
        parts: list[str] = []
        while True:
            self._skip(newlines=False)
            letter = self.text[self.at]
            start = self.at
            if letter in "\"'":
                self._string(letter)
                parts += tomllib.loads(f"{self.text[start : self.at]} = 0")
            else:
                while self.text[self.at] not in "=.]} \t\n":
                    self.at += 1
                parts.append(self.text[start : self.at])
            self._skip(newlines=False)
            if self.text[self.at] != ".":
                return tuple(parts)
            self.at += 1

    def _value(self, path: Path) -> None:
        self._skip(newlines=True)
        letter = self.text[self.at]
        if letter == "{":
            self._inline(path)
        elif letter == "[":
            self._array(path)
        elif letter in "\"'":
            self._string(letter * 3 if self.text.startswith(letter * 3, self.at) else letter)
        else:
            while self.at < len(self.text) and self.text[self.at] not in _BARE_END:
                self.at += 1

    def _inline(self, path: Path) -> None:
        self.at += 1
        self._skip(newlines=True)
        while self.text[self.at] != "}":
            self._pair(path)
            self._next()
        self.at += 1

    def _array(self, path: Path) -> None:
        self.at += 1
        self._skip(newlines=True)
        number = 0
        while self.text[self.at] != "]":
            self._note((*path, number))
            self._value((*path, number))
            self._next()
            number += 1
        self.at += 1

    def _next(self) -> None:
        self._skip(newlines=True)
        if self.text[self.at] == ",":
            self.at += 1
            self._skip(newlines=True)

    def _string(self, quote: str) -> None:
        self.at += len(quote)
        while not self.text.startswith(quote, self.at):
            self.at += 2 if self.text[self.at] == "\\" and quote[0] == '"' else 1
        self.at += len(quote)
        # Up to two quotation marks may stand right before the closing three.
        while len(quote) == 3 and self.at < len(self.text) and self.text[self.at] == quote[0]:
            self.at += 1
