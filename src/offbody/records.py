"""Records: files of readings, corrected line by line in constant memory.

A record is a text file of one header line and one row per line, its cells separated by a comma or
another single character. A row whose line cannot be read as such, or in which a named cell is
neither a number nor marked as missing, is kept out, counted, and listed by its line number.

A case names the columns of its sensors' record, with [] round what may be left out:

    [record]
    [time]                       a column to carry over as it stands
    speed = { cup = "..." }      the column of each sensor that reads speed
    bearing = { vane = "..." }   the column of each sensor that reads direction; in a case that
                                 gives directions: direction = { ... }
    [spread]                     the column of the standard deviation of the direction, degrees
    [missing]                    a list of cells that mean "missing", beside empty ones and nan
    [separator]                  a comma if left out
    [decimal]                    "." or ",": the mark before the decimals
    [sensors]                    the sensors in order of preference
    [north_offset]               degrees to add to recorded directions: a number, or one per sensor
    [calm_below], [calms], [choose]   as ``ob.Correction.from_survey`` takes them
"""

import contextlib
import csv
import os
import secrets
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from offbody.checks import nearest_name
from offbody.corrections import Correction, Reason, read_document
from offbody.errors import InputError

BYTES_AT_ONCE = 1 << 19  # of a record, between two moves of the progress bar
LONGEST_LINE = 1 << 20  # bytes; what is longer is no record
MISSING_WORDS = ("", "nan")
SETTINGS = ("sensors", "north_offset", "calm_below", "calms", "choose")
UNREADABLE = ".unreadable.csv"  # added to the output's name: the list of rows kept out
LISTED = 10  # unreadable lines that the summary names


@dataclass(frozen=True)
class Columns:
    """How to read a record: which column is whose, and how numbers are written.

    Parameters
    ----------
    speed, direction : mapping of sensor name to column name
    time : str, optional
        A column to carry over.
    spread : str, optional
        The column of the direction's standard deviation.
    missing : sequence of str or number
        Cells that mean "missing", beside empty ones and nan; a number in whatever digits.
    separator : str
        Between cells; one character.
    decimal : {".", ","}

    Raises
    ------
    ob.InputError
        If no sensor reads direction, or another argument cannot be used.
    """

    speed: dict
    direction: dict
    time: str | None = None
    spread: str | None = None
    missing: tuple = ()
    separator: str = ","
    decimal: str = "."

    def __post_init__(self):
        for name in ("speed", "direction"):
            value = getattr(self, name)
            if not isinstance(value, Mapping) or not all(map(_is_name, value.values())):
                raise InputError(f"{name} must name a column per sensor, got {value!r}")
        if not self.direction:
            raise InputError(
                "direction names no column: without one no speed can be corrected; name the "
                "column of a sensor that reads direction"
            )
        for name in ("time", "spread"):
            value = getattr(self, name)
            if value is not None and not _is_name(value):
                raise InputError(f"{name} must be the name of a column, got {value!r}")
        cells = self.missing if isinstance(self.missing, list | tuple) else [None]
        if not all(isinstance(cell, str | int | float) for cell in cells):
            raise InputError(f"missing must be a list of cells, got {self.missing!r}")
        if not (isinstance(self.separator, str) and len(self.separator) == 1):
            raise InputError(f"separator must be one character, got {self.separator!r}")
        if self.separator in '"\r\n':
            raise InputError(f"separator cannot be {self.separator!r}: take another character")
        if self.decimal not in (".", ","):
            raise InputError(f"decimal must be '.' or ',', got {self.decimal!r}")
        if self.decimal == self.separator:
            raise InputError(
                f"decimal and separator are both {self.decimal!r}: name the separator, such as ';'"
            )

    @property
    def names(self):
        """All columns in use, without the time's."""
        spread = [self.spread] if self.spread is not None else []
        return [*self.speed.values(), *self.direction.values(), *spread]


def _is_name(value):
    return isinstance(value, str) and bool(value.strip())


def read_settings(entries, by_bearing):
    """The Columns of a case's [record], and the arguments of its correction.

    Parameters
    ----------
    entries : mapping
        The table [record] of a case; see the head of this module.
    by_bearing : bool
        Whether the case gives its angles as bearings.

    Returns
    -------
    (dict, dict)
        Arguments of ``Columns`` and of ``ob.Correction.from_survey``.

    Raises
    ------
    ob.InputError
        If a key is unknown, or an angle is named in the other convention than the case's.
    """
    if not isinstance(entries, Mapping):
        raise InputError(f"record: expected a table, got {entries!r}")
    word, other = ("bearing", "direction") if by_bearing else ("direction", "bearing")
    if other in entries:
        raise InputError(f"record.{other}: the survey gives {word}s; say every angle one way")
    layout = {"speed", "time", "spread", "missing", "separator", "decimal"}
    for key in entries:
        if key not in {word, *layout, *SETTINGS}:
            raise InputError(
                f"record.{key}: unknown key; {nearest_name(key, {word, *layout, *SETTINGS})}"
            )
    columns = {key: entries[key] for key in layout if key in entries}
    if word in entries:
        columns["direction"] = entries[word]
    return columns, {key: entries[key] for key in SETTINGS if key in entries}


def prepare(path, columns, settings):
    """The Correction and the Columns that a survey or a saved correction asks for.

    Parameters
    ----------
    path : str or path-like
        The survey.json of the command, or a correction that was saved.
    columns, settings : dict
        What shall count in place of the case's own [record]; see ``read_settings``. A direction
        goes by the key "bearing" or "direction", as the survey has it.

    Returns
    -------
    (Correction, Columns)

    Raises
    ------
    ob.InputError
        If the file, a name or a setting cannot be used.
    """
    document = read_document(path)
    saved = document.get("kind") == "correction"
    by_bearing = document.get("angles") == "bearings"
    case = document.get("case")
    own = case.get("record", {}) if isinstance(case, Mapping) else {}
    layout, own_settings = read_settings(own, by_bearing)
    given, _ = read_settings(columns, by_bearing)
    if saved and settings:
        raise InputError(
            f"{path} is a saved correction, with its own {', '.join(settings)}: give the survey, "
            "or leave that out"
        )
    correction = (
        Correction.load(path) if saved else Correction.from_survey(path, **own_settings | settings)
    )
    layout = Columns(**{"speed": {}, "direction": {}} | layout | given)
    # Whatever is wrong with the sensors' names shows in a record of no rows, before any is read.
    none = np.empty(0)
    correction.correct(
        dict.fromkeys(layout.speed, none) or None, dict.fromkeys(layout.direction, none)
    )
    return correction, layout


@dataclass
class Tally:
    """What became of a record's rows."""

    rows: int = 0
    unreadable: int = 0
    first_unreadable: list = field(default_factory=list)
    speeds: np.ndarray = field(default_factory=lambda: np.zeros(len(Reason), int))
    directions: np.ndarray = field(default_factory=lambda: np.zeros(len(Reason), int))
    sums: np.ndarray = field(default_factory=lambda: np.zeros(3))
    greatest: np.ndarray = field(default_factory=lambda: np.zeros(2))

    def add(self, corrected):
        """Count the reasons of a part of the record, and what its spread changed."""
        self.speeds += np.bincount(corrected.reason, minlength=len(Reason))
        self.directions += np.bincount(corrected.direction_reason, minlength=len(Reason))
        if corrected.speed_change_by_spread is not None:
            with np.errstate(divide="ignore", invalid="ignore"):
                speed = corrected.speed_change_by_spread / corrected.speed
            both = np.abs(np.stack([speed, corrected.direction_change_by_spread]))
            both = both[:, np.isfinite(both).all(axis=0)]
            self.sums += [*(both**2).sum(axis=1), both.shape[1]]
            self.greatest = np.maximum(self.greatest, both.max(axis=1, initial=0.0))

    @property
    def read(self):
        return self.rows - self.unreadable

    def summary(self, out, by_bearing):
        """The page that a person reads."""
        word = "bearing" if by_bearing else "direction"
        lines = [f"{self.rows} rows, {self.read} read"]
        for quantity, counts in (("speed", self.speeds), (word, self.directions)):
            found = [f"{reason.words} {counts[reason]}" for reason in Reason if counts[reason]]
            lines.append(f"  {quantity:<10}{', '.join(found)}")
        if self.sums[2]:
            speed, turn = np.sqrt(self.sums[:2] / self.sums[2])
            lines.append(
                f"  the spread of the {word} changes the speed by {100 * speed:.2g} percent (root "
                f"mean square; at most {100 * self.greatest[0]:.2g}), the {word} by {turn:.2g} "
                f"degrees (at most {self.greatest[1]:.2g})"
            )
        if self.unreadable:
            more = " ..." if self.unreadable > len(self.first_unreadable) else ""
            numbers = ", ".join(str(number) for number in self.first_unreadable)
            lines.append(
                f"{self.unreadable} rows cannot be read and are kept out: lines {numbers}{more}; "
                f"all are listed in {side_file(out).name}"
            )
        return "\n".join(lines) + "\n"


def side_file(out):
    """Where the rows that were kept out are listed."""
    out = Path(out)
    return out.with_name(out.name + UNREADABLE)


def correct_record(record, correction, columns, out, overwrite=False, progress=None):
    """The Tally of a record that is corrected into a file, which is whole or not there.

    Parameters
    ----------
    record : str or path-like
        The file to read.
    correction : Correction
    columns : Columns
    out : str or path-like
        The file to write, separated as the record is. Rows that cannot be read are listed beside
        it, in a file whose name ends in .unreadable.csv; without any there is no such file.
    overwrite : bool
        Whether files that stand there may be replaced.
    progress : callable, optional
        Called with the number of bytes read since the last call.

    Returns
    -------
    Tally

    Raises
    ------
    ob.InputError
        If the record cannot be opened, lacks a column, or holds no row that can be read; if
        ``out`` stands already, or is the record.
    """
    record, out = Path(record), Path(out)
    _refuse(record, out, overwrite)
    try:
        source = open(record, "rb")
    except OSError as error:
        raise InputError(f"{record}: cannot read the record: {error.strerror}") from None
    with source, _whole_files([out, side_file(out)]) as (written, listed):
        reader = _Reader(source, record, columns)
        tally = Tally()
        with open(written, "wb") as result, open(listed, "w", encoding="utf-8") as side:
            side.write("line,why\n")
            result.write(reader.heading(correction))
            for size, rows in reader.parts():
                _correct_part(rows, correction, columns, tally, result, side)
                if progress is not None:
                    progress(size)
        if not tally.read:
            why = f"the first is line {tally.first_unreadable[0]}" if tally.rows else "it has none"
            raise InputError(f"{record}: holds no row that can be read; {why}")
        if not tally.unreadable:
            listed.unlink()
            side_file(out).unlink(missing_ok=True)
    return tally


def _correct_part(rows, correction, columns, tally, result, side):
    """Correct and write the rows of one part of the record."""
    for number, why in rows.unreadable:
        side.write(f"{number},{why}\n")
    tally.rows += len(rows.numbers) + len(rows.unreadable)
    tally.unreadable += len(rows.unreadable)
    room = LISTED - len(tally.first_unreadable)
    tally.first_unreadable += [number for number, _ in rows.unreadable[:room]]
    if not rows.numbers:
        return
    readings = iter(rows.readings)
    speed = {sensor: next(readings) for sensor in columns.speed}
    direction = {sensor: next(readings) for sensor in columns.direction}
    spread = None if columns.spread is None else next(readings)
    corrected = correction.correct(speed or None, direction, spread)
    tally.add(corrected)
    result.write(_written(rows, corrected, correction, columns))


def _refuse(record, out, overwrite):
    """An InputError unless the output may be written."""
    if not out.parent.is_dir():
        raise InputError(f"--out {out}: there is no folder {out.parent}; make it first")
    for path in (out, side_file(out)):
        if not os.path.lexists(path):
            continue
        if path.is_symlink() or not path.is_file():
            raise InputError(f"--out {path}: not a plain file; give another name")
        if record.exists() and path.samefile(record):
            raise InputError(f"--out {path}: is the record itself; give another name")
        if not overwrite:
            raise InputError(f"--out {path}: exists already; give another name, or --overwrite")


@contextlib.contextmanager
def _whole_files(paths):
    """New files to write, which take their names only when all went well."""
    mark = secrets.token_hex(4)
    fresh = [path.with_name(f".{path.name}.{mark}.new") for path in paths]
    try:
        yield fresh
        # The list first: no output may stand without what was kept out of it.
        for new, path in reversed(list(zip(fresh, paths, strict=True))):
            if new.exists():
                new.replace(path)
    finally:
        for new in fresh:
            new.unlink(missing_ok=True)


# --- reading --------------------------------------------------------------------------------------


@dataclass
class _Rows:
    """The rows of one part of a record that can be read, and those that cannot."""

    numbers: list  # of the lines
    times: list | None
    readings: list  # one array per column in use
    unreadable: list  # (line number, why)


class _Reader:
    """Reads a record by parts of whole lines."""

    def __init__(self, source, path, columns):
        self.source, self.path, self.columns = source, path, columns
        first = source.readline(LONGEST_LINE)
        self.line = 1
        if not first.strip():
            raise InputError(f"{path}: line 1 is empty; a record begins with its columns' names")
        header = self._cells(_decoded(first.removeprefix(b"\xef\xbb\xbf")).rstrip("\r\n"))
        if header is None or not first.endswith(b"\n") and len(first) == LONGEST_LINE:
            raise InputError(f"{path}: line 1 is no line of columns' names")
        self.header = [name.strip() for name in header]
        self.header_size = len(first)
        self.wanted = [self._column(name) for name in columns.names]
        self.time = None if columns.time is None else self._column(columns.time)
        words = [str(each).strip().lower() for each in columns.missing]
        self.words = {*MISSING_WORDS, *words}
        found = map(self._number_or_none, words)
        self.markers = [number for number in found if number is not None]

    def _column(self, name):
        found = [place for place, each in enumerate(self.header) if each == name.strip()]
        if len(found) == 1:
            return found[0]
        if found:
            raise InputError(f"{self.path}: has {len(found)} columns named {name!r}")
        if len(self.header) == 1:
            raise InputError(
                f"{self.path}: has no column {name!r}, but one only, {self.header[0][:60]!r}: is "
                f"{self.columns.separator!r} its separator?"
            )
        raise InputError(
            f"{self.path}: has no column {name!r}; {nearest_name(name, self.header)}"
        )

    def heading(self, correction):
        """The output's first line, as bytes."""
        word = "bearing" if correction.by_bearing else "direction"
        names = ["line"]
        if self.time is not None:
            names.append(self.header[self.time])
        names += ["undisturbed_speed", f"undisturbed_{word}"]
        if correction.direction_uncertainty is not None:
            names += ["speed_standard_uncertainty", f"{word}_standard_uncertainty"]
        if self.columns.spread is not None:
            names += ["speed_change_by_spread", f"{word}_change_by_spread"]
        names += ["speed_sensor", f"{word}_sensor", "reason", f"{word}_reason"]
        separator = self.columns.separator
        return _encoded(separator.join(_quoted(name, separator) for name in names) + "\n")

    def parts(self):
        """Yield (bytes, rows) until the record ends."""
        size = self.header_size
        while True:
            block = self.source.read(BYTES_AT_ONCE)
            if not block:
                return
            if not block.endswith(b"\n"):
                rest = self.source.readline(LONGEST_LINE)
                if len(rest) == LONGEST_LINE:
                    raise InputError(
                        f"{self.path}: a line after line {self.line} has no end within "
                        f"{LONGEST_LINE} bytes: this is no record of one row per line"
                    )
                block += rest
            size += len(block)
            yield size, self._rows(block)
            size = 0

    def _rows(self, block):
        """The rows of whole lines."""
        lines = _decoded(block).split("\n")
        if not lines[-1]:
            lines.pop()
        numbers, rows, unreadable = [], [], []
        width, separator = len(self.header), self.columns.separator
        for number, line in enumerate(lines, self.line + 1):
            line = line.rstrip("\r")
            cells = line.split(separator) if '"' not in line else self._cells(line)
            if cells is not None and len(cells) == width:
                numbers.append(number)
                rows.append(cells)
            else:
                unreadable.append((number, self._fault(line, cells)))
        self.line += len(lines)
        return self._readings(numbers, rows, unreadable)

    def _cells(self, line):
        """The cells of a line in which there may be quotes; None if these do not close."""
        try:
            (cells,) = csv.reader([line], delimiter=self.columns.separator, strict=True)
        except (csv.Error, ValueError):
            return None
        return cells

    def _fault(self, line, cells):
        if not line.strip():
            return "empty line"
        if cells is None:
            return "quotes do not close"
        return f"{len(cells)} cells where the header has {len(self.header)}"

    def _readings(self, numbers, rows, unreadable):
        columns = [self._numbers([row[place] for row in rows]) for place in self.wanted]
        faulty = {}
        for place, (_, faults) in zip(self.wanted, columns, strict=True):
            for row in faults:
                faulty.setdefault(row, place)
        readings = [values for values, _ in columns]
        times = None if self.time is None else [row[self.time] for row in rows]
        if faulty:
            unreadable += [
                (numbers[row], f"{_quoted(self.header[place], ',')} is not a number")
                for row, place in faulty.items()
            ]
            unreadable.sort()
            keep = [row for row in range(len(rows)) if row not in faulty]
            numbers = [numbers[row] for row in keep]
            times = None if times is None else [times[row] for row in keep]
            readings = [values[keep] for values in readings]
        return _Rows(numbers, times, readings, unreadable)

    def _numbers(self, cells):
        """Numbers, NaN where marked as missing, and the places of cells that are neither."""
        faults = []
        # float would take "1_0" for ten.
        plain = self.columns.decimal == "." and "_" not in "".join(cells)
        try:
            values = np.array(list(map(float, cells)) if plain else [*map(self._number, cells)])
        except ValueError:
            values = np.empty(len(cells))
            for place, cell in enumerate(cells):
                number = self._number_or_none(cell)
                if number is None:
                    number = np.nan
                    if cell.strip().lower() not in self.words:
                        faults.append(place)
                values[place] = number
        for marker in self.markers:
            values[values == marker] = np.nan
        return values, faults

    def _number(self, cell):
        if self.columns.decimal == ",":
            if "." in cell:
                raise ValueError(cell)
            cell = cell.replace(",", ".")
        if "_" in cell:
            raise ValueError(cell)
        return float(cell)

    def _number_or_none(self, cell):
        try:
            return self._number(cell)
        except ValueError:
            return None


# --- writing --------------------------------------------------------------------------------------


def _written(rows, corrected, correction, columns):
    """The corrected rows as bytes."""
    def numbers(values, digits):
        texts = [f"{value:{digits}}" if value == value else "" for value in values.tolist()]
        return [text.replace(".", ",") for text in texts] if columns.decimal == "," else texts

    def words(codes, known):
        return [known[code] for code in codes.tolist()]

    separator = columns.separator
    parts = [map(str, rows.numbers)]
    if rows.times is not None:
        parts.append(_quoted(time, separator) for time in rows.times)
    # 359.9999 is north, not 360.
    direction = corrected.direction.round(3) % 360.0
    parts += [numbers(corrected.speed, ".7g"), numbers(direction, ".3f")]
    if corrected.direction_uncertainty is not None:
        parts += [numbers(corrected.speed_uncertainty, ".3g"),
                  numbers(corrected.direction_uncertainty, ".3g")]
    if corrected.speed_change_by_spread is not None:
        parts += [numbers(corrected.speed_change_by_spread, ".3g"),
                  numbers(corrected.direction_change_by_spread, ".3g")]
    # The last is for -1: no sensor, or the mean of several.
    sensors = [*(_quoted(name, separator) for name in correction.names), ""]
    reasons = [reason.words for reason in Reason]
    parts += [words(corrected.speed_sensor, sensors), words(corrected.direction_sensor, sensors)]
    parts += [words(corrected.reason, reasons), words(corrected.direction_reason, reasons)]
    return _encoded("".join(separator.join(row) + "\n" for row in zip(*parts, strict=True)))


def _quoted(cell, separator):
    """A cell as it is, or in quotes where it holds what would end it."""
    if separator in cell or '"' in cell:
        return '"' + cell.replace('"', '""') + '"'
    return cell


def _decoded(raw):
    # Bytes that are no UTF-8 can only be carried over: they come back out as they were.
    return raw.decode("utf-8", "surrogateescape")


def _encoded(text):
    return text.encode("utf-8", "surrogateescape")
