"""Where each key of a TOML text stands: a reader of valid TOML that keeps line numbers and nothing else."""

from __future__ import annotations

from dataclasses import dataclass, field

Path = tuple[str | int, ...]

_DEEPEST = 60


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

    def blank(self, newlines: bool) -> None:
        """Skip white space and comments."""
        while self.at < len(self.text):
            c = self.peek()
            if c == "#":
                end = self.text.find("\n", self.at)
                self.step((len(self.text) if end < 0 else end) - self.at)
            elif c in " \t\r" or (c == "\n" and newlines):
                self.step()
            else:
                return

    def quoted(self) -> str:
        """Read a string in any of the four quotings; escapes are left as they are."""
        quote = self.peek()
        mark = quote * 3 if self.text.startswith(quote * 3, self.at) else quote
        self.step(len(mark))
        begin = self.at
        while self.at < len(self.text):
            if quote == '"' and self.peek() == "\\":
                self.step(2)
            elif self.text.startswith(mark, self.at):
                while len(mark) == 3 and self.text.startswith(quote, self.at + 3):
                    self.step()
                inside = self.text[begin : self.at]
                self.step(len(mark))
                return inside
            else:
                self.step()
        return self.text[begin:]

    def name(self) -> tuple[str, ...]:
        """Read a key, dotted or not."""
        parts: list[str] = []
        while True:
            self.blank(False)
            if self.peek() in ("'", '"'):
                parts.append(self.quoted())
            else:
                begin = self.at
                while self.peek() and self.peek() not in " \t.=]\r\n":
                    self.step()
                parts.append(self.text[begin : self.at])
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
            while self.peek() and self.peek() not in ",]}#\n":
                self.step()

    def array(self, path: Path, depth: int) -> None:
        self.step()
        index = 0
        while self.at < len(self.text):
            self.blank(True)
            if self.peek() == "]":
                self.step()
                return
            if self.peek() == ",":
                self.step()
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
