"""How a run tells where it is: one live line on a terminal, a plain line every 30 s elsewhere."""

from __future__ import annotations

import sys
import threading
import time
from typing import TextIO

from cohort.study.plan import duration

LIVE_EVERY_S = 0.2
PLAIN_EVERY_S = 30.0


class Progress:
    """Counts runs done of all; some were there when the run began. Threads may call `add`."""

    def __init__(self, stream: TextIO | None = None) -> None:
        self.total = self.done = self.before = 0
        self.stream = stream or sys.stderr
        self.live = self.stream.isatty()
        self._began = self._shown = time.monotonic()
        self._lock = threading.Lock()

    def begin(self, total: int, there: int) -> None:
        """Note that a run has `total` runs, of which so many were there."""
        self.total, self.done, self.before = total, there, there
        self._began = time.monotonic()

    def more(self, runs: int) -> None:
        """Note that so many more runs are to do."""
        with self._lock:
            self.total += runs

    def add(self, subjects: int) -> None:
        """Note that so many more runs are finished."""
        with self._lock:
            self.done += subjects
            now = time.monotonic()
            if now - self._shown >= (LIVE_EVERY_S if self.live else PLAIN_EVERY_S):
                self._shown = now
                self._show(now)

    def _show(self, now: float) -> None:
        rate = (self.done - self.before) / max(now - self._began, 1e-9)
        left = duration((self.total - self.done) / rate) if rate > 0 else "?"
        line = f"{self.done:,} of {self.total:,} runs, {rate:,.0f}/s, {left} left"
        self.stream.write(f"\r{line:<78}" if self.live else line + "\n")
        self.stream.flush()

    def end(self) -> None:
        """Clear the live line."""
        if self.live:
            self.stream.write("\r" + " " * 78 + "\r")
            self.stream.flush()
