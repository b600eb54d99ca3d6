"""Where each key of a TOML text stands, so that a message can name the line.

The standard parser gives values without places. The text has already passed that parser when it
comes here, so this reader only has to follow the brackets and quotes, not to judge them.
"""

from collections.abc import Iterator, Mapping

KeyPath = tuple[str | int, ...]
_BLANK = " \t\r\n"
_BARE_END = ",]}#\r\n"


def key_lines(text: str) -> dict[KeyPath, int]:
    r"""Return the line (from 1) of each table, key and list entry of a valid TOML text.

    A path holds table and key names, and for an entry of a list its number from 0. The empty path
    is the file itself, on line 1.

    Examples
    --------
    >>> lines = key_lines('[study]\nname = "a"\n[[preference]]\nlayer = "depth"\n')
    >>> lines["study", "name"], lines["preference", 0, "layer"]
    (2, 4)
    """
    reader = _Reader(text)
    reader.read()
    return reader.lines


def line_of(lines: Mapping[KeyPath, int], path: KeyPath) -> int:
    """Return the line of a path, or of the nearest table around it that the file holds."""
    return next(lines[path[:size]] for size in range(len(path), -1, -1) if path[:size] in lines)


class _Reader:
    """One walk through the text, a cursor and what it has passed."""

    def __init__(self, text: str) -> None:
        self.text = text
        self.at = 0
        self.lines: dict[KeyPath, int] = {(): 1}
        self.entries: dict[KeyPath, int] = {}

    def read(self) -> None:
        table: KeyPath = ()
        while self._skip_blank():
            if self.text[self.at] == "[":
                table = self._header()
            else:
                self._assignment(table)

    def _skip_blank(self, blank: str = _BLANK) -> bool:
        """Pass blanks and comments; tell whether anything is left."""
        while self.at < len(self.text):
            if self.text[self.at] == "#":
                self._skip_to("\n")
            elif self.text[self.at] in blank:
                self.at += 1
            else:
                return True
        return False

    def _skip_to(self, stops: str) -> None:
        while self.at < len(self.text) and self.text[self.at] not in stops:
            self.at += 1

    def _note(self, path: KeyPath) -> None:
        self.lines.setdefault(path, self.text.count("\n", 0, self.at) + 1)

    def _header(self) -> KeyPath:
        """Read ``[a.b]`` or ``[[a.b]]`` and return the path of the table it opens."""
        listed = self.text.startswith("[[", self.at)
        start, self.at = self.at, self.at + 1 + listed
        *outer, last = self._key()
        end, self.at = self.at, start
        path = (*self._inside(outer), last)
        self._note(path)
        if listed:
            self.entries[path] = self.entries.get(path, -1) + 1
            path = (*path, self.entries[path])
        elif path in self.entries:
            path = (*path, self.entries[path])
        self._note(path)
        self.at = end
        self._skip_to("\n")
        return path

    def _inside(self, names: list[str]) -> KeyPath:
        """Follow names down, through the newest entry of each list of tables."""
        path: KeyPath = ()
        for name in names:
            path = (*path, name)
            self._note(path)
            if path in self.entries:
                path = (*path, self.entries[path])
        return path

    def _key(self) -> list[str]:
        """Read a dotted key; the cursor ends behind it."""
        return list(self._key_parts())

    def _key_parts(self) -> Iterator[str]:
        while True:
            self._skip_blank(" \t")
            if self.text[self.at] in "\"'":
                start = self.at
                self._string()
                yield self.text[start + 1 : self.at - 1]
            else:
                start = self.at
                self._skip_to(" \t.=]")
                yield self.text[start : self.at]
            self._skip_blank(" \t")
            if self.text[self.at] != ".":
                return
            self.at += 1

    def _assignment(self, table: KeyPath) -> None:
        start = self.at
        names = self._key()
        end, self.at = self.at, start
        path = table
        for name in names:
            path = (*path, name)
            self._note(path)
        self.at = end + 1
        self._value(path)

    def _value(self, path: KeyPath) -> None:
        self._skip_blank(" \t")
        first = self.text[self.at]
        if first in "\"'":
            self._string()
        elif first == "[":
            self._list(path)
        elif first == "{":
            self._inline_table(path)
        else:
            self._skip_to(_BARE_END)

    def _string(self) -> None:
        quote = self.text[self.at]
        fence = quote * 3 if self.text.startswith(quote * 3, self.at) else quote
        self.at += len(fence)
        while not self.text.startswith(fence, self.at):
            self.at += 2 if quote == '"' and self.text[self.at] == "\\" else 1
        self.at += len(fence)
        while len(fence) == 3 and self.text.startswith(quote, self.at):
            self.at += 1

    def _list(self, path: KeyPath) -> None:
        self.at += 1
        entry = 0
        while self._skip_blank() and self.text[self.at] != "]":
            if self.text[self.at] == ",":
                self.at += 1
                continue
            self._note((*path, entry))
            self._value((*path, entry))
            entry += 1
        self.at += 1

    def _inline_table(self, path: KeyPath) -> None:
        self.at += 1
        while self._skip_blank() and self.text[self.at] != "}":
            if self.text[self.at] == ",":
                self.at += 1
            else:
                self._assignment(path)
        self.at += 1
