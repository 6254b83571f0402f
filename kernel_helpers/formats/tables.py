"""CSV, ECSV, pandas DataFrame and astropy Table: tables with named columns.

Every cell becomes text, floats by their shortest exact form, so that all inputs meet the same checks.
"""

from __future__ import annotations

import csv
import datetime
import io
import math
from collections.abc import Sequence
from typing import Any

from firstarc.errors import Problem
from firstarc.formats.plain import PlainInput, PlainRow, shortened
from firstarc.formats.recognition import csv_delimiter


def read_csv(text: str) -> tuple[PlainInput, list[Problem]]:
    """Split CSV (comma, semicolon or tab) into rows; lines that start with ``#`` are kept as header.

    Parameters
    ----------
    text : str

    Returns
    -------
    PlainInput, list of Problem
        Rows carry the line number at which they end in the file.
    """
    lines = list(io.StringIO(text, newline=""))
    header: list[str] = []
    first = 0
    while first < len(lines) and (not lines[first].strip() or lines[first].lstrip().startswith("#")):
        if lines[first].strip():
            header.append(lines[first].strip())
        first += 1
    if first == len(lines):
        return PlainInput("CSV", False, (), tuple(header)), []
    delimiter = csv_delimiter(lines[first]) or ","
    reader = csv.reader(lines[first:], delimiter=delimiter, strict=True)
    problems: list[Problem] = []
    rows: list[PlainRow] = []
    names: list[str] = []
    while True:
        started = first + reader.line_num + 1
        try:
            cells = next(reader)
        except StopIteration:
            break
        except csv.Error as error:
            problems.append(
                Problem(f"line {first + reader.line_num}", "", f"is not valid CSV ({error})", "Close the quotes")
            )
            break
        cells = [c.strip() for c in cells]
        if not any(cells):
            continue
        if not names:
            names = cells
            problems += _head_problems(names, started)
            continue
        if cells[0].startswith("#"):
            header.append(delimiter.join(cells))
            continue
        if (len(cells) > len(names) and any(cells[len(names) :])) or len(cells) < len(names):
            problems.append(
                Problem(
                    f"line {started}",
                    shortened(delimiter.join(cells)),
                    f"has {len(cells)} cells where the head line names {len(names)} columns",
                    "Give every column a cell, empty where there is no value; quote a cell that holds the delimiter",
                )
            )
            continue
        rows.append(PlainRow(f"line {started}", {n: c for n, c in zip(names, cells, strict=False) if n and c}))
    return PlainInput("CSV", False, tuple(rows), tuple(header), tuple(n for n in names if n)), problems


def _head_problems(names: Sequence[str], line: int | None) -> list[Problem]:
    where = f"line {line}" if line else "column names"
    twice = sorted({n for n in names if n and list(names).count(n) > 1})
    return [
        Problem(f"{where}, column {n}", n, "is the name of two columns", "Give each column its own name") for n in twice
    ]


def read_ecsv(text: str) -> tuple[PlainInput, list[Problem]]:
    """Read ECSV (astropy's self-describing CSV); the units of its columns settle how angles are read."""
    from astropy.table import Table

    try:
        table = Table.read(text.splitlines(), format="ascii.ecsv")
    except Exception as error:  # the reader raises many kinds; none of them is an error of firstarc's own
        return PlainInput("ECSV", False, ()), [
            Problem(
                "header or body",
                "",
                f"is not valid ECSV ({shortened(str(error), 160)})",
                "Write it again as ECSV",
            )
        ]
    return from_astropy_table(table, "ECSV")


def from_astropy_table(table: Any, format: str = "astropy Table") -> tuple[PlainInput, list[Problem]]:
    """Rows of an astropy Table; angle columns with a unit become degrees, Time columns UTC text."""
    from astropy import units as u
    from astropy.time import Time

    problems: list[Problem] = []
    columns: list[tuple[str, list[str]]] = []
    for name in table.colnames:
        column = table[name]
        shown = str(name)
        if isinstance(column, Time):
            texts = [t if ok else "" for t, ok in zip(_utc_of_time(column), _present(column), strict=True)]
            columns.append((shown, texts))
            continue
        unit = getattr(column, "unit", None)
        values: Any = column
        if unit is not None and str(unit) != "":
            renamed, target = _unit_target(shown, u)
            if target is not None:
                try:
                    factor = (1.0 * u.Unit(unit)).to_value(target)
                except Exception:
                    problems.append(
                        Problem(
                            f"column {shown}",
                            str(unit),
                            f"is a unit that cannot be turned into {target}",
                            f"Give the column in {target} or a unit of the same kind",
                        )
                    )
                    continue
                if _says_another_unit(shown, factor):
                    problems.append(
                        Problem(
                            f"column {shown}",
                            str(unit),
                            "contradicts the unit in the column's name",
                            "Rename the column or correct its unit",
                        )
                    )
                    continue
                if factor != 1.0:
                    values = [None if _missing(v) else float(_plain(v)) * factor for v in column]
                shown = renamed
        columns.append((shown, [_cell_text(v) for v in values]))
    return _rows_of(columns, format, problems)


def _utc_of_time(column: Any) -> list[str]:
    utc = column.utc
    utc = utc.copy(format="isot")
    utc.precision = 9
    return [str(t) + "Z" for t in utc.value]


def _present(column: Any) -> list[bool]:
    mask = getattr(column, "mask", None)
    return [True] * len(column) if mask is None else [not bool(m) for m in mask]


def _unit_target(name: str, u: Any) -> tuple[str, Any]:
    """New name and unit of a column that carries a unit; (name, None) for columns of no meaning here."""
    angles = {"ra": "ra_deg", "dec": "dec_deg", "lon": "lon_deg", "lat": "lat_deg"}
    if name in angles:
        return angles[name], u.deg
    if name in ("ra_deg", "dec_deg", "lon_deg", "lat_deg"):
        return name, u.deg
    if name == "ra_h":
        return name, u.hourangle
    sigmas = {"sigma_ra": "sigma_ra_arcsec", "sigma_dec": "sigma_dec_arcsec", "sigma": "sigma_arcsec"}
    if name in sigmas:
        return sigmas[name], u.arcsec
    if name in ("sigma_ra_arcsec", "sigma_dec_arcsec", "sigma_arcsec", "rmsRA", "rmsDec"):
        return name, u.arcsec
    if name in ("height", "height_m"):
        return "height_m", u.m
    if name in ("sigma_time", "sigma_time_s"):
        return "sigma_time_s", u.s
    if name == "rmsTime":
        return name, u.s
    return name, None


def _says_another_unit(name: str, factor: float) -> bool:
    return name.endswith(("_deg", "_h", "_arcsec", "_m", "_s")) and abs(factor - 1.0) > 1e-12


def from_dataframe(frame: Any) -> tuple[PlainInput, list[Problem]]:
    """Rows of a pandas DataFrame; time-zone aware times become UTC text, an index is not read."""
    columns = []
    for position, name in enumerate(frame.columns):
        columns.append((str(name), [_cell_text(v) for v in frame.iloc[:, position].tolist()]))
    return _rows_of(columns, "pandas DataFrame", [])


def _rows_of(
    columns: Sequence[tuple[str, list[str]]], format: str, problems: list[Problem]
) -> tuple[PlainInput, list[Problem]]:
    names = [n for n, _ in columns]
    problems = problems + _head_problems(names, None)
    count = len(columns[0][1]) if columns else 0
    rows = tuple(
        PlainRow(f"row {i + 1}", {n: texts[i] for n, texts in columns if n and texts[i]}) for i in range(count)
    )
    return PlainInput(format, False, rows, (), tuple(names)), problems


def _missing(value: Any) -> bool:
    if value is None or type(value).__name__ in ("NAType", "NaTType", "MaskedConstant"):
        return True
    return isinstance(value, float) and math.isnan(value)


def _plain(value: Any) -> Any:
    """A numpy scalar or quantity as a Python value."""
    if type(value).__module__.startswith("astropy") and hasattr(value, "value"):
        value = value.value
    if type(value).__name__ == "datetime64":
        return str(value)
    item = getattr(value, "item", None)
    return item() if callable(item) and getattr(value, "shape", None) == () else value


def _cell_text(value: Any) -> str:
    """Text of a cell; floats by repr, so that reading the text gives the same number."""
    if _missing(value):
        return ""
    value = _plain(value)
    if _missing(value):
        return ""
    if isinstance(value, bool):
        return str(value)
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, bytes):
        return value.decode("utf-8", "replace").strip()
    if isinstance(value, datetime.datetime):
        if value.tzinfo is not None:
            # Timestamp and datetime both keep sub-second digits through isoformat.
            return value.astimezone(datetime.timezone.utc).isoformat().replace("+00:00", "Z")
        return value.isoformat()
    text = str(value).strip()
    return "" if text == "NaT" else text


def csv_text(columns: Sequence[tuple[str, Sequence[str]]]) -> str:
    """CSV of text columns, comma separated, quoted where needed, lines ended by a line feed."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow([n for n, _ in columns])
    writer.writerows(zip(*(texts for _, texts in columns), strict=True))
    return out.getvalue()


def canonical_csv(plain: PlainInput) -> str:
    """CSV of the cells of an input that has no file of its own; the text whose sha256 identifies it."""
    return csv_text([(n, [row.cells.get(n, "") for row in plain.rows]) for n in plain.columns])
