"""Where each key of a TOML text stands: a reader of valid TOML that keeps line numbers and nothing else."""

from __future__ import annotations

import re
from dataclasses import dataclass, field

Path = tuple[str | int, ...]

_DEEPEST = 60
_BLANK = re.compile(r"(?:[ \t\r]++|#[^\n]*+)*+")
_BLANKS = re.compile(r"(?:[ \t\r\n]++|#[^\n]*+)*+")
_BARE = re.compile(r"[^ \t.=\]\r\n]*+")
_NUMBERS = re.compile(r"(?:[\w.+-]++[ \t]*+,[ \t]*+)*+")
_PLAIN = re.compile(r"[^,\]}#\n]*+")
_INSIDE = {  # of a string after its opening mark
    '"': re.compile(r'(?:[^"\\]++|\\.?)*+', re.DOTALL),
    "'": re.compile(r"[^']*+"),
    '"""': re.compile(r'(?:[^"\\]++|\\.?|"{1,2}+(?!"))*+', re.DOTALL),
    "'''": re.compile(r"(?:[^']++|'{1,2}+(?!'))*+"),
}


@dataclass
class _Reader:
    text: str
    at: int = 0
    line: int = 1
    lines: dict[Path, int] = field(default_factory=dict)
    counts: dict[Path, int] = field(default_factory=dict)

    def peek(self, ahead: int = 0) -> str:
        place = self.at + ahead
        return self.text[place] if place < len(self.text) else ""

    def step(self, n: int = 1) -> None:
        self.line += self.text.count("\n", self.at, self.at + n)
        self.at += n

    def skip(self, pattern: re.Pattern[str]) -> str:
        """Step over what a pattern matches here (all of them match nothing too) and return it."""
        found = pattern.match(self.text, self.at)
        assert found is not None
        self.line += found[0].count("\n")
        self.at = found.end()
        return found[0]

    def blank(self, newlines: bool) -> None:
        """Skip white space and comments."""
        self.skip(_BLANKS if newlines else _BLANK)

    def quoted(self) -> str:
        """Read a string in any of the four quotings; escapes are left as they are."""
        quote = self.peek()
        mark = quote * 3 if self.text.startswith(quote * 3, self.at) else quote
        self.step(len(mark))
        inside = self.skip(_INSIDE[mark])
        self.step(len(mark))
        while len(mark) == 3 and self.peek() == quote:  # up to two quotes may stand before the closing mark
            inside += quote
            self.step()
        return inside

    def name(self) -> tuple[str, ...]:
        """Read a key, dotted or not."""
        parts: list[str] = []
        while True:
            self.blank(False)
            part = self.quoted() if self.peek() in ("'", '"') else self.skip(_BARE)
            if len(parts) < _DEEPEST:
                parts.append(part)
            self.blank(False)
            if self.peek() != ".":
                return tuple(parts)
            self.step()

    def pair(self, base: Path, depth: int) -> None:
        line, begin = self.line, self.at
        path = base
        for part in self.name():
            path = (*path, part)
            self.lines.setdefault(path, line)
        if self.peek() == "=":
            self.step()
        self.value(path, depth)
        if self.at == begin:
            self.step()

    def value(self, path: Path, depth: int) -> None:
        self.blank(False)
        c = self.peek()
        if depth > _DEEPEST:
            self.at = len(self.text)
        elif c in ("'", '"'):
            self.quoted()
        elif c == "[":
            self.array(path, depth)
        elif c == "{":
            self.inline(path, depth)
        else:
            self.skip(_PLAIN)

    def array(self, path: Path, depth: int) -> None:
        self.step()
        index = 0
        while self.at < len(self.text):
            self.blank(True)
            for _ in range(self.skip(_NUMBERS).count(",")):  # a list may hold a hundred thousand of them
                self.lines[(*path, index)] = self.line
                index += 1
            if self.peek() == "]":
                self.step()
                return
            if self.peek() == ",":
                self.step()
                continue
            if self.peek() in "\n#":
                continue
            begin = self.at
            self.lines[(*path, index)] = self.line
            self.value((*path, index), depth + 1)
            index += 1
            if self.at == begin:
                self.step()

    def inline(self, path: Path, depth: int) -> None:
        self.step()
        while self.at < len(self.text):
            self.blank(True)
            if self.peek() == "}":
                self.step()
                return
            if self.peek() == ",":
                self.step()
            else:
                self.pair(path, depth + 1)

    def header(self) -> Path:
        line = self.line
        double = self.peek(1) == "["
        self.step(2 if double else 1)
        path: Path = ()
        parts = self.name()
        for i, part in enumerate(parts):
            path = (*path, part)
            if double and i == len(parts) - 1:
                self.counts[path] = self.counts.get(path, -1) + 1
            self.lines.setdefault(path, line)
            if path in self.counts:
                path = (*path, self.counts[path])
                self.lines.setdefault(path, line)
        while self.peek() == "]":
            self.step()
        return path

    def document(self) -> dict[Path, int]:
        base: Path = ()
        while True:
            self.blank(True)
            if not self.peek():
                return self.lines
            if self.peek() == "[":
                base = self.header()
            else:
                self.pair(base, 0)


def locate(text: str) -> dict[Path, int]:
    """Return the line (from 1) of every key and array item of a valid TOML text, by its path of names and indices."""
    return _Reader(text).document()
