"""Two columns of numbers from the text that an instrument or a spreadsheet wrote.

Separators, decimal commas, encodings and headers are recognized and reported; whatever cannot
be read is refused with its line. Lines are taken one at a time and a file is never held as a
list of them, so that memory stays near the size of its text.
"""

import codecs
import io
import math
from array import array
from dataclasses import dataclass, field
from itertools import islice
from typing import Literal, NamedTuple

import numpy as np

from solver.grid import Real
from solver.quantity import Contradiction

Strays = Literal["refuse", "skip"]

MOST_LINES = 2_000_000
LONGEST_LINE = 4096
"""Characters."""
LONGEST_HEADER = 1000
"""Lines."""
MOST_STRAYS = 10_000
"""Lines left out."""
_BLOCK_LINES = 32_768
_COMMENT = ("#", "!", "%", "//", "'", "*", "[")
_BLANKS = str.maketrans({'"': " ", "\N{MINUS SIGN}": "-", "\xa0": " ", "\u202f": " "})


class Unreadable(Contradiction):
    """A file that cannot be taken as it is.

    ``where`` is the option that would have it taken, empty when the file itself must change.
    """


class Style(NamedTuple):
    """How a line is divided into numbers; a separator None stands for blanks."""

    separator: str | None
    decimal: str
    paired: bool = False

    @property
    def title(self) -> str:
        """In words, for a remark."""
        names = {None: "blanks", "\t": "tabs", ";": "semicolons", ",": "commas"}
        return f"columns separated by {names[self.separator]}, decimal " + (
            "commas" if self.decimal == "," else "points"
        )

    def fields(self, line: str) -> list[str]:
        """The fields of a line, decimal commas made points."""
        fields = line.split(self.separator)
        if self.paired:
            if len(fields) % 2:
                return [line]
            return [f"{fields[i].strip()}.{fields[i + 1]}" for i in range(0, len(fields), 2)]
        return [text.replace(",", ".") for text in fields] if self.decimal == "," else fields


_STYLES = (
    Style(";", "."),
    Style(";", ","),
    Style("\t", "."),
    Style("\t", ","),
    Style(None, "."),
    Style(None, ","),
    Style(",", "."),
)
_PAIRED = Style(",", ",", paired=True)


@dataclass
class Columns:
    """Two columns as they stand in the file.

    x, y: shape (points,), float64; line: number of the line of each point, counted from 1.
    header: the lines before the first point, comments included. remarks: what was recognized
    and what was left out, in sentences.
    """

    x: Real
    y: Real
    line: np.ndarray
    header: list[str]
    style: Style
    remarks: list[str] = field(default_factory=list)


def _number(text: str) -> float:
    """The number a field holds; NaN for an empty one. ValueError for anything else."""
    text = text.strip()
    if "_" in text:
        raise ValueError(text)
    return float(text) if text else math.nan


def _pair(line: str, style: Style, column: int) -> tuple[float, float] | None:
    """The numbers of the first and of another column; None when the line holds none."""
    fields = style.fields(line)
    try:
        return float(fields[0]), _number(fields[column - 1])
    except (ValueError, IndexError):
        return None


def _is_comment(line: str) -> bool:
    return line.lstrip().startswith(_COMMENT)


def _says_something(line: str) -> bool:
    return bool(line.strip()) and not _is_comment(line)


def _shown(line: str) -> str:
    text = " ".join(line.split())
    return f"“{text if len(text) <= 40 else text[:39] + '…'}”"


def decoded(data: bytes, remarks: list[str]) -> io.TextIOWrapper:
    """Lines of a file in whatever encoding it has; raises Unreadable for what is no text."""
    encoding = "utf-8-sig"
    if data.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)):
        encoding = "utf-16"
    elif data[1:400:2].count(0) > 100 and not data[0:400:2].count(0):
        encoding = "utf-16-le"
    elif b"\0" in data[:65536]:
        raise Unreadable(
            "", "the file is not text: export the trace as CSV, one point a line, and import that"
        )
    try:
        codecs.decode(data, encoding)
    except UnicodeDecodeError as error:
        line = data.count(b"\n", 0, error.start) + 1
        encoding = "latin-1"
        remarks.append(f"not UTF-8 (first on line {line}): read as Latin-1")
    return io.TextIOWrapper(io.BytesIO(data), encoding=encoding, errors="replace", newline=None)


Lines = list[str]


class _Lines:
    """The lines of a file, block by block; ``taken`` tells the number of the last one."""

    def __init__(self, stream: io.TextIOWrapper) -> None:
        self._stream = stream
        self.taken = 0

    def take(self, count: int) -> Lines:
        """The next lines, none at the end; raises Unreadable for too many and too long ones."""
        block = list(islice(self._stream, count))
        first, self.taken = self.taken + 1, self.taken + len(block)
        if self.taken > MOST_LINES:
            raise Unreadable(
                "",
                f"the file has more than {MOST_LINES} lines: keep every tenth point, or the part "
                "around the source",
            )
        sizes = list(map(len, block))
        if sizes and max(sizes) > LONGEST_LINE:
            raise Unreadable(
                "",
                f"line {first + sizes.index(max(sizes))} is longer than {LONGEST_LINE} "
                "characters: put one point on each line, its wavelength or frequency first",
            )
        plain = all(map(str.isascii, block)) and not any('"' in line for line in block)
        return block if plain else [line.translate(_BLANKS) for line in block]


def _readable(lines: Lines, style: Style, column: int) -> list[int]:
    """Places in a sample of the lines that hold the two numbers."""
    return [
        place
        for place, line in enumerate(lines)
        if not _is_comment(line) and _pair(line, style, column) is not None
    ]


def _recognized(lines: Lines, column: int) -> tuple[Style | None, int]:
    """The style that reads most of the lines, and the place of the first it reads."""
    found = [(_readable(lines, style, column), style) for style in _STYLES]
    places, style = max(found, key=lambda item: len(item[0]))
    if not places:
        return None, 0
    if style == Style(",", "."):
        style = _without_points(lines, places, style)
    return style, places[0]


def _without_points(lines: Lines, places: list[int], style: Style) -> Style:
    """Decide whether commas separate numbers or stand in them, where no point is to be seen."""
    rows = [lines[place].strip().split(",") for place in places]
    whole = [row for row in rows if len(row) >= 3 and row[1].isdigit()]
    if any("." in text for row in rows for text in row) or 2 * len(whole) < len(rows):
        return style
    if all(len(row) == 4 and row[1].isdigit() and row[3].isdigit() for row in rows):
        return _PAIRED
    uneven = next((p for p, row in zip(places, rows, strict=True) if len(row) % 2), places[0])
    raise Unreadable(
        "",
        f"line {uneven + 1}, {_shown(lines[uneven])}, can be read in two ways, with commas "
        "between numbers or inside them: export with semicolons or tabs between the columns, or "
        "with decimal points",
    )


def read_columns(data: bytes | str, *, column: int = 2, strays: Strays = "refuse") -> Columns:
    """Read the first and one other column (counted from 1) of a text.

    Raises Unreadable, with line and remedy, for a file without two columns of numbers and for
    text among the numbers, which ``strays="skip"`` leaves out. Points whose second number is
    missing or NaN are left out; an infinite one is kept.
    """
    raw = data.encode() if isinstance(data, str) else data
    if not raw or raw.isspace():
        raise Unreadable("", "the file is empty: export the trace again and import that")
    remarks: list[str] = []
    lines = _Lines(decoded(raw, remarks))
    sample = lines.take(LONGEST_HEADER)
    style, first = _recognized(sample, column)
    if style is None:
        raise _no_columns(sample, column)
    remarks.insert(0, style.title)
    reader = _Reader(style, column, strays)
    reader.take(sample[first:], first + 1)
    while block := lines.take(_BLOCK_LINES):
        reader.take(block, lines.taken - len(block) + 1)
    remarks += reader.remarks()
    return Columns(
        np.frombuffer(reader.x, dtype=np.float64),
        np.frombuffer(reader.y, dtype=np.float64),
        np.frombuffer(reader.line, dtype=np.int64),
        [line.strip() for line in sample[:first] if line.strip()],
        style,
        remarks,
    )


class _Reader:
    """Collects points from blocks of lines, fast where all lines are alike."""

    def __init__(self, style: Style, column: int, strays: Strays) -> None:
        self.x, self.y, self.line = array("d"), array("d"), array("q")
        self._style, self._column, self._strays = style, column, strays
        self._left_out: dict[str, list[int]] = {"no level": [], "no numbers": []}

    def take(self, block: Lines, first: int) -> None:
        """Add the points of lines that begin with the number ``first``."""
        numbers = np.arange(first, first + len(block), dtype=np.int64)
        points = self._table(block)
        if points is None:
            held = [place for place, line in enumerate(block) if _says_something(line)]
            if len(held) < len(block):
                block, numbers = [block[place] for place in held], numbers[held]
                points = self._table(block)
        if points is None:
            for number, line in zip(numbers.tolist(), block, strict=True):
                self._take_line(number, line)
            return
        full = np.isfinite(points[:, 0]) & ~np.isnan(points[:, 1])
        self._left_out["no level"].extend(numbers[~full].tolist())
        for kept, values in ((self.x, points[full, 0]), (self.y, points[full, 1])):
            kept.frombytes(values.tobytes())
        self.line.frombytes(numbers[full].tobytes())

    def _table(self, block: Lines) -> Real | None:
        """The two columns, shape (lines, 2); None where not every line is a plain point."""
        if self._style.paired or not block or not block[0].strip():
            return None
        if self._style.decimal == ",":
            block = [line.replace(",", ".") for line in block]
        try:
            points = np.loadtxt(
                block,
                delimiter=self._style.separator,
                usecols=(0, self._column - 1),
                comments=None,
                ndmin=2,
            )
        except ValueError:
            return None
        return points if len(points) == len(block) else None

    def _add(self, number: int, here: float, level: float) -> None:
        if math.isnan(level) or not math.isfinite(here):
            self._left_out["no level"].append(number)
            return
        self.x.append(here)
        self.y.append(level)
        self.line.append(number)

    def _take_line(self, number: int, line: str) -> None:
        pair = _pair(line, self._style, self._column)
        if pair is not None:
            self._add(number, *pair)
            return
        if self._strays == "refuse":
            raise Unreadable(
                "strays",
                f"line {number}, {_shown(line)}, is not a point like those before it: mend it, "
                "begin it with #, or have such lines left out",
            )
        strays = self._left_out["no numbers"]
        strays.append(number)
        if len(strays) > MOST_STRAYS:
            raise Unreadable(
                "",
                f"more than {MOST_STRAYS} lines, from line {strays[0]} on, are no points: export "
                "the trace alone, without other tables",
            )

    def remarks(self) -> list[str]:
        """What was left out, and where it began."""
        return [
            f"{len(numbers)} {'line' if len(numbers) == 1 else 'lines'} with {what} left out, "
            f"{'line' if len(numbers) == 1 else 'the first line'} {numbers[0]}"
            for what, numbers in self._left_out.items()
            if numbers
        ]


def _no_columns(sample: Lines, column: int) -> Unreadable:
    """Why none of the lines is a point."""
    for number, line in enumerate(sample, 1):
        if _is_comment(line) or not line.strip():
            continue
        for style in _STYLES:
            if _pair(line, style, 1) is None:
                continue
            count = len([text for text in style.fields(line) if text.strip()])
            if count < column:
                what = "one number" if count == 1 else f"{count} numbers"
                remedy = (
                    "put its wavelength or frequency and its level on each line"
                    if count == 1
                    else f"use a column from 2 to {count}"
                )
                return Unreadable(
                    "" if count == 1 else "column",
                    f"line {number}, {_shown(line)}, holds {what} where {column} are needed: "
                    f"{remedy}",
                )
    number, line = next(((n, t) for n, t in enumerate(sample, 1) if t.strip()), (0, ""))
    if not number:
        return Unreadable("", f"the file is empty, or its first {LONGEST_HEADER} lines are")
    return Unreadable(
        "",
        f"none of the first {len(sample)} lines holds two numbers (line {number} is "
        f"{_shown(line)}): export the trace as CSV, one point a line",
    )
