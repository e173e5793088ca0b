"""The page of a search for mounts, to keep and to print: where to mount, then what it rests on."""

from pathlib import Path

import numpy as np

from offbody import pages
from offbody._version import __version__
from offbody.mount_reports import _mount_words as mount_words
from offbody.mount_reports import _places as places_in_words
from offbody.mount_reports import _port_words as port_words
from offbody.mount_reports import _proof as proof
from offbody.reports import CAUTIONS, body_line, bracing_lines, opening, sectors_in_words
from offbody.survey_pages import MOST_RINGS
from offbody.survey_pages import _kind as kind_of_angle
from offbody.survey_pages import _marker as marker_of
from offbody.survey_pages import _widened as widened
from offbody.surveys import WIDEST_STEP

SLACK = 1 + 1e-5  # a shortest boom rests on the limit, to the search's own rounding
MOST_LIMITS = 5.0  # the axis of a trade-off ends here, in limits: short booms read far beyond


def mounts_page(case, found, table, cautions=()):
    """The HTML page of a search for mounts.

    Parameters
    ----------
    case : Case
    found : Mounts
    table : Survey
        Of the best choice, as ``found.survey()`` returns it.
    cautions : iterable of str
        What the library warned of on the way.

    Returns
    -------
    str
    """
    sections = [
        ("Answer", _answer(case, found, table)),
        ("Plan", _plan(case, found, table)),
        ("By angle", _by_angle(case, found)),
        *([("Trade-off", _trade_off(case, found))] if found.curve else ()),
        ("Choices", _choices(case, found)),
        ("How sure the search is", pages.paragraphs(proof(case, found.search))),
        ("Limits and cautions", pages.bullets(
            (*map(case.in_its_names, found.notes), *cautions, *CAUTIONS)
        )),
        ("To run it again", _rerun(case)),
    ]
    return pages.page(case.title, sections, __version__, opening(case, found))


def _is_mount(choice):
    return hasattr(choice, "share")


def _tags(found, table):
    """A letter for each mount of the best choice, and a number where it carries more than one."""
    carried = len(table.sensors) // len(found.best.places)
    return [
        "ABC"[place // carried] + (str(place % carried + 1) if carried > 1 else "")
        for place in range(len(table.sensors))
    ]


# --- the answer -----------------------------------------------------------------------------------


def _answer(case, found, table):
    """Where to mount, how good it is, and which angles to leave out."""
    words = mount_words if _is_mount(found.best) else port_words
    first, *rest = (f"{line[0].upper()}{line[1:]}." for line in words(case, found, found.best))
    if _is_mount(found.best):
        first += f" {_errors_in_words(case, found)}"
        rest += _left_out(case, found)
    rows = [
        [tag, name, "; ".join(
            f"{sectors_in_words(table, table.reason[:, place] == reason)}: "
            f"{case.in_its_names(reason)}"
            for reason in dict.fromkeys(table.reason[~table.trust[:, place], place])
        ) or "nothing"]
        for place, (tag, name) in enumerate(zip(_tags(found, table), table.names, strict=True))
    ]
    return "\n".join((
        pages.paragraphs(first, kind="lead"),
        pages.bullets(rest),
        pages.table(
            f"What to leave out of each sensor, by {kind_of_angle(case)} in degrees.",
            ["Mount", "Sensor", "Leave out"], rows,
        ),
    ))


def _errors_in_words(case, found):
    """The expected and the worst error over the angles that the best choice serves."""
    error, kind = found.best.error, kind_of_angle(case)
    served = np.isfinite(error)
    if not served.any():
        return f"No {kind} is served by a trusted sensor."
    mean = np.average(error[served], weights=found.weights[served])
    where = f"every {kind}" if served.all() else f"the {kind}s served"
    return (
        f"Over {where}, expect an error of {100 * mean:.2g} percent of the speed in the mean "
        f"and {100 * error[served].max():.3g} at worst."
    )


def _left_out(case, found):
    """Where the best choice passes its limit, and which angles it does not serve."""
    error, kind = found.best.error, kind_of_angle(case)
    served = np.isfinite(error)
    beyond = served & ~_within(found)
    if beyond.any():
        yield f"Beyond the limit at {kind} {sectors_in_words(found, beyond)}."
    if not served.all():
        yield f"Exclude {kind} {sectors_in_words(found, ~served)}: no sensor is trusted there."
        yield f"In the mean error above, a {kind} without a trusted sensor counts as 100 percent."
    else:
        yield f"No {kind} to exclude: a sensor is trusted in each."


def _within(found):
    """(n,) where the best choice is within the limit, on which a shortest boom rests."""
    return found.best.error <= found.limit * SLACK


# --- the drawings ---------------------------------------------------------------------------------


def _plan(case, found, table):
    """What stands where: the best choice with its booms, the others, and where none may stand."""
    tags, best = _tags(found, table), found.best
    ringed = () if case.surroundings.walls else range(min(len(tags), MOST_RINGS))
    keep_out = [outline.points(400) for outline in case.mounts.get("keep_out", ())]
    booms = [
        np.array([found.where.foot, place]) for place in best.places
    ] if getattr(best, "length", None) is not None else []
    markers = [
        pages.Marker(here.place, tag, here.paths, here.radius)
        for place, tag in enumerate(tags)
        for here in [marker_of(table, place)]
    ]
    markers += [
        pages.Marker(place, str(number))
        for number, choice in enumerate(found.choices[1:], start=2)
        for place in choice.places
    ]
    drawing = pages.Plan(
        bodies=[body.outline.points(400) for body in case.bodies],
        booms=[
            *booms, *(np.concatenate([ring, ring[:1]]) for ring in keep_out),
            *(np.array([face.start, face.end]) for face in case.bracings.values()),
        ],
        markers=markers,
        rings=[pages.Ring(tags[place], _ring(case, found, table, place)) for place in ringed],
        walls=case.surroundings.walls,
        length_unit=case.length_unit,
        by_bearing=case.by_bearing,
    )
    caption = f"To scale. Best choice: {', '.join(dict.fromkeys(tags))}."
    if len(found.choices) > 1:
        caption += " The other choices bear their numbers in the table."
    if keep_out:
        caption += " No sensor may stand within the lines that close upon themselves."
    if ringed:
        comes = "wind" if case.by_bearing else "stream"
        caption += f" A ring shows what its sensor is worth when the {comes} comes from there."
    key = [
        ("within", "trusted, within the limit"), ("beyond", "trusted, beyond it or without one"),
        ("doubtful", "trusted, but doubtful"), ("excluded", "leave out"),
    ]
    described = f"Plan with the best choice at {places_in_words(case, best.places)}."
    return pages.figure(
        pages.plan(drawing, described), caption, key if ringed else (), tall=True
    ) + pages.bullets([*map(body_line, case.bodies), *bracing_lines(case)])


def _ring(case, found, table, place):
    """Sectors of the places from which a stream comes, by what a sensor is worth in it."""
    trust, doubtful = table.trust[:, place], table.doubtful[:, place]
    sure = trust & ~doubtful
    within = np.abs(table.speed_ratio[:, place] - 1) <= found.limit * SLACK
    for fill, here in (
        ("beyond", sure & ~within), ("within", sure & within),
        ("doubtful", trust & doubtful), ("excluded", ~trust),
    ):
        for start, stop in widened(table.angles, here):
            ends = (90.0 - stop, 90.0 - start) if case.by_bearing else (start + 180, stop + 180)
            yield *ends, fill


def _by_angle(case, found):
    """The error of the best choice, or its pressure, against the angle."""
    best = found.best
    mount = _is_mount(best)
    values = 100 * best.error if mount else best.pressure
    values = np.where(np.isfinite(values), values, np.nan)
    order, turned = pages.laid_out(found.angles)
    gaps = np.flatnonzero(np.diff(turned) > WIDEST_STEP) + 1
    start, stop, step = pages.angle_axis(turned)
    label = "bearing the wind comes from" if case.by_bearing else "direction the stream goes to"
    pair = len(best.places) > 1
    what = (
        "error of the mount that reads best (percent of the speed)" if mount
        else "pressure coefficient, the first port's less the second's" if pair
        else "pressure coefficient"
    )
    limit = 100 * found.limit if mount else None if pair else found.limit
    low, high = pages.value_limits(values, 0.0, 1.5 * limit if limit else 0.1)
    drawing = pages.Chart(
        x_label=f"{label} (degrees)",
        y_label=what,
        lines=(pages.Line(*(np.insert(each, gaps, np.nan) for each in (turned, values[order]))),),
        x_limits=(start, stop),
        y_limits=(0.0, high) if mount else (low, high),
        x_step=step,
        x_words=pages.angle_words,
        spans=tuple(
            (first + shift, last + shift, "excluded")
            for first, last in widened(found.angles, np.isnan(values))
            for shift in (-360.0, 0.0, 360.0)  # an axis may run across north
        ),
        limit=limit,
    )
    key = [
        ("line", "best choice"), *([("limit", "within the limit")] if limit else ()),
        *([("excluded", "leave out")] if np.isnan(values).any() else ()),
    ]
    return pages.figure(
        pages.chart(drawing, f"{what}, against the {kind_of_angle(case)}."),
        f"Best choice: {what}, against the {kind_of_angle(case)}.", key,
    )


def _trade_off(case, found):
    """What a longer boom buys: less error, and more of the wind within the limit."""
    length, share = found.curve["length"], 100 * found.curve["share"]
    worst, limit = 100 * found.curve["worst_error"], 100 * found.limit
    worst = np.where(np.isfinite(worst), worst, np.nan)
    at, best = found.best.length, 100 * found.best.worst_error
    label = f"length of the boom{'s' * (len(found.best.angles) > 1)} ({case.length_unit})"
    wide = (0.0, 1.02 * float(length.max()))
    drawings, caption = [], "The share of the wind that is trusted and within the limit"
    if np.isfinite(worst).any():
        top = max(1.2 * np.nanmin(worst), min(1.05 * np.nanmax(worst), MOST_LIMITS * limit))
        drawings.append(pages.chart(
            pages.Chart(
                "", "least worst error (percent of the speed)", (pages.Line(length, worst),),
                wide, (0.0, max(top, 1.5 * limit)), limit=limit,
                points=((at, best, "best choice"),) if np.isfinite(best) else (),
            ),
            "Least worst error of any set of booms against their length.",
        ))
        caption = "The least worst error of any booms of one length (grey: within the limit), "
        caption += "and the share of the wind that is trusted and within it"
    else:
        caption += " (no set has a trusted sensor in every wind)"
    drawings.append(pages.chart(
        pages.Chart(
            label, "wind within the limit and trusted (percent)", (pages.Line(length, share),),
            wide, (0.0, 108.0), x_words="{:.4g}".format,
            points=((at, 100 * found.best.share, ""),),
        ),
        "Share of the wind within the limit against the length of the booms.",
    ))
    caption += ". Open circle: the best choice."
    return pages.figure("\n".join(drawings), caption)


# --- the tables -----------------------------------------------------------------------------------


def _choices(case, found):
    """The best choices side by side, with their margins."""
    if not _is_mount(found.best):
        lines = [port_words(case, found, choice) for choice in found.choices]
        rows = [
            [str(number), first, "; ".join(rest), f"{choice.margin:.3g}"]
            for number, ((first, *rest), choice) in enumerate(
                zip(lines, found.choices, strict=True), start=1)
        ]
        if len(found.best.places) > 1:  # a pair has no limit to keep a margin from
            rows = [row[:3] for row in rows]
        heads = ["Choice", "Ports", "What they read", "Margin"][:len(rows[0])]
        return pages.table("The best choices, the best first.", heads, rows, numbers=(3,))
    unit = case.length_unit
    heads = [
        "Choice", f"Booms ({unit}, {kind_of_angle(case)})" if found.best.length else "Mounts",
        "Worst error", f"At {kind_of_angle(case)}", "Margin", "Within", f"Wall ({unit})",
        f"Apart ({unit})", f"Per {unit}", "Per degree",
    ]
    rows = [
        [
            str(number), _where(case, choice), _figure(100 * choice.worst_error, 3),
            _figure(choice.worst_angle if np.isfinite(choice.worst_error) else np.nan),
            _figure(100 * choice.margin, 3),
            f"{100 * choice.share:.1f}", _figure(choice.wall_distance), _figure(choice.spacing),
            _figure(100 * choice.error_per_length, 2), _figure(100 * choice.error_per_degree, 2),
        ]
        for number, choice in enumerate(found.choices, start=1)
    ]
    # A column in which no choice has a figure says nothing.
    kept = [column for column in range(len(heads)) if any(row[column] != "none" for row in rows)]
    return pages.table(
        f"The best choices, the best first. Errors and margins to the limit of "
        f"{100 * found.limit:g} percent are in percent of the speed; within: percent of the wind, "
        "trusted and within the limit; wall: to the nearest; apart: the nearest two mounts; last, "
        f"how fast an error changes as the mount moves. None: no sensor is trusted in some "
        f"{kind_of_angle(case)}, or there is no such figure.",
        [heads[column] for column in kept], [[row[column] for column in kept] for row in rows],
        numbers=range(2, len(kept)),
    )


def _where(case, choice):
    if choice.length is None:
        return places_in_words(case, choice.places)
    return f"{choice.length:.4g} at {', '.join(f'{angle:.1f}' for angle in choice.angles)}"


def _figure(value, digits=4):
    if not np.isfinite(value):
        return "none"
    return f"{round(value, 6) + 0.0:.{digits}g}"  # no minus before a zero


def _rerun(case):
    name = Path(case.file).name
    text = pages.paragraphs(
        f"Save what follows as {name} and run: offbody mounts {name} --out FOLDER "
        f"(offbody {__version__}). Files of points that it names are not repeated here."
    )
    return text + pages.verbatim(case.text)
