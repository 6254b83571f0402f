"""Which format a text is in, from its content; the file's name is not asked."""

from __future__ import annotations

import csv
import re

from firstarc.formats.ades import looks_like_keyword_record

ADES_PSV, CSV, ECSV = "ADES PSV", "CSV", "ECSV"

#: Formats that are known by sight but not read, with what to do instead.
NOT_READ = {
    "ADES XML": "Convert it to ADES PSV",
    "CCSDS tracking data message": "Write its angles as CSV with ra_deg, dec_deg, time_utc and station columns",
    "MPC 80-column": "Convert it to ADES PSV",
    "two-line elements": "It holds an orbit, not observations",
    "XML": "Convert it to ADES PSV or CSV",
    "spreadsheet or other binary": "Save it as CSV",
}

_MPC80 = re.compile(r".{14}[ A-Za-z](?:1[89]|20)\d\d (?:0\d|1[0-2]) [0-3]\d\.\d", re.ASCII)
_DELIMITERS = ",;\t"


def recognise(text: str) -> str | None:
    """Name of the format: one of the read formats, a key of :data:`NOT_READ`, or None."""
    if "\0" in text[:4096]:
        return "spreadsheet or other binary"
    head = text.lstrip()[:2000]
    if head.startswith("# %ECSV"):
        return ECSV
    if head.startswith("<"):
        if "<ades" in head:
            return "ADES XML"
        return "CCSDS tracking data message" if re.search(r"<tdm\b", head) else "XML"
    if re.search(r"^\s*CCSDS_TDM_VERS\s*=", head, re.MULTILINE):
        return "CCSDS tracking data message"
    lines = [line for line in text.splitlines() if line.strip()]
    if any(_MPC80.match(line) for line in lines[:50]):
        return "MPC 80-column"
    if re.search(r"^1 [ 0-9A-Z]{5}.{60,}\n2 [ 0-9A-Z]{5} ", text, re.MULTILINE):
        return "two-line elements"
    content = [line for line in lines if line.lstrip()[0] not in "#!"]
    if re.match(r"#\s*version\s*=", head) or (content and looks_like_keyword_record(content[0])):
        return ADES_PSV
    if content and csv_delimiter(content[0]):
        return CSV
    return None


def csv_delimiter(head: str) -> str | None:
    """The delimiter of a CSV head line: the one that splits it into most cells, None when none splits it."""
    counts = {d: len(next(csv.reader([head], delimiter=d), [])) for d in _DELIMITERS}
    best = max(counts, key=lambda d: counts[d])
    return best if counts[best] > 1 else None
