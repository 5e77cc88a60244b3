"""One topic's results as markdown: printed while they come, and written to ``results/TOPIC.md`` at the end of a full run."""

from __future__ import annotations

import datetime as dt
import sys
from collections.abc import Sequence
from pathlib import Path

FOLDER = Path(__file__).resolve().parent / "results"


class ResultsFile:
    """Collects lines. A ``--quick`` run prints them and writes nothing: its figures rest on too little."""

    def __init__(self, topic: str, title: str) -> None:
        self.quick = "--quick" in sys.argv
        self._topic, self._lines = topic, list[str]()
        self.text(f"# {title}")
        self.text(f"`python benchmarks/{Path(sys.argv[0]).name}`, {dt.date.today().isoformat()}.")

    def text(self, paragraph: str) -> None:
        """A paragraph or a heading."""
        self._put(paragraph, "")

    def table(self, columns: Sequence[str]) -> None:
        """Starts a table."""
        self._put("| " + " | ".join(columns) + " |", "|" + "---|" * len(columns))

    def row(self, *cells: object) -> None:
        """A line of the table; floats in three figures."""
        self._put("| " + " | ".join(f"{cell:.3g}" if isinstance(cell, float) else str(cell) for cell in cells) + " |")

    def close(self) -> None:
        """Ends a table or the file's section."""
        self._put("")

    def write(self) -> None:
        """Writes the file, unless the run was a quick one."""
        if self.quick:
            print("(quick run: nothing written)")
            return
        FOLDER.mkdir(exist_ok=True)
        path = FOLDER / f"{self._topic}.md"
        path.write_text("\n".join(self._lines).rstrip() + "\n", encoding="utf-8")
        print(f"written to {path}")

    def _put(self, *lines: str) -> None:
        self._lines += lines
        print("\n".join(lines), flush=True)
