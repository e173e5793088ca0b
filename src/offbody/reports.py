"""What is kept of a case: tables for programs, pages for people, in a folder that is whole."""

import contextlib
import csv
import json
import math
import os
import re
import secrets
import shutil
import textwrap
from importlib import resources
from pathlib import Path
from typing import NamedTuple

import numpy as np

from offbody._version import __version__
from offbody.bearings import to_bearing
from offbody.errors import InputError
from offbody.surroundings import Duct, Ground, Row
from offbody.surveys import _runs as runs

LIMIT = 0.01  # IEC 61400-12-1: keep the distortion by the mast below 1 percent
DIRECTION_LIMIT = 1.0  # degrees; a rule of this project: no standard is quoted for it
PAGE_WIDTH = 92
MOST_SECTORS = 8  # of one kind that a page lists; the table has them all
BOOM_LIMIT = 0.005  # the same standard: by the boom below 0.5 percent

# What a folder may hold and still be replaced: no file that somebody else put there.
OWN_FILES = re.compile(
    r"summary\.txt|report\.html|(survey|mounts)\.(csv|json)|field\.npz|trade-off\.png"
    r"|(map|field|sensors)(-[-.\w]+)?\.png"
)
BUILT_IN_CASES = {
    name: resources.files("offbody") / file
    for name, file in (
        ("mast", "demo.toml"), ("lattice", "demo_lattice.toml"), ("duct", "demo_duct.toml"),
    )
}

CAUTIONS = (
    "The flow is taken as two-dimensional, steady, of low speed and without turbulence or shear: "
    "guys, clamps, booms of which no section is given, the instruments' own bodies and a body's "
    "ends are not in it.",
    "The lee of a bluff body is not predicted, nor a body with a sharp edge beyond its incidence: "
    "there the tables hold numbers that mean nothing, marked as not trusted.",
    "What this page says supports a judgement and replaces none. Work at height, flight and "
    "control are matters for local codes and licensed practice.",
)


@contextlib.contextmanager
def whole_folder(path, overwrite=False):
    """A new folder to write in, which takes its name only when everything in it is there.

    Whatever goes wrong inside the block, an interrupt included, the folder is removed and what
    stood at ``path`` before is still there.

    Parameters
    ----------
    path : str or path-like
        Where the folder shall stand; its parent must exist.
    overwrite : bool
        Whether a folder that stands there already may be replaced.

    Yields
    ------
    Path
        The folder to write in.

    Raises
    ------
    ob.InputError
        If something stands at ``path`` and may not be replaced, or its parent is missing.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as parent:
    ...     with whole_folder(Path(parent, "results")) as folder:
    ...         _ = (folder / "summary.txt").write_text("all is well")
    ...     [entry.name for entry in Path(parent).iterdir()]
    ['results']
    """
    path = Path(os.path.abspath(path))
    _refuse_standing(path, overwrite)
    mark = secrets.token_hex(4)
    fresh = path.with_name(f".{path.name}.{mark}.new")
    aside = path.with_name(f".{path.name}.{mark}.old")
    try:
        fresh.mkdir()
        yield fresh
        _refuse_standing(path, overwrite)
        if path.exists():
            path.rename(aside)
        fresh.rename(path)
    except BaseException:
        if aside.exists() and not path.exists():
            aside.rename(path)
        raise
    finally:
        shutil.rmtree(fresh, ignore_errors=True)
        if path.exists():  # else what was set aside is all there is: it stays
            shutil.rmtree(aside, ignore_errors=True)


def _refuse_standing(path, overwrite):
    if not path.parent.is_dir():
        raise InputError(f"--out {path}: there is no folder {path.parent}; make it first")
    if not os.path.lexists(path):
        return
    if path.is_symlink() or not path.is_dir():
        raise InputError(f"--out {path}: not a folder; give another name")
    if not overwrite:
        raise InputError(f"--out {path}: exists already; give another name, or --overwrite")
    for entry in sorted(path.iterdir()):
        if not _is_own(entry):
            raise InputError(
                f"--out {path}: holds {entry.name!r}, which is not offbody's to replace; "
                "move it, or give another name"
            )


def _is_own(entry):
    """Whether a file is offbody's to replace: a result, or a built-in case, not edited since."""
    if entry.name == "case.toml":
        return entry.read_bytes() in [case.read_bytes() for case in BUILT_IN_CASES.values()]
    return OWN_FILES.fullmatch(entry.name) is not None


def write_csv(path, case, table):
    """Write a survey as one header row, its units in the names, and one row per reading."""
    with open(path, "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(_heading(name, unit, case) for name, unit, _ in table.columns)
        for row in _rows(case, table):
            writer.writerow(_cell(value) for value in row.values())


def _heading(name, unit, case):
    return name + {"degrees": "_degrees", "1/length": f"_per_{case.length_unit}"}.get(unit, "")


def _rows(case, table):
    """The rows of a survey, in whose reasons the bodies bear the case's names."""
    for row in table.rows():
        yield row | {"reason": case.in_its_names(row["reason"])}


def _cell(value):
    """A value as CSV holds it: nothing where it has no meaning, all digits where it has."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return "" if math.isnan(value) else repr(value)
    return value


def write_json(path, case, table):
    """Write a survey with its units, the case it was made from, and what each column means."""
    rows = list(_rows(case, table))
    names = [name for name, _, _ in table.columns]
    document = {
        "offbody": __version__,
        "case_file": Path(case.file).name,
        "case": case.entries,
        "angles": "bearings" if case.by_bearing else "directions",
        "length_unit": case.length_unit,
        "columns": {
            name: {"unit": unit.replace("length", case.length_unit), "meaning": meaning}
            for name, unit, meaning in table.columns
        },
        "notes": [case.in_its_names(note) for note in table.notes],
        "data": {name: [_plain(row[name]) for row in rows] for name in names},
    }
    Path(path).write_text(_laid_out(document), encoding="utf-8")


def _plain(value):
    return None if isinstance(value, float) and math.isnan(value) else value


def _laid_out(value, depth=0):
    """JSON with one line per key of the outer two levels: short to scroll, plain to compare."""
    if depth == 2 or not isinstance(value, dict) or not value:
        return json.dumps(value, ensure_ascii=False, allow_nan=False)
    indent = "  " * (depth + 1)
    lines = [f"{indent}{json.dumps(key)}: {_laid_out(entry, depth + 1)}"
             for key, entry in value.items()]
    return "{\n" + ",\n".join(lines) + "\n" + "  " * depth + "}" + ("\n" if depth == 0 else "")


def write_field(path, case, x, y, directions, velocity):
    """Write a dense grid with its axes.

    Parameters
    ----------
    x, y : (nx,), (ny,) array
        Grid lines, in the case's unit of length.
    directions : (n,) array
        Where the stream goes to, in degrees.
    velocity : (n, ny, nx, 2) array
        Over the undisturbed speed.
    """
    u, v = np.moveaxis(velocity, -1, 0)
    np.savez(
        path,
        x=x,
        y=y,
        stream_direction=directions,
        stream_bearing=to_bearing(directions),
        u=u,
        v=v,
        speed_ratio=np.hypot(u, v),
        direction=np.degrees(np.arctan2(v, u)) % 360.0,
        pressure_coefficient=1.0 - u**2 - v**2,
        length_unit=case.length_unit,
        case=json.dumps(case.entries),
        offbody=__version__,
    )


def summary(case, table, cautions=()):
    """The page that a person reads first.

    Parameters
    ----------
    case : Case
    table : Survey
    cautions : iterable of str
        What the library warned of on the way.

    Returns
    -------
    str
    """
    lines = [case.title, "=" * len(case.title), *opening(case, table), "", "BODIES"]
    for body in case.bodies:
        lines += textwrap.wrap(
            body_line(body), PAGE_WIDTH, initial_indent="  ", subsequent_indent="      "
        )
    for line in bracing_lines(case):
        lines += textwrap.wrap(
            line, PAGE_WIDTH, initial_indent="  ", subsequent_indent="      "
        )
    lines += ["", "SENSORS (speeds and directions sensed, against the undisturbed stream)"]
    for place in range(len(table.sensors)):
        lines += _sensor_lines(case, table, place)
    lines += ["", "READ THIS BEFORE USE"]
    for note in (*map(case.in_its_names, table.notes), *cautions, *CAUTIONS):
        lines += textwrap.wrap(note, PAGE_WIDTH, initial_indent="- ", subsequent_indent="  ")
    return "\n".join(lines) + "\n"


def opening(case, table):
    if case.by_bearing:
        kind = "wind bearings (where the wind comes from, clockwise from north)"
    else:
        kind = "directions (where the stream goes to, counter-clockwise from +x)"
    yield f"{len(table.angles)} {kind}: {_extent(table.angles)}"
    yield f"{_around(case.surroundings)}; lengths in {case.length_unit}{case.speed_in_words('; ')}"
    yield f"{Path(case.file).name}, offbody {__version__}"


def _around(surroundings):
    match surroundings:
        case Ground():
            return f"over the ground y = {surroundings.y:g}"
        case Duct():
            return f"in a duct from y = {surroundings.lower:g} to {surroundings.upper:g}"
        case Row():
            return f"in a row of pitch {surroundings.pitch:g}"
    return "open stream"


def _extent(angles):
    """A set of angles in few words."""
    steps = np.diff(angles) % 360.0
    if len(angles) > 2 and np.allclose(steps, steps[0]):
        unit = "degree" if steps[0] == 1 else "degrees"
        return f"{angles[0]:g} to {angles[-1]:g} in steps of {steps[0]:g} {unit}"
    return ", ".join(f"{angle:g}" for angle in angles[:12]) + (" ..." if len(angles) > 12 else "")


def body_line(body):
    wake = "no drag coefficient, wake displacement left out"
    if body.outline.edge is not None:
        wake = "sharp edge, thin wake left out"
    if body.wake is not None:
        given = body.wake.drag_coefficient
        table = "against direction" if isinstance(given, tuple) else f"{given:g}"
        wake = f"drag coefficient {table}, wake displacement included"
    return f"{body.name}: {body.outline.name}; {wake}"


def bracing_lines(case):
    """A line on each braced face."""
    for name, face in case.bracings.items():
        yield (
            f"{name}: bracing {face.length:g} {case.length_unit} long; drag coefficient "
            f"{face.drag_coefficient:g}, spread along it; the flow passes through"
        )


def _sensor_lines(case, table, place):
    sensor = table.sensors[place]
    reads = "the component along it" if sensor.kind == "path" else sensor.reads
    reads = "speed and direction" if reads == "both" else reads
    yield ""
    yield f"  {table.names[place]} ({sensor.kind}, reads {reads})"
    for label, text in _findings(case, table, place):
        yield from textwrap.wrap(
            text, PAGE_WIDTH, initial_indent=f"    {label:<27}", subsequent_indent=" " * 31
        )


class Reading(NamedTuple):
    """One quantity that a sensor reads, and by how much it is off."""

    name: str
    errors: np.ndarray  # (n,) in percent, degrees or pressure coefficients; NaN where not read
    unit: str
    limit: float | None  # of the errors, in the same unit
    worded: object  # an error in words

    @property
    def limit_words(self):
        return f"within {self.limit:g} {self.unit.removesuffix('s')}"


def readings(case, table, place):
    """The readings of one sensor of a survey."""
    sensor, ratio = table.sensors[place], table.speed_ratio[:, place]
    if np.isfinite(ratio).any():
        name = "component" if sensor.kind == "path" else "speed"
        yield Reading(name, 100 * (ratio - 1), "percent", 100 * LIMIT,
                      lambda error: _percent(case, error))
    by_boom = table.boom_speed_ratio[:, place]
    if table.booms[place] is not None and np.isfinite(by_boom).any():
        yield Reading("by boom", 100 * (by_boom - 1), "percent", 100 * BOOM_LIMIT,
                      lambda error: _percent(case, error))
    component = table.component_error[:, place]
    if np.isfinite(component).any():
        yield Reading("component error", 100 * component, "percent of the undisturbed speed", None,
                      lambda error: f"{error:+.2f} percent of the undisturbed speed")
    turning = table.direction_error[:, place]
    if np.isfinite(turning).any():
        sense = "clockwise" if case.by_bearing else "counter-clockwise"
        yield Reading("direction", turning, "degrees", DIRECTION_LIMIT,
                      lambda error: f"{error:+.2f} degrees ({sense} positive)")
    if sensor.kind == "port":
        yield Reading("pressure coefficient", table.static_error[:, place], "", None,
                      lambda error: f"{error:.3f}")


def _findings(case, table, place):
    """Label and finding, by what the sensor reads."""
    trust, doubtful = table.trust[:, place], table.doubtful[:, place]
    for reading in readings(case, table, place):
        if reading.limit is not None:
            good = is_within(reading, trust)
            yield f"{reading.name} {reading.limit_words}", sectors_in_words(table, good)
        elif reading.name == "component error":
            square = np.isnan(table.speed_ratio[:, place])
            if square.any():
                yield "square to the path", f"{sectors_in_words(table, square)}: no ratio there"
        if reading.unit:
            yield f"worst {reading.name}", worst_in_words(table, reading, trust)
        elif trust.any():
            yield reading.name, range_in_words(reading, trust)
    if np.isfinite(table.yaw[trust, place]).any():
        yaw = table.yaw[trust, place]
        yield "yaw on its axis", f"{np.nanmin(yaw):+.2f} to {np.nanmax(yaw):+.2f} degrees"
    yield "trusted", f"{trust.mean():.0%} of the angles"
    if (trust & doubtful).any():
        edges = sectors_in_words(table, trust & doubtful)
        yield "trusted, but doubtful", f"{edges}: at the edge of a lee"
    for reason in dict.fromkeys(table.reason[~trust, place]):
        here = table.reason[:, place] == reason
        yield "not trusted", f"{sectors_in_words(table, here)}: {case.in_its_names(reason)}"


def is_within(reading, trust):
    """(n,) where a reading is trusted and within its limit."""
    return trust & (np.abs(reading.errors) <= reading.limit)


def range_in_words(reading, trust):
    trusted = reading.errors[trust]
    if not trusted.size:
        return "not known: no angle is trusted"
    return f"{np.nanmin(trusted):.3f} to {np.nanmax(trusted):.3f} where trusted"


def sectors_in_words(table, good):
    """Sectors of the table's angles in words."""
    found = runs(table.angles, good)
    if not found:
        return "nowhere"
    if good.all():
        return "everywhere"
    texts = [f"{a:g}" if a == b else f"{a:g} to {b:g}" for a, b in found[:MOST_SECTORS]]
    more = f" and {len(found) - MOST_SECTORS} more" if len(found) > MOST_SECTORS else ""
    return ", ".join(texts) + more


def worst_in_words(table, reading, trust):
    """The greatest trusted error in words, and where it is."""
    row = _worst_row(reading, trust)
    if row is None:
        return "not known: no angle is trusted"
    kind = "bearing" if table.by_bearing else "direction"
    return f"{reading.worded(reading.errors[row])} at {kind} {table.angles[row]:g}"


def _worst_row(reading, trust):
    """Where the greatest trusted error is, or None."""
    usable = np.flatnonzero(trust & np.isfinite(reading.errors))
    if not usable.size:
        return None
    # Mirror images are equal but for rounding: the first of them stands for both.
    return int(usable[np.abs(reading.errors[usable]).round(7).argmax()])


def _percent(case, error):
    speed = f" ({error / 100 * case.speed:+.2f} {case.speed_unit})" if case.speed else ""
    return f"{error:+.2f} percent{speed}"


def place_of(sensor, model):
    """The one point that stands for a sensor in a drawing."""
    if sensor.kind != "port":
        return np.asarray(sensor.centre)
    wall = model.surface(sensor.body)
    around = np.concatenate([wall.points, wall.points[:1]])
    length = np.hypot(*np.diff(around, axis=0).T).sum()
    arc = sensor.arc_fraction * length
    return np.array([np.interp(arc, wall.arc, line, period=length) for line in wall.points.T])
