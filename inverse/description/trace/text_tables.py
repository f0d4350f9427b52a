"""Numbers from the text files of a laboratory: separators, decimal commas, comments and headers."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

_MISSING = {"", "nan", "na", "n/a", "-", "--", "null", "none"}
_SEPARATOR_NAMES = {"\t": "tab", ";": "semicolon", ",": "comma", " ": "blanks"}
_DECIMAL_COMMA = re.compile(r"[+-]?\d+,\d+([eE][+-]?\d+)?")


class TableError(ValueError):
    """A text file that cannot be read as a table of numbers; the message gives the mend."""


class TableNotFoundError(TableError, FileNotFoundError):
    """There is no file under the given path."""


@dataclass(frozen=True)
class TextTable:
    """A table of numbers as it stands in a text file.

    Attributes
    ----------
    names : tuple of str
        Column headers; empty where the file has none.
    values : ndarray, shape (rows, columns)
        The numbers, NaN where a field was empty or said so.
    lines : ndarray of int, shape (rows,)
        Line number in the file of each row, the first line being 1.
    comment : str
        Comment lines and any text above the header, one per line.
    encoding, separator : str
        How the file was read.
    named_in_comment : bool
        True where the headers stood in a comment line.
    """

    names: tuple[str, ...]
    values: NDArray[np.float64]
    lines: NDArray[np.int64]
    comment: str
    encoding: str
    separator: str
    named_in_comment: bool = False


@dataclass(frozen=True)
class _Line:
    number: int
    text: str


def read_table(
    path: str | Path, *, header_lines: int | None = None, decimal: str = ".", separator: str | None = None
) -> TextTable:
    """Read a text file as a table of numbers.

    Parameters
    ----------
    path : str or Path
        The file.
    header_lines : int, optional
        Number of lines above the first row of numbers. By default every line above the first row of numbers.
    decimal : {".", ","}
        The decimal mark.
    separator : str, optional
        Mark between columns, ``" "`` for any run of blanks; by default found from the first row of numbers.

    Returns
    -------
    TextTable
        Headers, numbers and what else the file said.

    Raises
    ------
    TableError
        If the file is missing, empty, binary, ragged, or written with another decimal mark.
    """
    if decimal not in (".", ","):
        raise TableError(f"decimal is {decimal!r}; it must be '.' or ','")
    text, encoding = _decode(Path(path))
    name = Path(path).name
    lines = [_Line(i, s.strip("\r\n")) for i, s in enumerate(text.split("\n"), 1) if s.strip()]
    remarks = [line for line in lines if line.text.lstrip().startswith("#")]
    rest = [line for line in lines if not line.text.lstrip().startswith("#")]
    head, body = _split_head(rest, header_lines, decimal, separator, name)
    mark = separator or find_separator(body[0].text, decimal)
    _refuse_other_decimal(body[0], mark, decimal, name)
    values = _parse_rows(body, mark, decimal, name)
    names, loose = _find_names(head, remarks, body[0], mark, values.shape[1], name)
    comment = "\n".join(line.text.lstrip("# ").rstrip() for line in sorted(loose, key=lambda x: x.number))
    numbers = np.array([line.number for line in body])
    written = _SEPARATOR_NAMES.get(mark, mark)
    return TextTable(
        names, values, numbers, comment, encoding, written, bool(names) and len(loose) < len(remarks)
    )


def find_separator(line: str, decimal: str = ".") -> str:
    """Separator of a row of numbers: tab, semicolon, comma or blanks, in this order of preference."""
    for mark in ("\t", ";"):
        if mark in line:
            return mark
    blanks = line.split()
    comma_is_decimal = decimal == "," or (len(blanks) > 1 and all(_is_number(b, ",") for b in blanks))
    return " " if comma_is_decimal or "," not in line else ","


def split_fields(line: str, separator: str) -> list[str]:
    """Split one line into stripped, unquoted fields."""
    fields = line.split() if separator == " " else line.split(separator)
    return [field.strip().strip('"').strip() for field in fields]


def _decode(path: Path) -> tuple[str, str]:
    """Text of the file and its encoding: UTF-8, UTF-16 with its mark, or else Latin 1."""
    if not path.is_file():
        raise TableNotFoundError(f"no file {str(path)!r}; check the path and the working folder {Path.cwd()}")
    raw = path.read_bytes()
    if not raw.strip():
        raise TableError(f"{path.name} is empty (no text in it); was it exported to the end?")
    wide = raw[:2] in (b"\xff\xfe", b"\xfe\xff")
    if b"\x00" in raw and not wide:
        raise TableError(
            f"{path.name} is a binary file, not text; export the trace as text columns (CSV) first"
        )
    for encoding in ("utf-16",) if wide else ("utf-8-sig", "latin-1"):
        try:
            return raw.decode(encoding).replace("\r\n", "\n").replace("\r", "\n"), encoding
        except UnicodeDecodeError:
            continue
    raise TableError(f"{path.name} is a binary file, not text; export the trace as text columns (CSV) first")


def _is_number(field: str, decimal: str) -> bool:
    try:
        _number(field, decimal)
    except ValueError:
        return False
    return True


def _number(field: str, decimal: str) -> float:
    """Value of one field, NaN where it is empty or says so."""
    if field.lower() in _MISSING:
        return math.nan
    if "_" in field:  # Python would read 1_000 as a number; no instrument means that
        raise ValueError(field)
    if decimal == ",":
        if "." in field:
            raise ValueError(field)
        field = field.replace(",", ".")
    return float(field)


def _looks_numeric(line: str, decimal: str, separator: str | None) -> bool:
    """Whether a line is a row of numbers, under either decimal mark."""
    marks = (decimal, "," if decimal == "." else ".")
    for mark in marks:
        fields = split_fields(line, separator or find_separator(line, mark))
        filled = [f for f in fields if f.lower() not in _MISSING]
        if filled and all(_is_number(f, mark) for f in filled):
            return True
    return False


def _split_head(
    lines: list[_Line], header_lines: int | None, decimal: str, separator: str | None, name: str
) -> tuple[list[_Line], list[_Line]]:
    """Lines above the numbers and the lines of numbers."""
    if header_lines is not None:
        if header_lines < 0:
            raise TableError(
                f"header_lines is {header_lines}; it counts the lines above the numbers, 0 or more"
            )
        head = [line for line in lines if line.number <= header_lines]
    else:
        rows = [i for i, line in enumerate(lines) if _looks_numeric(line.text, decimal, separator)]
        head = lines[: rows[0]] if rows else lines
    body = lines[len(head) :]
    if not body:
        raise TableError(
            f"{name} holds no row of numbers; expected columns of delay and signal. If columns are divided "
            "by an "
            "unusual mark, pass separator=; if the decimal mark is a comma, pass decimal=','"
        )
    return head, body


def _refuse_other_decimal(first: _Line, separator: str, decimal: str, name: str) -> None:
    fields = [f for f in split_fields(first.text, separator) if f.lower() not in _MISSING]
    if decimal == "." and any(_DECIMAL_COMMA.fullmatch(f) for f in fields):
        culprit = next(f for f in fields if _DECIMAL_COMMA.fullmatch(f))
        raise TableError(f"{name} has decimal commas ({culprit!r} in line {first.number}); pass decimal=','")
    if decimal == "," and any("." in f and _is_number(f, ".") for f in fields):
        raise TableError(
            f"{name} has decimal points in line {first.number} ({first.text.strip()!r}); pass decimal='.'"
        )


def _parse_rows(body: list[_Line], separator: str, decimal: str, name: str) -> NDArray[np.float64]:
    width = len(split_fields(body[0].text, separator))
    rows = [_parse_row(line, separator, decimal, width, name) for line in body]
    values = np.array(rows, dtype=float)
    if width > 1 and np.isnan(values[:, -1]).all() and body[0].text.rstrip().endswith(separator):
        values = values[:, :-1]  # a separator at every line's end, not a column
    return values


def _parse_row(line: _Line, separator: str, decimal: str, width: int, name: str) -> list[float]:
    fields = split_fields(line.text, separator)
    if len(fields) != width:
        raise TableError(
            f"line {line.number} of {name} has {len(fields)} fields where the first row of numbers has "
            f"{width} "
            f"(separator: {_SEPARATOR_NAMES.get(separator, separator)}): {line.text.strip()!r}; mend the file"
        )
    for field in fields:
        if not _is_number(field, decimal):
            raise TableError(
                f"line {line.number} of {name} has {field!r} where a number is expected; remove the line, "
                "start it "
                "with '#', or set header_lines if it belongs to the header"
            )
    return [_number(field, decimal) for field in fields]


def _find_names(
    head: list[_Line], remarks: list[_Line], first: _Line, separator: str, width: int, name: str
) -> tuple[tuple[str, ...], list[_Line]]:
    """Column headers, from the line above the numbers or the comment there, and the lines left over."""
    for line in reversed(head):
        names = _fitting_names(line.text, separator, width)
        if names:
            return names, [x for x in head if x is not line] + remarks
        if line is head[-1] and "," in line.text and separator == "," and width > 2:
            columns = len(split_fields(line.text, separator))
            raise TableError(
                f"line {line.number} of {name} names {columns} columns, but the rows hold {width}; if the "
                "file has "
                "decimal commas and commas between columns, export it with another separator"
            )
    above = [line for line in remarks if line.number < first.number]
    if not head and above:
        names = _fitting_names(above[-1].text.lstrip("# "), separator, width)
        if names and not any(_is_number(n, ".") for n in names):
            return names, [x for x in remarks if x is not above[-1]]
    return (), head + remarks


def _fitting_names(text: str, separator: str, width: int) -> tuple[str, ...]:
    """Fields of a header line where their number is that of the columns, else nothing."""
    for mark in dict.fromkeys((separator, "\t", ";", ",")):
        names = split_fields(text.rstrip(), mark)
        if mark != " " and len(names) == width + 1 and not names[-1]:
            names = names[:-1]
        if len(names) == width and all(names):
            return tuple(names)
    return ()
