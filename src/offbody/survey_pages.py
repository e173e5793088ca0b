"""The page of a survey, to keep and to print: the answer first, then what it rests on."""

from pathlib import Path

import numpy as np

from offbody import pages
from offbody._version import __version__
from offbody.reports import (
    BOOM_LIMIT,
    CAUTIONS,
    DIRECTION_LIMIT,
    LIMIT,
    body_line,
    bracing_lines,
    is_within,
    opening,
    place_of,
    range_in_words,
    readings,
    sectors_in_words,
    worst_in_words,
)
from offbody.surroundings import Row
from offbody.surveys import WIDEST_STEP
from offbody.surveys import _runs as runs

MOST_RINGS = 8  # sensors round the plan
MOST_BUDGETS = 6  # sensors whose budget is printed line by line
LEAST_SHARE = 0.001  # of the variance, for a line of a budget


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
    return pages.page(case.title, sections, __version__, opening(case, table))


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
        f"Limits: {100 * LIMIT:g} percent of the speed, {100 * BOOM_LIMIT:g} by a boom alone (as "
        f"IEC 61400-12-1 has them), {DIRECTION_LIMIT:g} degree of direction. Expected: the mean "
        "error and the root of its mean square, over the trusted angles, all alike"
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
    good = np.any([is_within(reading, table.trust[:, place]) for place, reading in speeds], axis=0)
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
    if not good.any():
        return f"At none of {good.size} {_kind(case)}s"
    left_out = sectors_in_words(table, ~good)
    return f"At {good.sum()} of {good.size} {_kind(case)}s (not {left_out})"


def _answer_row(table, budget, place, reading):
    trust = table.trust[:, place]
    return [
        table.names[place],
        reading.name,
        sectors_in_words(table, is_within(reading, trust)) if reading.limit else "no limit",
        worst_in_words(table, reading, trust) if reading.unit else range_in_words(reading, trust),
        _expected(reading, trust, _expanded(budget, place, reading)),
    ]


def _exclusions(case, table, place):
    trust, doubtful = table.trust[:, place], table.trust[:, place] & table.doubtful[:, place]
    left_out = [
        f"{sectors_in_words(table, table.reason[:, place] == reason)}: {case.in_its_names(reason)}"
        for reason in dict.fromkeys(table.reason[~trust, place])
    ]
    edges = sectors_in_words(table, doubtful)
    return [
        table.names[place],
        "; ".join(left_out) or "nothing",
        f"{edges}: at the edge of a lee" if doubtful.any() else "nothing",
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
    ) + pages.bullets([*map(body_line, case.bodies), *bracing_lines(case)])


def _marker(table, place):
    sensor = table.sensors[place]
    paths = getattr(sensor, "paths", [sensor] if sensor.kind == "path" else [])
    return pages.Marker(
        place_of(sensor, table.model),
        str(place + 1),
        tuple(np.array([path.start, path.end]) for path in paths),
        getattr(sensor, "radius", 0.0),
    )


def _ring(case, table, place):
    """Sectors of the places from which a stream comes, by what the sensor is worth in it."""
    trust, doubtful = table.trust[:, place], table.doubtful[:, place]
    limits = [
        is_within(reading, trust)
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
            f"Worst: {worst_in_words(table, reading, trust)}.",
        )
        for reading, band in zip(read, expanded, strict=True)
    ]
    caption = f"{table.names[place]}. Worst: " + "; ".join(
        f"{reading.name} {worst_in_words(table, reading, trust)}" for reading in read
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
    name = {"speed": "speed error", "by boom": "speed error by the boom alone"}.get(
        reading.name, reading.name
    )
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
        f"{source}: {sectors_in_words(table, dominant == source)}"
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
