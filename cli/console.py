"""What the terminal shows: progress, results, faults, and the caution at the end."""

from __future__ import annotations

import json
import sys
import time
from typing import Any

SECONDS_BETWEEN_LINES = 2.0


class Console:
    """Results on stdout, everything else on stderr.

    Parameters
    ----------
    as_json : bool
        One JSON document on stdout; words go to stderr.
    quiet : bool
        No progress.
    """

    def __init__(self, *, as_json: bool, quiet: bool) -> None:
        self.as_json, self.quiet = as_json, quiet
        self._live = sys.stderr.isatty()
        self._open = False
        self._begin = time.monotonic()
        self._last: tuple[str, float] = ("", 0.0)

    def progress(self, stage: str, step: int, total: int, note: str = "") -> None:
        """A progress line: rewritten in place on a terminal, now and then a plain line elsewhere."""
        if self.quiet:
            return
        now = time.monotonic()
        of = f" {step}/{total}" if total else (f" {step}" if step else "")
        line = f"{now - self._begin:6.1f} s  {stage}{of}{'  ' + note if note else ''}"
        if self._live:
            sys.stderr.write("\r\x1b[2K" + line[:118])
            self._open = True
        elif stage != self._last[0] or now - self._last[1] > SECONDS_BETWEEN_LINES:
            sys.stderr.write(line + "\n")
            self._last = (stage, now)
        sys.stderr.flush()

    def _close_line(self) -> None:
        if self._open:
            sys.stderr.write("\r\x1b[2K")
            self._open = False

    def fault(self, sentence: str) -> None:
        """One line about what went wrong."""
        self._close_line()
        sys.stderr.write(f"volmap: {sentence}\n")

    def say(self, text: str) -> None:
        """A line for people."""
        self._close_line()
        print(text, file=sys.stderr if self.as_json else sys.stdout)

    def result(self, document: dict[str, Any]) -> None:
        """The result with the caution, when it was asked for as JSON."""
        if self.as_json:
            from volmap.io.json_documents import plain
            from volmap.types.notice import caution

            self._close_line()
            told = {"notice": caution()} | document
            print(json.dumps(plain(told), indent=2, ensure_ascii=False, allow_nan=False))

    def end(self) -> None:
        """The last line of every command: the caution."""
        from volmap.types.notice import caution

        self.say(caution())
