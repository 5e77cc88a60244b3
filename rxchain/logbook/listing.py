"""What was logged, as rows to choose from and to hand on: table, CSV, JSON Lines, ADIF."""

from __future__ import annotations

import csv
import datetime as dt
import io
import json
from collections.abc import Iterable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from rxchain import __version__
from rxchain.logbook.store import Entry, read_entries

COLUMNS = (
    "number", "start", "end", "seconds", "channel", "frequency_hz", "carrier_offset_hz", "emission", "emission_confidence",
    "detector", "snr_db", "depth_percent", "level_dbfs", "fades", "gaps", "cut", "of", "marks", "audio",
)  # fmt: skip
_ADIF_VERSION = "3.1.4"
_ADIF_MODES = {"A3E": "AM", "A1A": "CW", "J3E": "SSB", "R3E": "SSB", "H3E": "SSB", "C3E": "AM", "AM-STEREO": "AM"}
_FORMULA_STARTS = ("=", "+", "-", "@", "\t", "\r")


@dataclass(frozen=True, slots=True)
class Filter:
    """Which transmissions; None leaves a condition out. since, until : of their beginning, ISO 8601 UTC text."""

    since: str | None = None
    until: str | None = None
    channel: str | None = None
    emission: str | None = None
    least_snr_db: float | None = None
    text: str | None = None

    def passes(self, row: dict[str, Any]) -> bool:
        """Whether a row, as :func:`rows` makes it, is wanted."""
        start = row["start"] or ""
        words = " ".join(str(row[key]) for key in ("channel", "emission", "cut", "marks") if row[key]).lower()
        return (
            (self.since is None or start >= self.since)
            and (self.until is None or start < self.until)
            and (self.channel is None or row["channel"] == self.channel)
            and (self.emission is None or row["emission"] == self.emission)
            and (self.least_snr_db is None or (row["snr_db"] is not None and row["snr_db"] >= self.least_snr_db))
            and (self.text is None or self.text.lower() in words)
        )


def rows(folder: Path, wanted: Filter | None = None) -> list[dict[str, Any]]:
    """The transmissions that pass, in the order in which they ended; keys are :data:`COLUMNS`."""
    transmissions: list[Entry] = []
    marks: dict[int, list[str]] = {}
    for entry in read_entries(folder):
        if entry.kind == "transmission":
            transmissions.append(entry)
        elif entry.kind == "mark" and "of" in entry.body:
            marks.setdefault(int(entry.body["of"]), []).append(str(entry.body.get("text", "")))
    made = (_row(entry, marks.get(entry.number, [])) for entry in transmissions)
    return [row for row in made if wanted is None or wanted.passes(row)]


def as_csv(listed: Iterable[dict[str, Any]]) -> str:
    """The rows as CSV (RFC 4180); text that a spreadsheet would take for a formula gets an apostrophe before it."""
    output = io.StringIO()
    writer = csv.writer(output)
    writer.writerow(COLUMNS)
    for row in listed:
        writer.writerow([_cell(row[key]) for key in COLUMNS])
    return output.getvalue()


def as_json_lines(listed: Iterable[dict[str, Any]]) -> Iterator[str]:
    """A row a line."""
    for row in listed:
        yield json.dumps(row, ensure_ascii=False)


def as_adif(listed: Iterable[dict[str, Any]]) -> str:
    """The rows as an ADIF file (Amateur Data Interchange Format 3.1.4) of listening reports."""
    head = [_field("ADIF_VER", _ADIF_VERSION), _field("PROGRAMID", "rxchain"), _field("PROGRAMVERSION", __version__)]
    records = ["Transmissions heard\n" + "\n".join(head) + "\n<EOH>\n"]
    for row in listed:
        fields = [_field("SWL", "Y"), _field("FREQ", f"{row['frequency_hz'] / 1e6:.6f}")]
        for when, date, time in (("start", "QSO_DATE", "TIME_ON"), ("end", "QSO_DATE_OFF", "TIME_OFF")):
            if row[when]:
                moment = dt.datetime.fromisoformat(row[when])
                fields += [_field(date, moment.strftime("%Y%m%d")), _field(time, moment.strftime("%H%M%S"))]
        family, _, side = str(row["emission"]).partition("-")
        mode = _ADIF_MODES.get(str(row["emission"]), _ADIF_MODES.get(family))
        if mode:
            fields.append(_field("MODE", mode))
        if mode == "SSB":
            fields.append(_field("SUBMODE", side))
        snr = "" if row["snr_db"] is None else f", SNR {row['snr_db']:.1f} dB"
        words = f"{row['channel']}: {row['emission']}{snr}" + (f"; {row['marks']}" if row["marks"] else "")
        fields.append(_field("COMMENT", words))
        records.append(" ".join(fields) + " <EOR>\n")
    return "".join(records)


def _row(entry: Entry, marks: list[str]) -> dict[str, Any]:
    body = entry.body
    measured = body.get("measured") or {}
    audio = [file["path"] for file in body.get("files", []) if file.get("kind") == "audio"]
    row = {key: body.get(key) for key in COLUMNS}
    for key in ("carrier_offset_hz", "snr_db", "depth_percent", "level_dbfs"):
        reading = measured.get(key)
        row[key] = None if reading is None else round(reading["value"], 3)
    return row | {"number": entry.number, "marks": "; ".join(marks), "audio": audio[0] if audio else None}


def _cell(value: Any) -> Any:
    if isinstance(value, str) and value.startswith(_FORMULA_STARTS):
        return "'" + value
    return "" if value is None else value


def _field(name: str, value: str) -> str:
    text = "".join(character if 32 <= ord(character) < 127 else "?" for character in value)
    return f"<{name}:{len(text)}>{text}"
