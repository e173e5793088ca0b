"""What is kept of a search for mounts: a table for programs, a page for people."""

import csv
import json
import math
import textwrap
from pathlib import Path

import numpy as np

from offbody._version import __version__
from offbody.reports import CAUTIONS, PAGE_WIDTH, opening

# Of a choice's row, by its first word or words: the unit, and what it means.
COLUMNS = {
    "choice": ("", "The best is 1."),
    "length": ("length", "Of every boom, from its foot."),
    "angle": ("degrees", "Where each boom points, as the case says its angles."),
    "x": ("length", "Of each mount or port."),
    "y": ("length", "Of each mount or port."),
    "arc_fraction": ("1", "Of each port, counter-clockwise from the outline's first point."),
    "worst_error": ("1", "Greatest error of the speed ratio; empty where a wind is not served."),
    "worst_angle": ("degrees", "The wind where it is, among those with a trusted sensor."),
    "mean_error": ("1", "Over the climate; an untrusted wind counts as 1."),
    "share": ("1", "Of the climate, trusted and within the limit."),
    "margin": ("1", "The limit less the worst error."),
    "wall_distance": ("length", "Between the mounts and the nearest wall."),
    "spacing": ("length", "Between the two mounts that are nearest to each other."),
    "error_per_length": ("1/length", "How fast an error changes as the boom grows."),
    "error_per_degree": ("1/degree", "How fast an error changes as the boom turns."),
    "worst_pressure": ("1", "Greatest size of the pressure coefficient, or the difference of two."),
    "slope": ("1/degree", "Of that, against the direction of the stream."),
    "saturates": ("degrees", "Between these winds the difference of a pair grows all the way."),
    "because": ("", "What ends it there."),
}


def _column(name):
    return max((key for key in COLUMNS if name.startswith(key)), key=len)


def write_csv(path, case, found):
    """Write the choices of a search, one row each, the units in the names."""
    endings = {"length": f"_{case.length_unit}", "degrees": "_degrees"}
    rows = [_finite(row) for row in found.rows()]
    with open(path, "w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(
            _worded(name, case) + endings.get(COLUMNS[_column(name)][0], "") for name in rows[0]
        )
        writer.writerows(["" if value is None else value for value in row.values()] for row in rows)


def write_json(path, case, found):
    """Write the choices, the trade-off, the proof of the search, and the case it was made from."""
    rows = [_finite(row) for row in found.rows()]
    search = found.search
    document = {
        "offbody": __version__,
        "case_file": Path(case.file).name,
        "case": case.entries,
        "angles": "bearings" if case.by_bearing else "directions",
        "length_unit": case.length_unit,
        "limit": found.limit,
        "columns": {
            _worded(name, case): dict(zip(("unit", "meaning"), (
                COLUMNS[_column(name)][0].replace("length", case.length_unit),
                COLUMNS[_column(name)][1],
            ), strict=True))
            for name in rows[0]
        },
        "choices": [{_worded(name, case): value for name, value in row.items()} for row in rows],
        "trade_off": found.curve and {
            name: [_plain(value) for value in values.tolist()]
            for name, values in found.curve.items()
        },
        "search": {
            name: _plain(getattr(search, name))
            for name in ("quantity", "places", "sets", "step", "scan_best", "refined", "bound")
        },
        "notes": [case.in_its_names(note) for note in found.notes],
    }
    text = json.dumps(document, ensure_ascii=False, allow_nan=False, indent=2)
    Path(path).write_text(text + "\n", encoding="utf-8")


def _worded(name, case):
    """The name of a column, in which angles bear the case's own word."""
    word = "bearing" if case.by_bearing else "direction"
    name = name.replace("per_length", f"per_{case.length_unit}")
    return name.replace("angle", word) if name.startswith(("angle", "worst_angle")) else name


def _plain(value):
    return None if isinstance(value, float) and not math.isfinite(value) else value


def _finite(row):
    return {name: _plain(value) for name, value in row.items()}


def summary(case, found, cautions=()):
    """The page that a person reads first.

    Parameters
    ----------
    case : Case
    found : Mounts
    cautions : iterable of str
        What the library warned of on the way.

    Returns
    -------
    str
    """
    lines = [case.title, "=" * len(case.title), *opening(case, found), ""]
    lines += ["MOUNTS" if hasattr(found.best, "share") else "PORTS"]
    for number, choice in enumerate(found.choices, start=1):
        words = _mount_words if hasattr(choice, "share") else _port_words
        first, *rest = words(case, found, choice)
        lines += ["", f"  {number}  {first}"]
        for line in rest:
            lines += textwrap.wrap(
                line, PAGE_WIDTH, initial_indent="     ", subsequent_indent="       "
            )
    lines += ["", "HOW SURE THE SEARCH IS"]
    lines += textwrap.wrap(
        _proof(case, found.search), PAGE_WIDTH, initial_indent="  ", subsequent_indent="  "
    )
    lines += ["", "READ THIS BEFORE USE"]
    for note in (*map(case.in_its_names, found.notes), *cautions, *CAUTIONS):
        lines += textwrap.wrap(note, PAGE_WIDTH, initial_indent="- ", subsequent_indent="  ")
    return "\n".join(lines) + "\n"


def _places(case, places):
    return ", ".join(f"({x:.4g}, {y:.4g}) {case.length_unit}" for x, y in places)


def _mount_words(case, found, mount):
    unit = case.length_unit
    if mount.length is None:
        yield f"at {_places(case, mount.places)}"
    else:
        kind = "bearing" if case.by_bearing else "direction"
        booms = "boom" if len(mount.angles) == 1 else "booms"
        pointing = ", ".join(f"{angle:.1f}" for angle in mount.angles)
        yield f"{booms} of {mount.length:.4g} {unit}, {kind} {pointing}"
        yield f"sensors at {_places(case, mount.places)}"
    if np.isfinite(mount.worst_error):
        yield (
            f"worst error {100 * mount.worst_error:.3g} percent of the speed, at "
            f"{mount.worst_angle:g}; margin to the limit {round(100 * mount.margin, 3) + 0.0:g}"
        )
    yield (
        f"{100 * mount.share:.1f} percent of the wind within {100 * found.limit:g} percent and "
        f"trusted; mean error {100 * mount.mean_error:.3g} percent"
    )
    room = f"{mount.wall_distance:.4g} {unit} off the nearest wall"
    if np.isfinite(mount.spacing):
        room += f", {mount.spacing:.4g} {unit} between mounts"
    yield room
    if np.isfinite(mount.error_per_length):
        turn = f" and {100 * mount.error_per_degree:.2g} per degree of the boom"
        yield (
            f"an error changes by up to {100 * mount.error_per_length:.2g} percent per {unit}"
            + (turn if np.isfinite(mount.error_per_degree) else "")
        )


def _port_words(case, found, port):
    fractions = ", ".join(f"{fraction:.4f}" for fraction in port.arc_fractions)
    yield f"arc fraction {fractions}, at {_places(case, port.places)}"
    if len(port.arc_fractions) == 1:
        yield f"pressure coefficient within {port.worst_pressure:.3g}"
        if np.isfinite(port.slope):
            yield f"it changes by up to {abs(port.slope):.3g} per degree of the stream"
        return
    yield f"their difference changes by {abs(port.slope):.3g} or more per degree of the stream"
    low, high = port.saturates
    yield f"it saturates at {low:.1f} ({port.because[0]}) and at {high:.1f} ({port.because[1]})"


def _proof(case, search):
    scale, unit = {
        "length": (1.0, f" {case.length_unit}"), "share": (100.0, " percent"),
        "worst error": (100.0, " percent"), "sensitivity": (1.0, " per degree"),
    }.get(search.quantity, (1.0, ""))
    best, refined, bound = (
        f"{scale * value:.4g}{unit}" for value in (search.scan_best, search.refined, search.bound)
    )
    return (
        f"{search.places} places and {search.sets} sets of them were looked at. {search.quantity}: "
        f"the scan's best {best}, refined {refined}; by the slopes at the places looked at, "
        f"nothing beyond {bound} is to be found between them."
    )
