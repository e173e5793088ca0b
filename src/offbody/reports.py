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

from offbody import pages
from offbody._version import __version__
from offbody.bearings import to_bearing
from offbody.errors import InputError
from offbody.surroundings import Duct, Ground, Row
from offbody.surveys import WIDEST_STEP
from offbody.surveys import _runs as runs

LIMIT = 0.01  # IEC 61400-12-1: keep the distortion by the mast below 1 percent
DIRECTION_LIMIT = 1.0  # degrees; a rule of this project: no standard is quoted for it
PAGE_WIDTH = 92
MOST_SECTORS = 8  # of one kind that a page lists; the table has them all
MOST_RINGS = 8  # sensors round the plan
MOST_BUDGETS = 6  # sensors whose budget is printed line by line
LEAST_SHARE = 0.001  # of the variance, for a line of a budget

# What a folder may hold and still be replaced: no file that somebody else put there.
OWN_FILES = re.compile(
    r"summary\.txt|report\.html|survey\.(csv|json)|field\.npz|(map|field|sensors)(-[-.\w]+)?\.png"
)
BUILT_IN_CASES = {
    name: resources.files("offbody") / file
    for name, file in (
        ("mast", "demo.toml"), ("lattice", "demo_lattice.toml"), ("duct", "demo_duct.toml"),
    )
}

CAUTIONS = (
    "The flow is taken as two-dimensional, steady, of low speed and without turbulence or shear: "
    "booms, guys, clamps, the instruments' own bodies and a body's ends are not in it.",
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
    lines = [case.title, "=" * len(case.title), *_opening(case, table), "", "BODIES"]
    for body in case.bodies:
        lines += textwrap.wrap(
            _body_line(body), PAGE_WIDTH, initial_indent="  ", subsequent_indent="      "
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


def _opening(case, table):
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


def _body_line(body):
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
            yield f"{reading.name} {reading.limit_words}", _sectors(table, _within(reading, trust))
        elif reading.name == "component error":
            square = np.isnan(table.speed_ratio[:, place])
            if square.any():
                yield "square to the path", f"{_sectors(table, square)}: no ratio there"
        if reading.unit:
            yield f"worst {reading.name}", _worst(table, reading, trust)
        elif trust.any():
            yield reading.name, _range(reading, trust)
    if np.isfinite(table.yaw[trust, place]).any():
        yaw = table.yaw[trust, place]
        yield "yaw on its axis", (
            f"{np.nanmin(yaw):+.2f} to {np.nanmax(yaw):+.2f} degrees where trusted"
        )
    if table.booms[place] is not None and trust.any():
        part = 100 * (table.boom_speed_ratio[trust, place] - 1)
        yield "of it its own boom's", f"{part.min():+.2f} to {part.max():+.2f} percent of the speed"
    yield "trusted", f"{trust.mean():.0%} of the angles"
    if (trust & doubtful).any():
        yield "trusted, but doubtful", f"{_sectors(table, trust & doubtful)}: at the edge of a lee"
    for reason in dict.fromkeys(table.reason[~trust, place]):
        here = table.reason[:, place] == reason
        yield "not trusted", f"{_sectors(table, here)}: {case.in_its_names(reason)}"


def _within(reading, trust):
    """(n,) where a reading is trusted and within its limit."""
    return trust & (np.abs(reading.errors) <= reading.limit)


def _range(reading, trust):
    trusted = reading.errors[trust]
    if not trusted.size:
        return "not known: no angle is trusted"
    return f"{np.nanmin(trusted):.3f} to {np.nanmax(trusted):.3f} where trusted"


def _sectors(table, good):
    """Sectors of the table's angles in words."""
    found = runs(table.angles, good)
    if not found:
        return "nowhere"
    if good.all():
        return "everywhere"
    texts = [f"{a:g}" if a == b else f"{a:g} to {b:g}" for a, b in found[:MOST_SECTORS]]
    more = f" and {len(found) - MOST_SECTORS} more" if len(found) > MOST_SECTORS else ""
    return ", ".join(texts) + more


def _worst(table, reading, trust):
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


# --- the page to keep -----------------------------------------------------------------------------


def survey_page(case, table, budget, pictures=(), no_pictures="", cautions=()):
    """The HTML page of a survey.

    Parameters
    ----------
    case : Case
    table : Survey
    budget : Uncertainty or None
        What the case's tolerances make of the table.
    pictures : iterable of (angle, bytes)
        Maps, as PNG, for some of the winds.
    no_pictures : str
        Why there are none.
    cautions : iterable of str
        What the library warned of on the way.

    Returns
    -------
    str
    """
    sections = [
        ("Answer", _answer(case, table, budget)),
        ("Plan", _plan(case, table)),
        ("Flow", _maps(case, pictures, no_pictures)),
        ("Error", _curves(case, table, budget)),
        ("Uncertainty", _budgets(case, table, budget)),
        ("Limits and cautions", pages.bullets(
            (*map(case.in_its_names, table.notes), *cautions, *CAUTIONS)
        )),
        ("To run it again", _rerun(case)),
    ]
    return pages.page(case.title, sections, __version__, _opening(case, table))


def _kind(case):
    return "bearing" if case.by_bearing else "direction"


def _answer(case, table, budget):
    """Where which sensor can be believed, and how far."""
    rows = [
        _answer_row(table, budget, place, reading)
        for place in range(len(table.names))
        for reading in readings(case, table, place)
    ]
    caption = (
        f"What each sensor reads against the undisturbed stream, by {_kind(case)} in degrees. "
        f"Limits: {100 * LIMIT:g} percent of the speed (as IEC 61400-12-1 has it for a mast), "
        f"{DIRECTION_LIMIT:g} degree of direction. Expected: the mean error and the root of its "
        "mean square, over the trusted angles, all alike"
        + ("; and half the width of the 95 percent interval once corrected, in the median."
           if budget else ".")
    )
    return "\n".join((
        pages.paragraphs(_verdict(case, table, budget), kind="lead"),
        pages.table(caption, ["Sensor", "Reads", "Within its limit", "Worst", "Expected"], rows),
        pages.table(
            "What to leave out, and where to look twice.", ["Sensor", "Leave out", "Doubtful"],
            [_exclusions(case, table, place) for place in range(len(table.names))],
        ),
    ))


def _verdict(case, table, budget):
    """Where a sensor can be believed, in one or two sentences."""
    speeds = [
        (place, reading)
        for place in range(len(table.names))
        for reading in readings(case, table, place)
        if reading.name == "speed"
    ]
    if not speeds:
        who = "sensor can" if len(table.names) == 1 else "or more of the sensors can"
        return f"{_share(case, table, table.trust.any(axis=1))}, one {who} be trusted."
    good = np.any([_within(reading, table.trust[:, place]) for place, reading in speeds], axis=0)
    who = "the sensor reads" if len(table.names) == 1 else "one or more of the sensors read"
    text = (
        f"{_share(case, table, good)}, {who} within {100 * LIMIT:g} percent of the undisturbed "
        "speed."
    )
    expanded = [_expanded(budget, place, reading) for place, reading in speeds]
    known = [each for each in expanded if each is not None]
    if known:
        best = np.fmin.reduce(known)
        text += f" Corrected by this survey, expect \u00b1{np.nanmedian(best):.2g} percent (k = 2)"
        text += " of it." if len(table.names) == 1 else " of the best of them."
        if "speed calibration" in case.unstated_tolerances:
            text += " The sensors' own calibration is not in that: the case does not state it."
    return text


def _share(case, table, good):
    """At how many of the angles, and at which not; to begin a sentence."""
    if good.all():
        return f"At every {_kind(case)}"
    counted = f"At {good.sum()} of {good.size} {_kind(case)}s"
    return f"{counted} (not {_sectors(table, ~good)})" if good.any() else counted


def _answer_row(table, budget, place, reading):
    trust = table.trust[:, place]
    return [
        table.names[place],
        reading.name,
        _sectors(table, _within(reading, trust)) if reading.limit else "no limit",
        _worst(table, reading, trust) if reading.unit else _range(reading, trust),
        _expected(reading, trust, _expanded(budget, place, reading)),
    ]


def _exclusions(case, table, place):
    trust, doubtful = table.trust[:, place], table.trust[:, place] & table.doubtful[:, place]
    left_out = [
        f"{_sectors(table, table.reason[:, place] == reason)}: {case.in_its_names(reason)}"
        for reason in dict.fromkeys(table.reason[~trust, place])
    ]
    return [
        table.names[place],
        "; ".join(left_out) or "nothing",
        f"{_sectors(table, doubtful)}: at the edge of a lee" if doubtful.any() else "nothing",
    ]


def _expected(reading, trust, expanded):
    """Mean and root mean square of the trusted errors; what is left of them once corrected."""
    errors = reading.errors[trust & np.isfinite(reading.errors)]
    if not errors.size:
        return "not known: no angle is trusted"
    digits = 2 if reading.unit else 3
    mean = errors.mean().round(digits) + 0.0  # no minus before a zero
    square = np.sqrt(np.mean(errors**2))
    text = f"mean {mean:+.{digits}f}, r.m.s. {square:.{digits}f} {reading.unit}".rstrip()
    if expanded is not None:
        text += f"; corrected \u00b1{np.nanmedian(expanded):.2f}"
    return text


def _expanded(budget, place, reading):
    """Expanded uncertainty (n,) of a corrected reading in its own unit, or None."""
    if budget is None or reading.name not in ("speed", "direction"):
        return None
    expanded = (
        100 * budget.expanded_speed if reading.name == "speed" else budget.expanded_direction
    )[:, place]
    return expanded if np.isfinite(expanded).any() else None


def _plan(case, table):
    bodies = [body.outline.points(400) for body in case.bodies]
    if isinstance(case.surroundings, Row):
        pitch = np.array([0.0, case.surroundings.pitch])
        bodies = [body + n * pitch for n in (0, -1, 1) for body in bodies]
    ringed = () if case.surroundings.walls else range(min(len(table.names), MOST_RINGS))
    drawing = pages.Plan(
        bodies=bodies,
        booms=[
            *(boom for boom in case.booms if boom is not None),
            *(np.array([face.start, face.end]) for face in case.bracings.values()),
        ],
        markers=[_marker(table, place) for place in range(len(table.names))],
        rings=[pages.Ring(str(place + 1), _ring(case, table, place)) for place in ringed],
        walls=case.surroundings.walls,
        length_unit=case.length_unit,
        by_bearing=case.by_bearing,
    )
    who = ", ".join(f"{number} {name}" for number, name in enumerate(table.names, start=1))
    caption = f"To scale. Sensors: {who}."
    if ringed:
        comes = "wind" if case.by_bearing else "stream"
        caption += (
            f" A ring belongs to the sensor of its number: what it is worth when the {comes} "
            "comes from there."
        )
        if not case.by_bearing:
            caption += " The angles round it are the directions in which such a stream goes."
        if len(table.names) > MOST_RINGS:
            caption += f" Only the first {MOST_RINGS} sensors have rings."
    if isinstance(case.surroundings, Row):
        caption += " The row goes on without end."
    key = [
        ("within", "within its limits"), ("beyond", "trusted, beyond a limit or without one"),
        ("doubtful", "trusted, but doubtful"), ("excluded", "leave out"),
    ]
    described = f"Plan of {', '.join(body.name for body in case.bodies)} with sensors {who}."
    return pages.figure(
        pages.plan(drawing, described), caption, key if ringed else (), tall=True
    ) + pages.bullets([*map(_body_line, case.bodies), *bracing_lines(case)])


def _marker(table, place):
    sensor = table.sensors[place]
    paths = getattr(sensor, "paths", [sensor] if sensor.kind == "path" else [])
    return pages.Marker(
        place_of(sensor, table.model),
        str(place + 1),
        tuple(np.array([path.start, path.end]) for path in paths),
        getattr(sensor, "radius", 0.0),
    )


def place_of(sensor, model):
    """The one point that stands for a sensor in a drawing."""
    if sensor.kind != "port":
        return np.asarray(sensor.centre)
    wall = model.surface(sensor.body)
    around = np.concatenate([wall.points, wall.points[:1]])
    length = np.hypot(*np.diff(around, axis=0).T).sum()
    arc = sensor.arc_fraction * length
    return np.array([np.interp(arc, wall.arc, line, period=length) for line in wall.points.T])


def _ring(case, table, place):
    """Sectors of the places from which a stream comes, by what the sensor is worth in it."""
    trust, doubtful = table.trust[:, place], table.doubtful[:, place]
    limits = [
        _within(reading, trust)
        for reading in readings(case, table, place)
        if reading.limit is not None
    ]
    within = np.all(limits, axis=0) if limits else np.zeros_like(trust)
    for fill, here in (
        ("beyond", trust & ~doubtful & ~within), ("within", trust & ~doubtful & within),
        ("doubtful", trust & doubtful), ("excluded", ~trust),
    ):
        for start, stop in _widened(table.angles, here):
            if case.by_bearing:
                start, stop = 90.0 - stop, 90.0 - start
            else:
                start, stop = start + 180.0, stop + 180.0
            yield start, stop, fill


def _widened(angles, here):
    """Sectors (from, to), from growing to, which reach half way to the angles beside them."""
    order, turned = pages.laid_out(angles)
    steps = np.diff(turned)
    half = min(np.median(steps) if steps.size else WIDEST_STEP, WIDEST_STEP) / 2
    for start, stop in runs(angles, here):
        yield start - half, stop + 360.0 * (stop < start) + half


def _maps(case, pictures, no_pictures):
    shown = [
        pages.figure(
            pages.picture(png, f"Map of the speed ratio with streamlines, {_kind(case)} "
                               f"{angle:g} degrees, with the bodies, booms and sensors."),
            f"Speed ratio and streamlines at {_kind(case)} {angle:g} degrees.",
            tall=True,
        )
        for angle, png in pictures
    ]
    return "\n".join(shown) or pages.paragraphs(no_pictures)


def _curves(case, table, budget):
    """Every reading of every sensor against the angle."""
    band = [("band", "uncertainty once corrected, k = 2")] if budget else []
    key = pages.key([
        ("line", "error"), *band, ("limit", "limit"), ("doubtful", "doubtful"),
        ("excluded", "leave out"),
    ])
    return key + "\n".join(
        _sensor_figure(case, table, budget, place) for place in range(len(table.names))
    )


def _sensor_figure(case, table, budget, place):
    """The readings of one sensor, one below the other."""
    read, trust = list(readings(case, table, place)), table.trust[:, place]
    expanded = [_expanded(budget, place, reading) for reading in read]
    drawings = [
        pages.chart(
            _chart(case, table, place, reading, band, reading is read[-1]),
            f"{table.names[place]}: {_label(case, reading)} against the {_kind(case)}. "
            f"Worst: {_worst(table, reading, trust)}.",
        )
        for reading, band in zip(read, expanded, strict=True)
    ]
    caption = f"{table.names[place]}. Worst: " + "; ".join(
        f"{reading.name} {_worst(table, reading, trust)}" for reading in read
    )
    if any(band is not None for band in expanded) and (
        budget.direction_sensor[place] not in (-1, place)
    ):
        other = table.names[budget.direction_sensor[place]]
        caption += (
            f". A speed is corrected for the direction it comes with: here that of {other}, "
            "and where that is not trusted there is no band"
        )
    return pages.figure("\n".join(drawings), caption + ".")


def _label(case, reading):
    """What a reading's error is, with its unit."""
    if reading.name == "direction":
        sense = "clockwise" if case.by_bearing else "counter-clockwise"
        return f"direction error ({reading.unit}, {sense} positive)"
    if reading.name == "component":
        return "component error (percent of the component)"
    name = reading.name if reading.name != "speed" else "speed error"
    return f"{name} ({reading.unit or 1})"


def _chart(case, table, place, reading, expanded, last):
    """Error, band, limit and excluded angles of one reading; the last one names the x axis."""
    order, turned = pages.laid_out(table.angles)
    trust = table.trust[:, place]
    errors = np.where(trust, reading.errors, np.nan)[order]
    gaps = np.flatnonzero(np.diff(turned) > WIDEST_STEP) + 1
    x, y = np.insert(turned, gaps, np.nan), np.insert(errors, gaps, np.nan)
    low = high = None
    if expanded is not None:
        wide = np.insert(expanded[order], gaps, np.nan)
        low, high = y - wide, y + wide
    shown = errors if low is None else np.concatenate([errors, low, high])
    spans = [
        (start + shift, stop + shift, fill)
        for fill, here in (("doubtful", table.doubtful[:, place] & trust), ("excluded", ~trust))
        for start, stop in _widened(table.angles, here)
        for shift in (-360.0, 0.0, 360.0)  # an axis may run across north
    ]
    start, stop, step = pages.angle_axis(turned)
    x_label = "bearing the wind comes from" if case.by_bearing else "direction the stream goes to"
    return pages.Chart(
        x_label=f"{x_label} (degrees)" if last else "",
        y_label=f"{table.names[place]}: {_label(case, reading)}",
        lines=(pages.Line(x, y, low=low, high=high),),
        x_limits=(start, stop),
        y_limits=pages.value_limits(shown, 0.0, 2 * reading.limit if reading.limit else 0.5),
        x_step=step,
        x_words=pages.angle_words,
        spans=tuple(spans),
        limit=reading.limit,
    )


def _budgets(case, table, budget):
    """Where the uncertainty of corrected readings comes from."""
    if budget is None:
        return pages.paragraphs(
            "The case states no tolerances: a table [uncertainty] in it, with those of the booms, "
            "the alignment and the calibration, gives the uncertainty of the corrected speed and "
            "direction, and its budget."
        )
    found = [
        (place, reading, _expanded(budget, place, reading))
        for place in range(len(table.names))
        for reading in readings(case, table, place)
    ]
    found = [entry for entry in found if entry[2] is not None]
    if not found:
        return pages.paragraphs("No reading can be corrected here: there is no uncertainty.")
    rows = [_uncertainty_row(table, budget, *entry) for entry in found]
    text = pages.paragraphs(
        "Of the speed and direction once corrected by this survey, combined to first order as "
        "JCGM 100 (GUM) asks; the scatter of the record itself is not in it."
    )
    if case.unstated_tolerances:
        text += pages.paragraphs(
            f"Not stated by the case, and not counted: {', '.join(case.unstated_tolerances)}."
        )
    text += pages.table(
        f"Expanded uncertainty (k = 2, about 95 percent) over the trusted {_kind(case)}s.",
        ["Sensor", "Reading", "Least", "Median", "Greatest", "Greatest at",
         "Greatest part, by sector"],
        rows,
    )
    chosen = [entry for entry in found if entry[0] < MOST_BUDGETS]
    tables = [_budget(case, table, budget, *entry) for entry in chosen]
    if len(chosen) < len(found):
        tables.append(pages.paragraphs(
            f"The budgets of the first {MOST_BUDGETS} sensors are printed; ob.uncertainty has all."
        ))
    return text + "\n".join(tables)


def _uncertainty_row(table, budget, place, reading, expanded):
    dominant = budget.dominant(table.names[place], reading.name)
    dominant = np.where(np.isfinite(expanded), dominant, "")
    parts = [
        f"{source}: {_sectors(table, dominant == source)}"
        for source in dict.fromkeys(dominant[dominant != ""])
    ]
    return [
        table.names[place],
        f"{reading.name} ({reading.unit})",
        *(f"{figure(expanded):.2f}" for figure in (np.nanmin, np.nanmedian, np.nanmax)),
        f"{table.angles[np.nanargmax(expanded)]:g}",
        "; ".join(parts),
    ]


def _budget(case, table, budget, place, reading, expanded):
    """The budget of one reading at the prevailing wind, or where the uncertainty is greatest."""
    name, row = table.names[place], np.nanargmax(expanded)
    where = "where it is greatest"
    if case.prevailing is not None:
        near = np.abs((table.angles - case.prevailing[0] + 180.0) % 360.0 - 180.0).argmin()
        if np.isfinite(expanded[near]):
            row, where = near, "the prevailing one"
    lines = budget.budget(name, table.angles[row], reading.name)
    shown = [line for line in lines if line["share"] >= LEAST_SHARE]
    factor = 100.0 if reading.name == "speed" else 1.0
    rows = [
        [
            line["source"], line["sensor"], _input(case, line),
            f"{abs(factor * line['contribution']):.3f}", f"{100 * line['share']:.1f}",
        ]
        for line in shown
    ]
    caption = (
        f"Budget of the {reading.name} of {name} at {_kind(case)} {table.angles[row]:g}, {where}: "
        f"expanded uncertainty {expanded[row]:.2f} {reading.unit}."
    )
    if len(shown) < len(lines):
        caption += f" Sources below {100 * LEAST_SHARE:g} percent of the variance are not listed."
    heads = ["Source", "Of", "Standard uncertainty",
             f"Contribution ({reading.unit})", "Share of the variance (percent)"]
    return pages.table(caption, heads, rows, numbers=(3, 4))


def _input(case, line):
    """The standard uncertainty of an input in the unit of its own."""
    value, unit = line["standard_uncertainty"], line["unit"]
    if line["source"] in ("numerical error", "between the table's angles"):
        return "from the table"
    value, unit = (100 * value, "percent") if unit == "1" else (value, unit)
    unit = case.length_unit if unit == "length" else unit
    return f"{value:.3g} {unit} ({line['distribution']})"


def _rerun(case):
    name = Path(case.file).name
    text = pages.paragraphs(
        f"Save what follows as {name} and run: offbody survey {name} --out FOLDER "
        f"(offbody {__version__}). Files of points that it names are not repeated here."
    )
    return text + pages.verbatim(case.text)
