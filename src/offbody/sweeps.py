"""Sweeps: the surveys of many cases, by whatever executor there is, one bad case harming none."""

import hashlib
import json
import os
import sys
from collections.abc import Mapping
from concurrent.futures import as_completed
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import quote

import numpy as np
from tqdm import tqdm

from offbody._version import __version__
from offbody.checks import nearest_name
from offbody.errors import InputError
from offbody.parallel import threads
from offbody.surveys import Survey

COLUMNS = ("speed_ratio", "direction_error", "trust")
KNOWN = {name for name, *_ in Survey.columns} - {
    "sensor", "direction", "bearing", "speed_ratio_gradient_x", "speed_ratio_gradient_y"
} | {"speed_ratio_gradient", "direction_error_gradient"}


@dataclass(frozen=True, eq=False)
class Swept:
    """What one case of a sweep came to.

    Attributes
    ----------
    name : str
    error : str or None
        Why there is no result; None where there is one.
    sensors : tuple of str
        Names of the k sensors.
    angles : (n,) array
        Bearings if the case gives bearings, else directions, in degrees.
    columns : dict of (n, k) arrays
        Those columns of the survey that were asked for.
    notes : tuple of str
        What the reader must know about the survey.
    """

    name: str
    error: str | None
    sensors: tuple = ()
    angles: np.ndarray | None = None
    columns: dict | None = None
    notes: tuple = ()

    def __repr__(self):
        return f"Swept({self.name!r}, {'error: ' + self.error if self.error else 'done'})"


def sweep(cases, executor=None, *, folder=None, columns=COLUMNS, progress=True):
    """The surveys of many cases, in their order; a case that fails says why, the rest go on.

    Parameters
    ----------
    cases : mapping or iterable
        Paths of case files, or dicts of what such a file holds (see ``offbody.cases``); as a
        mapping, by name. Else a file is named by its stem, a dict by its place, "case 1" first.
    executor : concurrent.futures.Executor, optional
        Where the cases are solved, such as a ``ProcessPoolExecutor``, or what Dask's
        ``client.get_executor()`` or mpi4py's ``MPIPoolExecutor`` make. None: here, one by one.
    folder : str or path-like, optional
        Where each result is kept as soon as it is there, as NAME.json; made if missing. A result
        found there is not worked out anew if the case, the files that it names, the columns and
        offbody's version are the same: a sweep that was broken off goes on where it was.
    columns : sequence of str
        The columns of ``ob.Survey`` to keep.
    progress : bool
        Whether to show a bar on standard error, if that is a terminal.

    Returns
    -------
    list of Swept

    Raises
    ------
    ob.InputError
        If there is no case, two have one name, a case is neither a path nor a dict, a column is
        unknown, the executor has no ``submit``, or the folder cannot be used.

    Notes
    -----
    Give a process pool a start method of "spawn" or "forkserver" if your program has threads of its
    own. In another process than the caller's a case uses one thread for offbody's own sums; set
    ``OMP_NUM_THREADS=1`` to keep LAPACK to one as well.

    Examples
    --------
    Booms on masts: two lengths on two diameters here, two thousand variants just the same.

    >>> import offbody as ob
    >>> def mast(diameter, length):
    ...     boom = {"bearing": 240, "length": length, "from": "axis"}
    ...     return {
    ...         "length_unit": "m",
    ...         "stream": {"bearings": 10},
    ...         "body": [{"shape": "circle", "diameter": diameter, "drag_coefficient": 1.2}],
    ...         "sensor": [{"kind": "point", "reads": "speed", "boom": boom}],
    ...     }
    >>> variants = {
    ...     f"{diameter} m, boom {length} m": mast(diameter, length)
    ...     for diameter in (0.2, 0.3) for length in (2.0, 4.0)
    ... }
    >>> for done in ob.sweep(variants):
    ...     error = abs(done.columns["speed_ratio"] - 1)[done.columns["trust"]]
    ...     print(f"{done.name}: {error.max():.1%}")
    0.2 m, boom 2.0 m: 1.1%
    0.2 m, boom 4.0 m: 0.5%
    0.3 m, boom 2.0 m: 1.8%
    0.3 m, boom 4.0 m: 0.8%
    """
    jobs = _jobs(cases, _as_columns(columns))
    if executor is not None and not callable(getattr(executor, "submit", None)):
        raise InputError(
            f"executor = {executor!r} has no submit: give one as concurrent.futures has them "
            "(of Dask client.get_executor(), not the client)"
        )
    store = None if folder is None else _Store(folder)
    results = [store.find(job) if store else None for job in jobs]
    left = [place for place, found in enumerate(results) if found is None]
    bar = tqdm(
        total=len(jobs), initial=len(jobs) - len(left), desc="cases", file=sys.stderr,
        disable=None if progress else True, leave=False,
    )
    failed = 0
    with bar:
        for place, result in _run([jobs[place] for place in left], executor):
            results[left[place]] = result
            if result.error is None and store:
                store.keep(jobs[left[place]], result)
            failed += result.error is not None
            bar.set_postfix({"failed": failed} if failed else {}, refresh=False)
            bar.update()
    return results


@dataclass(frozen=True)
class _Job:
    """One case, as it travels to where it is solved."""

    name: str
    file: str
    entries: dict
    columns: tuple
    caller: int  # the process that asked

    @property
    def stamp(self):
        """What must be the same for a result to be the same; None of what JSON cannot hold."""
        bodies = (self.entries or {}).get("body", ())
        paths = [
            body["file"] for body in (bodies if isinstance(bodies, list) else ())
            if isinstance(body, Mapping) and isinstance(body.get("file"), str)
        ]
        files = {path: _digest(Path(self.file).parent / path) for path in paths}
        stamp = {"offbody": __version__, "case": self.entries, "files": files,
                 "columns": self.columns}
        try:
            return json.loads(json.dumps(stamp, default=_as_json))
        except (TypeError, ValueError):
            return None


def _run(jobs, executor):
    """Yield (place, result) of every job as it is done."""
    if executor is None:
        for place, job in enumerate(jobs):
            yield place, _surveyed(job)
        return
    futures, refused = {}, []
    for place, job in enumerate(jobs):
        try:
            futures[executor.submit(_surveyed, job)] = place
        except Exception as error:  # a pool that broke takes no more
            refused.append((place, _failure(job, error)))
    yield from refused
    try:
        for future in as_completed(futures):
            place = futures[future]
            try:
                yield place, future.result()
            except Exception as error:  # lost on its way, as with a worker that died
                yield place, _failure(jobs[place], error)
    finally:
        for future in futures:
            future.cancel()


def _surveyed(job):
    """The result of one case: whatever goes wrong with it is part of it."""
    from offbody.cases import read_case  # which needs all of the library, this module included

    if os.getpid() != job.caller:
        threads(1)
    try:
        case = read_case(job.file, job.entries)
        table = case.survey(case.solve())
        columns = {name: np.array(getattr(table, name)) for name in job.columns}
    except Exception as error:
        return _failure(job, error)
    notes = tuple(case.in_its_names(note) for note in table.notes)
    return Swept(job.name, None, table.names, np.array(table.angles), columns, notes)


def _failure(job, error):
    words = str(error) if isinstance(error, InputError) else f"{type(error).__name__}: {error}"
    return Swept(job.name, words)


def _jobs(cases, columns):
    """One job per case, their names all different."""
    from offbody.cases import read_entries

    if isinstance(cases, str | os.PathLike):
        raise InputError(f"cases = {cases!r} is one path: give a list of them")
    try:
        named = list(cases.items() if isinstance(cases, Mapping) else ((None, c) for c in cases))
    except TypeError:
        raise InputError(f"cases must be a mapping or a list of cases, got {cases!r}") from None
    if not named:
        raise InputError("cases is empty: give at least one case")
    jobs = {}
    for place, (name, case) in enumerate(named):
        if isinstance(case, Mapping):
            name = f"case {place + 1}" if name is None else name
            file, entries = name, dict(case)
        elif isinstance(case, str | os.PathLike):
            name = Path(case).stem if name is None else name
            # A file that cannot be read is that case's own failure, where its turn comes.
            file, entries = os.path.abspath(case), None
            try:
                entries = read_entries(Path(case))[1]
            except InputError:
                pass
        else:
            raise InputError(f"cases[{place}] must be a path or a dict, got {case!r}")
        if not isinstance(name, str) or not name.strip() or "/" in name:
            raise InputError(f"cases: a name must be a text, not blank and without /, got {name!r}")
        if name in jobs:
            raise InputError(f"cases: two are named {name!r}; give a mapping with a name for each")
        jobs[name] = _Job(name, file, entries, columns, os.getpid())
    return list(jobs.values())


def _as_columns(columns):
    columns = (columns,) if isinstance(columns, str) else tuple(columns)
    for name in columns:
        if name not in KNOWN:
            raise InputError(f"columns: {name!r} is unknown; {nearest_name(name, KNOWN)}")
    return columns


class _Store:
    """A folder of results, one file for each case."""

    def __init__(self, folder):
        self.folder = Path(folder)
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
        except OSError as error:
            raise InputError(f"folder = {str(folder)!r} cannot be made: {error.strerror}") from None

    def find(self, job):
        """The result of the same case, or None."""
        path = self._path(job)
        if not path.exists() or job.stamp is None:
            return None
        try:
            document = json.loads(path.read_text(encoding="utf-8"))
            stamp = document["stamp"]
        except (ValueError, KeyError, TypeError):
            raise InputError(
                f"folder: {path.name!r} is no result of a sweep; move it, or give another folder"
            ) from None
        if stamp != job.stamp:
            return None
        columns = {name: _restored(values) for name, values in document["columns"].items()}
        return Swept(
            job.name, None, tuple(document["sensors"]), np.array(document["angles"], float),
            columns, tuple(document["notes"]),
        )

    def keep(self, job, result):
        """Write a result, whole or not at all."""
        document = {
            "stamp": job.stamp,
            "sensors": result.sensors,
            "angles": result.angles.tolist(),
            "columns": {name: _plain(values) for name, values in result.columns.items()},
            "notes": result.notes,
        }
        path = self._path(job)
        fresh = path.with_name(f".{path.name}.{os.getpid()}.new")
        try:
            fresh.write_text(json.dumps(document, allow_nan=False), encoding="utf-8")
            os.replace(fresh, path)
        finally:
            fresh.unlink(missing_ok=True)

    def _path(self, job):
        return self.folder / f"{quote(job.name, safe=' ,()=+@')}.json"


def _as_json(value):
    return value.tolist() if hasattr(value, "tolist") else str(value)


def _digest(path):
    return hashlib.sha256(path.read_bytes()).hexdigest() if path.is_file() else None


def _plain(values):
    """An array as JSON takes it: null where it is NaN."""
    if values.dtype.kind != "f":
        return values.tolist()
    return np.where(np.isnan(values), None, values).tolist()


def _restored(values):
    """The array again, its kind by what stands first."""
    return np.array(values, {bool: bool, str: object}.get(type(values[0][0]), float))
