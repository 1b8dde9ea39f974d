"""Every step of a review on disk before the page hears of it, so that a crash loses at most the drag in hand."""

from __future__ import annotations

import json
import os
from collections.abc import Iterator
from pathlib import Path
from typing import Any


class Journal:
    """An append-only file of steps beside the run; it goes when the review is saved or given up.

    Parameters
    ----------
    path : Path
    run : str
        What identifies the tables that the steps start from: steps of other tables are not taken up.
    """

    def __init__(self, path: Path, run: str) -> None:
        self.path, self.run = path, run

    def lines(self) -> Iterator[dict[str, Any]]:
        """Yield the steps of an unsaved review of the same tables; a torn last line is left out."""
        if not self.path.is_file():
            return
        with self.path.open(encoding="utf-8") as stream:
            for number, line in enumerate(stream):
                if not line.endswith("\n"):
                    return
                try:
                    step = json.loads(line)
                except ValueError:
                    return
                if number == 0:
                    if step != {"run": self.run}:
                        return
                else:
                    yield step

    def append(self, step: dict[str, Any]) -> None:
        """Write a step through to the disk."""
        new = not self.path.exists()
        with self.path.open("a", encoding="utf-8") as stream:
            if new:
                stream.write(json.dumps({"run": self.run}) + "\n")
            stream.write(json.dumps(step, ensure_ascii=False) + "\n")
            stream.flush()
            os.fsync(stream.fileno())

    def clear(self) -> None:
        """Forget every step."""
        self.path.unlink(missing_ok=True)

    def settle(self) -> list[dict[str, Any]]:
        """Return the steps that hold, and rewrite the file without a torn end or another run's steps."""
        steps = list(self.lines())
        self.clear()
        for step in steps:
            self.append(step)
        return steps
