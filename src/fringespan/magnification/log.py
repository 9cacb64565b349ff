"""The log of magnification checks: a file of the user's own, where nothing is ever deleted.

An SQLite database in WAL mode: several programs may read and write it at once, and a program that is killed at any moment
leaves every entry whole or absent. An entry found wrong is marked as withdrawn and stays.
"""

from __future__ import annotations

import csv
import io
import math
import os
import sqlite3
import time
import uuid
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager, suppress
from dataclasses import asdict, dataclass, field, fields, replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fringespan.exceptions import RecordError
from fringespan.magnification.conditions import Conditions

__all__ = [
    "LOG_VARIABLE",
    "CheckLog",
    "LogEntry",
    "LogFilter",
    "Overdue",
    "Trend",
    "log_path",
]

LOG_VARIABLE = "FRINGESPAN_LOG"
"""Environment variable that names another file for the log."""

_PATIENCE_S = 30.0
_APPLICATION_ID = 0x66737061  # "fspa": tells this log from other SQLite files

Migration = Callable[[sqlite3.Connection], None]


def log_path() -> Path:
    """Return the file of the log; FRINGESPAN_LOG overrides the platform's place for a user's data."""
    chosen = os.environ.get(LOG_VARIABLE)
    if chosen:
        return Path(chosen).expanduser()
    import platformdirs

    return Path(platformdirs.user_data_dir("fringespan", appauthor=False)) / "magnification.sqlite"


@dataclass(frozen=True, slots=True, kw_only=True)
class LogEntry:
    """One check in the log.

    Attributes
    ----------
    checked_at : str
        Date and time with zone, ISO 8601, in UTC.
    conditions : Conditions
    pictures : str
        Names, with commas between.
    sha256 : str
        Checksums of the pictures, with commas between.
    reference : str
    temperature_c : float or None
    nominal_pixel_size_nm, pixel_size_nm : (float, float)
        (row, column), before and after.
    relative_uncertainty : (float, float) or None
        Standard uncertainty of the pixel size; None where a table from elsewhere did not state it.
    shared_error : bool
        Whether rows and columns share the same error (mostly that of the reference) or have independent ones.
    shear, shear_uncertainty : float or None
        In nominal column pixels per row.
    coverage_factor : float
    tolerance : float or None
    verdict : str
    program_version : str
    details : str
        The whole result, JSON.
    id : str
        Made anew for each check; what makes it the same entry wherever it is copied.
    number : int or None
        Its place in this log; None before it is in one.
    withdrawn_at, withdrawn_because : str
        Empty unless it was marked so.
    """

    checked_at: str
    conditions: Conditions
    pictures: str
    sha256: str
    reference: str
    temperature_c: float | None
    nominal_pixel_size_nm: tuple[float, float]
    pixel_size_nm: tuple[float, float]
    relative_uncertainty: tuple[float, float] | None
    shared_error: bool
    shear: float | None
    shear_uncertainty: float | None
    coverage_factor: float
    tolerance: float | None
    verdict: str
    program_version: str
    details: str = "{}"
    id: str = field(default_factory=lambda: uuid.uuid4().hex)
    number: int | None = None
    withdrawn_at: str = ""
    withdrawn_because: str = ""

    def __post_init__(self) -> None:
        try:
            moment = datetime.fromisoformat(self.checked_at)
        except ValueError:
            raise RecordError(
                f"checked_at must be a date and time as 2025-03-01T10:20:00+00:00, got {self.checked_at!r}"
            ) from None
        if moment.tzinfo is None:
            moment = moment.replace(tzinfo=UTC)
        object.__setattr__(self, "checked_at", moment.astimezone(UTC).isoformat(timespec="seconds"))
        for name in ("nominal_pixel_size_nm", "pixel_size_nm"):
            if not all(math.isfinite(v) and v > 0 for v in getattr(self, name)):
                raise RecordError(f"{name} must be greater than 0, got {getattr(self, name)}")
        stated = self.relative_uncertainty
        if stated is not None and not all(math.isfinite(u) and 0 <= u < 1 for u in stated):
            raise RecordError(f"relative_uncertainty must be fractions from 0 up to 1, got {self.relative_uncertainty}")
        if not self.id:
            raise RecordError("id must not be empty")

    @property
    def micrograph_shear(self) -> float:
        """The shear in true column pixels, as `Micrograph` has it."""
        return 0.0 if self.shear is None else self.shear * self.nominal_pixel_size_nm[1] / self.pixel_size_nm[1]


@dataclass(frozen=True, slots=True, kw_only=True)
class LogFilter:
    """Which entries are wanted; None: any.

    Attributes
    ----------
    instrument, mode, camera : str or None
    indicated_magnification, voltage_kv, camera_length_mm : float or None
    binning : int or None
    since, until : str or None
        ISO 8601 dates.
    withdrawn : bool
        Whether those marked as withdrawn are wanted too.
    """

    instrument: str | None = None
    mode: str | None = None
    camera: str | None = None
    indicated_magnification: float | None = None
    voltage_kv: float | None = None
    camera_length_mm: float | None = None
    binning: int | None = None
    since: str | None = None
    until: str | None = None
    withdrawn: bool = False

    def where(self) -> tuple[str, list[Any]]:
        """Return the condition in SQL and its values."""
        parts, values = [], []
        for name in _GROUP:
            value = getattr(self, name)
            if value is not None:
                parts.append(f"{name} = ?")
                values.append(value)
        for name, sign in (("since", ">="), ("until", "<")):
            value = getattr(self, name)
            if value is not None:
                parts.append(f"checked_at {sign} ?")
                values.append(_moment(name, value))
        if not self.withdrawn:
            parts.append("withdrawn_at = ''")
        return (" AND ".join(parts) or "1"), values


def _moment(name: str, value: str) -> str:
    try:
        moment = datetime.fromisoformat(value)
    except ValueError:
        raise RecordError(f"{name} must be a date as 2025-03-01, got {value!r}") from None
    return (moment if moment.tzinfo else moment.replace(tzinfo=UTC)).astimezone(UTC).isoformat(timespec="seconds")


_GROUP = (
    "instrument",
    "mode",
    "voltage_kv",
    "indicated_magnification",
    "camera_length_mm",
    "camera",
    "binning",
)
"""What makes two checks checks of the same magnification."""


@dataclass(frozen=True, eq=False, slots=True, kw_only=True)
class Trend:
    """Pixel sizes against time, oldest first.

    Attributes
    ----------
    checked_at : ndarray of datetime64[s], shape (n,)
    pixel_size_nm, uncertainty_nm, nominal_pixel_size_nm : ndarray, shape (n, 2)
        (row, column); standard uncertainty, nan where it was not stated.
    tolerance : ndarray, shape (n,)
        nan where none was stated.
    group : ndarray of int, shape (n,)
        Position in `groups`.
    groups : tuple of Conditions
        Instrument, mode, voltage, magnification, camera and binning of each.
    """

    checked_at: NDArray[np.datetime64]
    pixel_size_nm: NDArray[np.float64]
    uncertainty_nm: NDArray[np.float64]
    nominal_pixel_size_nm: NDArray[np.float64]
    tolerance: NDArray[np.float64]
    group: NDArray[np.int64]
    groups: tuple[Conditions, ...]


@dataclass(frozen=True, slots=True, kw_only=True)
class Overdue:
    """Conditions whose last check is too long ago.

    Attributes
    ----------
    conditions : Conditions
    last_checked_at : str
    days : float
        Since then.
    """

    conditions: Conditions
    last_checked_at: str
    days: float


_COLUMNS = """
    number INTEGER PRIMARY KEY AUTOINCREMENT,
    id TEXT NOT NULL UNIQUE,
    checked_at TEXT NOT NULL,
    instrument TEXT NOT NULL,
    mode TEXT NOT NULL,
    voltage_kv REAL,
    indicated_magnification REAL,
    camera_length_mm REAL,
    camera TEXT NOT NULL,
    binning INTEGER,
    specimen TEXT NOT NULL,
    remark TEXT NOT NULL,
    pictures TEXT NOT NULL,
    sha256 TEXT NOT NULL,
    reference TEXT NOT NULL,
    temperature_c REAL,
    nominal_row_nm REAL NOT NULL,
    nominal_column_nm REAL NOT NULL,
    pixel_row_nm REAL NOT NULL,
    pixel_column_nm REAL NOT NULL,
    relative_uncertainty_row REAL,
    relative_uncertainty_column REAL,
    shared_error INTEGER NOT NULL,
    shear REAL,
    shear_uncertainty REAL,
    coverage_factor REAL NOT NULL,
    tolerance REAL,
    verdict TEXT NOT NULL,
    program_version TEXT NOT NULL,
    details TEXT NOT NULL,
    withdrawn_at TEXT NOT NULL DEFAULT '',
    withdrawn_because TEXT NOT NULL DEFAULT ''
"""

COLUMN_NAMES = tuple(line.split()[0] for line in _COLUMNS.strip().splitlines())


def _make_first(connection: sqlite3.Connection) -> None:
    connection.execute(f"CREATE TABLE checks ({_COLUMNS})")
    connection.execute("CREATE INDEX by_conditions ON checks (instrument, indicated_magnification, camera, checked_at)")
    connection.execute("CREATE INDEX by_date ON checks (checked_at)")
    # whatever program opens the file: entries stay, and what was measured is not changed
    connection.execute(
        "CREATE TRIGGER nothing_is_deleted BEFORE DELETE ON checks BEGIN "
        "SELECT RAISE(ABORT, 'entries are never deleted; mark them as withdrawn'); END"
    )
    kept = [name for name in COLUMN_NAMES if not name.startswith("withdrawn")]
    connection.execute(
        f"CREATE TRIGGER nothing_is_changed BEFORE UPDATE OF {', '.join(kept)} ON checks BEGIN "
        "SELECT RAISE(ABORT, 'entries are never changed; mark them as withdrawn and add another'); END"
    )
    connection.execute(f"PRAGMA application_id = {_APPLICATION_ID}")


_MIGRATIONS: tuple[Migration, ...] = (_make_first,)
"""What brings a log from one version to the next; the version of a log is how many of them it has seen."""


class CheckLog:
    """A log of magnification checks in a file.

    Parameters
    ----------
    path : path-like, optional
        Default: `log_path()`. Made with its folder if it does not exist.

    Raises
    ------
    RecordError
        If the file cannot be opened or made, is something else, is damaged, or was made by a newer version. It is then left
        as it is.
    """

    def __init__(self, path: str | os.PathLike[str] | None = None) -> None:
        self.path = log_path() if path is None else Path(path)
        self._connection = self._opened()

    def __enter__(self) -> CheckLog:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def close(self) -> None:
        """Close the file."""
        self._connection.close()

    # --- opening ----------------------------------------------------------------------------------------------------

    def _opened(self) -> sqlite3.Connection:
        with self._in_words("cannot be opened"):
            self.path.parent.mkdir(parents=True, exist_ok=True)
            if self.path.is_dir():
                raise RecordError(f"{self.path}: is a folder; give the name of a file for the log")
            connection = sqlite3.connect(self.path, timeout=_PATIENCE_S, isolation_level=None)
            try:
                self._prepare(connection)
            except BaseException:
                connection.close()
                raise
        return connection

    def _prepare(self, connection: sqlite3.Connection) -> None:
        version = self._version(connection)
        if version < len(_MIGRATIONS):
            if version > 0:
                self._back_up(connection, version)
            # one program at a time; the others find the work done
            connection.execute("BEGIN IMMEDIATE")
            try:
                for migration in _MIGRATIONS[self._version(connection) :]:
                    migration(connection)
                connection.execute(f"PRAGMA user_version = {len(_MIGRATIONS)}")
                connection.execute("COMMIT")
            except BaseException:
                with suppress(sqlite3.Error):
                    connection.execute("ROLLBACK")
                raise
        if connection.execute("PRAGMA journal_mode").fetchone()[0] != "wal":
            _patiently(lambda: connection.execute("PRAGMA journal_mode = WAL").fetchone())
        # what was reported as written stays written through a power cut
        connection.execute("PRAGMA synchronous = FULL")

    def _version(self, connection: sqlite3.Connection) -> int:
        version = int(connection.execute("PRAGMA user_version").fetchone()[0])
        application = int(connection.execute("PRAGMA application_id").fetchone()[0])
        has_tables = connection.execute("SELECT count(*) FROM sqlite_master").fetchone()[0] > 0
        if application != _APPLICATION_ID and (version > 0 or has_tables):
            raise RecordError(f"{self.path}: a database, but no log of magnification checks; give another file")
        if version > len(_MIGRATIONS):
            raise RecordError(
                f"{self.path}: made by a newer version (form {version}, this one knows {len(_MIGRATIONS)}); install a newer "
                "fringespan"
            )
        return version

    def _back_up(self, connection: sqlite3.Connection, version: int) -> Path:
        """Copy the log beside itself before its form changes, whole or not at all."""
        stamp = datetime.now(UTC).strftime("%Y%m%dT%H%M%S")
        target = self.path.with_name(f"{self.path.name}.form{version}-{stamp}.backup")
        part = target.with_name(f"{target.name}.{os.getpid()}.part")
        copy = sqlite3.connect(part)
        try:
            connection.backup(copy)
        finally:
            copy.close()
        part.replace(target)
        return target

    @contextmanager
    def _in_words(self, what: str) -> Iterator[None]:
        try:
            yield
        except sqlite3.DatabaseError as problem:
            words = str(problem)
            if "not a database" in words or "malformed" in words:
                remedy = "it is damaged or no log; take a backup, or name another file"
            elif "locked" in words:
                remedy = "another program has been writing to it for long; try again"
            elif "disk" in words and "full" in words:
                remedy = "the disk is full; make room"
            else:
                remedy = "check that the file and its folder may be written"
            raise RecordError(f"{self.path}: the log {what} ({words}); {remedy}") from problem
        except OSError as problem:
            raise RecordError(
                f"{self.path}: the log {what} ({problem.strerror or problem}); name a file in a folder that may be written"
            ) from problem

    @contextmanager
    def _writing(self) -> Iterator[sqlite3.Connection]:
        with self._in_words("cannot be written"):
            self._connection.execute("BEGIN IMMEDIATE")
            try:
                yield self._connection
                self._connection.execute("COMMIT")
            except BaseException:
                with suppress(sqlite3.Error):
                    self._connection.execute("ROLLBACK")
                raise

    # --- writing ----------------------------------------------------------------------------------------------------

    def add(self, entry: LogEntry) -> LogEntry:
        """Add a check; return it with its number.

        An entry that is in the log already (the same id) is not added again.
        """
        self.add_all([entry])
        with self._in_words("cannot be read"):
            (number,) = self._connection.execute("SELECT number FROM checks WHERE id = ?", (entry.id,)).fetchone()
        return replace(entry, number=int(number))

    def add_all(self, entries: Sequence[LogEntry]) -> int:
        """Add several checks, all of them or none; return how many were not there yet."""
        names = COLUMN_NAMES[1:]
        statement = f"INSERT INTO checks ({', '.join(names)}) VALUES ({', '.join('?' * len(names))}) ON CONFLICT (id) DO NOTHING"
        with self._writing() as connection:
            before = connection.total_changes
            connection.executemany(statement, (tuple(map(_cells(entry).get, names)) for entry in entries))
            return connection.total_changes - before

    def withdraw(self, number: int, because: str) -> None:
        """Mark an entry as not to be used, with the reason; it stays in the log.

        Raises
        ------
        RecordError
            If there is no such entry, or no reason is given.
        """
        if not because.strip():
            raise RecordError("because must say why the entry is withdrawn")
        self._mark(number, datetime.now(UTC).isoformat(timespec="seconds"), because.strip())

    def restore(self, number: int) -> None:
        """Take back the mark of an entry that was withdrawn."""
        self._mark(number, "", "")

    def _mark(self, number: int, moment: str, because: str) -> None:
        with self._writing() as connection:
            changed = connection.execute(
                "UPDATE checks SET withdrawn_at = ?, withdrawn_because = ? WHERE number = ?", (moment, because, number)
            ).rowcount
        if not changed:
            raise RecordError(f"{self.path}: there is no entry {number}; list them to see the numbers")

    # --- reading ----------------------------------------------------------------------------------------------------

    def __len__(self) -> int:
        with self._in_words("cannot be read"):
            return int(self._connection.execute("SELECT count(*) FROM checks").fetchone()[0])

    def entries(self, wanted: LogFilter | None = None, *, most: int | None = None) -> tuple[LogEntry, ...]:
        """Return entries, newest first.

        Parameters
        ----------
        wanted : LogFilter, optional
        most : int, optional
            Not more than this many.
        """
        where, values = (wanted or LogFilter()).where()
        limit = "" if most is None else f" LIMIT {int(most)}"
        with self._in_words("cannot be read"):
            rows = self._connection.execute(
                f"SELECT {', '.join(COLUMN_NAMES)} FROM checks WHERE {where} ORDER BY checked_at DESC, number DESC{limit}",
                values,
            ).fetchall()
        return tuple(_entry(dict(zip(COLUMN_NAMES, row, strict=True))) for row in rows)

    def entry(self, number: int) -> LogEntry:
        """Return the entry of a number.

        Raises
        ------
        RecordError
            If there is none.
        """
        with self._in_words("cannot be read"):
            row = self._connection.execute(
                f"SELECT {', '.join(COLUMN_NAMES)} FROM checks WHERE number = ?", (number,)
            ).fetchone()
        if row is None:
            raise RecordError(f"{self.path}: there is no entry {number}; list them to see the numbers")
        return _entry(dict(zip(COLUMN_NAMES, row, strict=True)))

    def trend(self, wanted: LogFilter | None = None) -> Trend:
        """Return pixel sizes against time, for a plot."""
        where, values = (wanted or LogFilter()).where()
        with self._in_words("cannot be read"):
            rows = self._connection.execute(
                "SELECT checked_at, pixel_row_nm, pixel_column_nm, relative_uncertainty_row, relative_uncertainty_column, "
                f"nominal_row_nm, nominal_column_nm, tolerance, {', '.join(_GROUP)} FROM checks WHERE {where} "
                "ORDER BY checked_at, number",
                values,
            ).fetchall()
        places: dict[tuple[Any, ...], int] = {}
        group = np.array([places.setdefault(row[8:], len(places)) for row in rows], dtype=np.int64)
        numbers = np.array([row[1:8] for row in rows], dtype=np.float64).reshape(-1, 7)
        return Trend(
            # every time is written in UTC to the second: the zone can be cut off
            checked_at=np.array([row[0][:19] for row in rows], dtype="datetime64[s]"),
            pixel_size_nm=numbers[:, :2],
            uncertainty_nm=numbers[:, :2] * numbers[:, 2:4],
            nominal_pixel_size_nm=numbers[:, 4:6],
            tolerance=numbers[:, 6],
            group=group,
            groups=tuple(Conditions(**dict(zip(_GROUP, key, strict=True))) for key in places),
        )

    def overdue(self, days: float, *, now: datetime | None = None) -> tuple[Overdue, ...]:
        """Return the conditions whose last check is more than some days ago, longest first.

        Parameters
        ----------
        days : float
        now : datetime, optional
            With its zone; default: the present.
        """
        if not (math.isfinite(days) and days >= 0):
            raise RecordError(f"days must be at least 0, got {days!r}")
        present = now or datetime.now(UTC)
        limit = (present - timedelta(days=days)).astimezone(UTC).isoformat(timespec="seconds")
        names = ", ".join(_GROUP)
        with self._in_words("cannot be read"):
            rows = self._connection.execute(
                f"SELECT {names}, max(checked_at) AS last FROM checks WHERE withdrawn_at = '' GROUP BY {names} "
                "HAVING last < ? ORDER BY last",
                (limit,),
            ).fetchall()
        return tuple(
            Overdue(
                conditions=Conditions(**dict(zip(_GROUP, row[:-1], strict=True))),
                last_checked_at=row[-1],
                days=(present - datetime.fromisoformat(row[-1])) / timedelta(days=1),
            )
            for row in rows
        )

    # --- CSV --------------------------------------------------------------------------------------------------------

    def csv_text(self, wanted: LogFilter | None = None) -> str:
        """Return entries as comma-separated values (RFC 4180), oldest first, with every digit."""
        where, values = (wanted or LogFilter(withdrawn=True)).where()
        names = COLUMN_NAMES[1:]
        with self._in_words("cannot be read"):
            rows = self._connection.execute(
                f"SELECT {', '.join(names)} FROM checks WHERE {where} ORDER BY checked_at, number", values
            ).fetchall()
        text = io.StringIO()
        writer = csv.writer(text, lineterminator="\n")
        writer.writerow(names)
        writer.writerows(["" if cell is None else cell for cell in row] for row in rows)
        return text.getvalue()

    def add_csv(self, text: str, name: str = "the table") -> tuple[int, int]:
        """Add the entries of a table as `csv_text` gives it, all of them or none.

        A table from elsewhere needs the columns `checked_at`, `nominal_row_nm`, `nominal_column_nm`, `pixel_row_nm` and
        `pixel_column_nm`; others that are missing are empty. Rows without `id` get one made of their content, so that the
        same table read twice adds nothing the second time.

        Returns
        -------
        added, known : int
            How many were added, and how many the log had already.

        Raises
        ------
        RecordError
            If a row makes no sense; its line is named, and nothing is added.
        """
        reader = csv.DictReader(io.StringIO(text.removeprefix("\N{ZERO WIDTH NO-BREAK SPACE}"), newline=""))
        missing = _NEEDED - set(reader.fieldnames or ())
        if missing:
            raise RecordError(f"{name}: the columns {', '.join(sorted(missing))} are missing in its first line")
        entries = []
        try:
            for row in reader:
                try:
                    entries.append(_entry_of_text({k: v for k, v in row.items() if k is not None and v}))
                except (ValueError, KeyError, TypeError) as problem:
                    raise RecordError(f"{name}: line {reader.line_num}: {problem}") from problem
        except csv.Error as problem:
            raise RecordError(f"{name}: line {reader.line_num}: {problem}") from problem
        added = self.add_all(entries)
        return added, len(entries) - added


def _patiently(step: Callable[[], Any]) -> None:
    """Repeat a step while another program holds the file: changing the journal does not wait by itself."""
    end = time.monotonic() + _PATIENCE_S
    while True:
        try:
            step()
        except sqlite3.OperationalError as problem:
            if "locked" not in str(problem) or time.monotonic() > end:
                raise
            time.sleep(0.02)
        else:
            return


_CONDITION_NAMES = tuple(f.name for f in fields(Conditions))
_PAIRS = {
    "nominal_pixel_size_nm": ("nominal_row_nm", "nominal_column_nm"),
    "pixel_size_nm": ("pixel_row_nm", "pixel_column_nm"),
    "relative_uncertainty": ("relative_uncertainty_row", "relative_uncertainty_column"),
}


def _cells(entry: LogEntry) -> dict[str, Any]:
    """Return an entry as the cells of its row."""
    cells: dict[str, Any] = {}
    for f in fields(LogEntry):
        value = getattr(entry, f.name)
        if f.name == "conditions":
            cells |= asdict(value)
        elif f.name in _PAIRS:
            cells |= dict(zip(_PAIRS[f.name], value or (None, None), strict=True))
        else:
            cells[f.name] = int(value) if isinstance(value, bool) else value
    return cells


def _entry(cells: dict[str, Any]) -> LogEntry:
    """Return the entry of a row's cells."""
    rest = dict(cells)
    conditions = Conditions(**{name: rest.pop(name) for name in _CONDITION_NAMES})
    pairs: dict[str, Any] = {name: (rest.pop(row), rest.pop(column)) for name, (row, column) in _PAIRS.items()}
    if None in pairs["relative_uncertainty"]:
        pairs["relative_uncertainty"] = None
    return LogEntry(conditions=conditions, shared_error=bool(rest.pop("shared_error")), **pairs, **rest)


def _entry_of_text(row: dict[str, str]) -> LogEntry:
    """Return the entry of a line of a table, where every cell is text and empty ones are missing."""
    unknown = set(row) - set(COLUMN_NAMES)
    if unknown:
        raise ValueError(f"column {sorted(unknown)[0]!r} is not known")
    cells: dict[str, Any] = {name: _DEFAULTS.get(name) for name in COLUMN_NAMES}
    for name, value in row.items():
        kind = _KINDS.get(name, str)
        try:
            cells[name] = kind(value)
        except ValueError:
            raise ValueError(f"{name} must be a number, got {value!r}") from None
    cells["number"] = None
    if "id" not in row:
        content = "\n".join(f"{name}={row[name]}" for name in sorted(row))
        cells["id"] = uuid.uuid5(uuid.NAMESPACE_OID, content).hex
    return _entry(cells)


_NEEDED = {"checked_at", "nominal_row_nm", "nominal_column_nm", "pixel_row_nm", "pixel_column_nm"}
_KINDS: dict[str, Callable[[str], Any]] = {
    line.split()[0]: {"REAL": float, "INTEGER": int, "TEXT": str}[line.split()[1].rstrip(",")]
    for line in _COLUMNS.strip().splitlines()
}
_DEFAULTS: dict[str, Any] = {name: "" for name, kind in _KINDS.items() if kind is str} | {
    "details": "{}",
    "coverage_factor": 2.0,
    "shared_error": 0,
}
