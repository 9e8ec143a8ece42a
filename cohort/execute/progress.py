"""How a run tells where it is: one live line on a terminal, a plain line every 30 s elsewhere, and a log on request."""

from __future__ import annotations

import threading
import time
from pathlib import Path
from typing import TextIO

from cohort.study.plan import duration

LIVE_EVERY_S = 0.2
PLAIN_EVERY_S = 30.0


class Progress:
    """Counts runs done of all; some were there when the run began. Threads may call `add`. stream: where people read, or
    None; log: a file that gets a line with its time every 30 s and at every note."""

    def __init__(self, stream: TextIO | None, log: Path | None = None) -> None:
        self.total = self.done = self.before = 0
        self.stream, self.log = stream, log
        self.live = stream is not None and stream.isatty()
        self._began = self._shown = self._logged = time.monotonic()
        self._lock = threading.Lock()

    def begin(self, total: int, there: int) -> None:
        """Note that a run has `total` runs, of which so many were there."""
        self.total, self.done, self.before = total, there, there
        self._began = time.monotonic()

    def more(self, runs: int) -> None:
        """Note that so many more runs are to do."""
        with self._lock:
            self.total += runs

    def add(self, runs: int) -> None:
        """Note that so many more runs are finished."""
        with self._lock:
            self.done += runs
            now = time.monotonic()
            if now - self._shown >= (LIVE_EVERY_S if self.live else PLAIN_EVERY_S):
                self._shown = now
                self._show(now)
            if self.log is not None and now - self._logged >= PLAIN_EVERY_S:
                self._logged = now
                self.note(self._line(now))

    def note(self, text: str) -> None:
        """Add a line with the time to the log, where there is one. Raises OSError where it cannot be written."""
        if self.log is not None:
            with self.log.open("a", encoding="utf-8") as file:
                file.write(f"{time.strftime('%Y-%m-%d %H:%M:%S')} {text}\n")

    def _line(self, now: float) -> str:
        rate = (self.done - self.before) / max(now - self._began, 1e-9)
        left = duration((self.total - self.done) / rate) if rate > 0 else "?"
        return f"{self.done:,} of {self.total:,} runs, {rate:,.0f}/s, {left} left"

    def _show(self, now: float) -> None:
        if self.stream is None:
            return
        line = self._line(now)
        self.stream.write(f"\r{line:<78}" if self.live else line + "\n")
        self.stream.flush()

    def end(self) -> None:
        """Clear the live line."""
        if self.live and self.stream is not None:
            self.stream.write("\r" + " " * 78 + "\r")
            self.stream.flush()
