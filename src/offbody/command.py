"""The command line: a case file in, a folder out; a record in, a corrected record out."""

import argparse
import contextlib
import os
import sys
import warnings
from importlib import resources
from pathlib import Path

import numpy as np
from tqdm import tqdm

import offbody as ob
from offbody import charts, mount_reports, records, reports
from offbody.cases import read_case
from offbody.errors import AccuracyWarning, InputError
from offbody.mount_pages import mounts_page
from offbody.survey_pages import survey_page

DONE, REFUSED, INTERRUPTED = 0, 2, 130
NODES_AT_ONCE = 20_000  # of a dense grid, between two moves of the progress bar

EPILOG = """\
Start from the case that `offbody demo` writes; `python -m pydoc offbody.cases` lists every key.

exit status: 0 done; 2 the case, the command or the output folder cannot be used (one line on
standard error says why, and nothing was written); 130 interrupted (nothing was written)."""


def main(arguments=None):
    """The exit status of one run of the command.

    Parameters
    ----------
    arguments : sequence of str, optional
        The words after the command's name; those of the process if left out.

    Returns
    -------
    int
        0 done; 2 refused, with one line on standard error; 130 interrupted.
    """
    options = _parser().parse_args(arguments)
    try:
        _print(options.verb(options))
        return DONE
    except InputError as error:
        return _complain(error, REFUSED)
    except OSError as error:
        return _complain(f"cannot write {options.out}: {error.strerror or error}", REFUSED)
    except MemoryError:
        return _complain("not enough memory; ask for a coarser grid or fewer winds", REFUSED)
    except KeyboardInterrupt:
        return _complain("interrupted; nothing was written", INTERRUPTED)


def _complain(complaint, status):
    print("offbody: " + " ".join(str(complaint).split()), file=sys.stderr)
    return status


def _print(text):
    """Print what the terminal can show of a text; a reader who has left early is no error."""
    encoding = sys.stdout.encoding or "utf-8"
    try:
        print(text.encode(encoding, "replace").decode(encoding), end="", flush=True)
    except BrokenPipeError:
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())


def _parser():
    parser = argparse.ArgumentParser(
        prog="offbody",
        description="What a body standing in a stream does to the sensors beside it.",
        epilog=EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    parser.add_argument("--version", action="version", version=f"offbody {ob.__version__}")
    verbs = parser.add_subparsers(title="verbs", metavar="VERB", required=True)
    _add_verb(verbs, "survey", _survey, "what every sensor of a case reads in every wind")
    _add_verb(verbs, "field", _field, "the velocity on a dense grid round the bodies of a case")
    _add_verb(verbs, "mounts", _mounts, "the best places for sensors, as a case asks for them")
    demo = _add_verb(verbs, "demo", _demo, "the survey of a built-in case, which it writes out too")
    demo.add_argument(
        "name", metavar="NAME", nargs="?", choices=tuple(reports.BUILT_IN_CASES), default="mast",
        help="mast (if left out): a tubular mast with booms; lattice: a triangular lattice tower; "
             "duct: a strut-mounted probe in a duct",
    )
    demo.set_defaults(out="offbody-demo")
    _add_correct(verbs)
    return parser


def _add_verb(verbs, name, run, purpose):
    verb = verbs.add_parser(
        name, help=purpose, description=purpose[0].upper() + purpose[1:] + ".", epilog=EPILOG,
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    built_in = name == "demo"
    if not built_in:
        verb.add_argument("case", metavar="CASE.toml", help="the case file")
    verb.add_argument(
        "--out", metavar="FOLDER", required=not built_in,
        help="the folder to write, whole or not at all"
             + ("; offbody-demo if left out" if built_in else ""),
    )
    verb.add_argument("--overwrite", action="store_true", help="replace the folder if it exists")
    verb.set_defaults(verb=run)
    return verb


def _add_correct(verbs):
    purpose = "the undisturbed speed and direction of a record, by a survey"
    verb = verbs.add_parser(
        "correct", help=purpose, description=purpose[0].upper() + purpose[1:] + ".",
        epilog="What is left out is as the [record] of the survey's case says; "
               "`python -m pydoc offbody.records` lists its keys.\n\n" + EPILOG.split("\n\n")[1],
        formatter_class=argparse.RawDescriptionHelpFormatter,
    )
    verb.add_argument("record", metavar="RECORD.csv", help="one header line, one row per line")
    verb.add_argument(
        "--with", metavar="SURVEY.json", required=True, dest="survey",
        help="what `offbody survey` wrote, or a saved correction",
    )
    verb.add_argument("--out", metavar="FILE", required=True,
                      help="the file to write, whole or not at all")
    verb.add_argument("--overwrite", action="store_true", help="replace the file if it exists")
    for quantity in ("speed", "bearing", "direction"):
        verb.add_argument(f"--{quantity}", metavar="SENSOR=COLUMN", action="append",
                          help=f"the column of a sensor's {quantity}; may be repeated")
    verb.add_argument("--time", metavar="COLUMN", help="a column to carry over as it stands")
    verb.add_argument("--spread", metavar="COLUMN",
                      help="the column of the direction's standard deviation, degrees")
    verb.add_argument("--missing", metavar="CELL", action="append",
                      help="a cell that means missing, such as -999; may be repeated")
    verb.add_argument("--separator", metavar="C", help="the character between cells")
    verb.add_argument("--decimal", metavar="C", help="the mark before the decimals, . or ,")
    verb.add_argument("--north-offset", metavar="[SENSOR=]DEGREES", action="append",
                      help="to add to recorded directions; may be repeated")
    verb.add_argument("--calm-below", metavar="SPEED", help="a lower speed is a calm")
    verb.add_argument("--calms", metavar="keep|blank", help="what a calm's speed shall be")
    verb.add_argument("--choose", metavar="best|first|mean", help="among several sensors")
    verb.set_defaults(verb=_correct)


def _correct(options):
    """Correct a record into a file; returns what to print."""
    columns = {
        quantity: dict(_named(f"--{quantity}", word, "SENSOR=COLUMN") for word in words)
        for quantity in ("speed", "bearing", "direction")
        if (words := getattr(options, quantity))
    }
    for key in ("time", "spread", "missing", "separator", "decimal"):
        columns |= {key: value} if (value := getattr(options, key)) is not None else {}
    settings = {
        key: value for key in ("calms", "choose") if (value := getattr(options, key)) is not None
    }
    if options.calm_below is not None:
        settings["calm_below"] = _number("calm_below", options.calm_below)
    if options.north_offset is not None:
        settings["north_offset"] = _north_offset(options.north_offset)
    correction, columns = records.prepare(options.survey, columns, settings)
    size = os.path.getsize(options.record) if os.path.isfile(options.record) else None
    with tqdm(total=size, desc="correcting", unit="B", unit_scale=True, file=sys.stderr,
              disable=None, leave=False) as bar:
        tally = records.correct_record(
            options.record, correction, columns, options.out, options.overwrite, bar.update
        )
    page = tally.summary(options.out, correction.by_bearing)
    return f"{page}written to {Path(options.out)}\n"


def _named(flag, word, expected):
    name, mark, value = word.partition("=")
    if not mark or not name or not value:
        raise InputError(f"{flag} {word}: expected {expected}")
    return name, value


def _north_offset(words):
    """One number for all sensors, or one for each that is named."""
    if len(words) == 1 and "=" not in words[0]:
        return _number("north_offset", words[0])
    named = (_named("--north-offset", word, "SENSOR=DEGREES") for word in words)
    return {sensor: _number("north_offset", value) for sensor, value in named}


def _number(name, word):
    try:
        return float(word)
    except ValueError:
        raise InputError(f"{name} must be a number, got {word!r}") from None


def _survey(options):
    return _write_survey(read_case(options.case), options)


def _demo(options):
    source = reports.BUILT_IN_CASES[options.name]
    with resources.as_file(source) as path:
        case = read_case(path)
    return _write_survey(case, options, source=source)


def _write_survey(case, options, source=None):
    """Survey a case into a folder; returns what to print."""
    with reports.whole_folder(options.out, options.overwrite) as folder, _bar(6, "solving") as bar:
        with _cautions() as cautions:
            model = case.solve()
            _advance(bar, "surveying")
            table = case.survey(model)
            page = reports.summary(case, table, cautions)
            budget = case.uncertainty(table)
        _advance(bar, "writing tables")
        (folder / "summary.txt").write_text(page, encoding="utf-8")
        reports.write_csv(folder / "survey.csv", case, table)
        reports.write_json(folder / "survey.json", case, table)
        if source is not None:
            (folder / "case.toml").write_bytes(source.read_bytes())
        maps = []
        no_pictures = charts.missing_library() or ""
        if not no_pictures:
            _advance(bar, "drawing sensors")
            charts.draw_sensors(folder, case, table)
            _advance(bar, "drawing maps")
            x, y = (charts.thin(lines) for lines in case.grid_lines(model))
            for angle, picture in _pictures("map", _angles_to_show(case, table)):
                velocity = _velocity(case, model, x, y, angle)
                _draw_map(folder / picture, case, model, x, y, velocity, angle)
                maps.append((angle, (folder / picture).read_bytes()))
        _advance(bar, "writing the report")
        report = survey_page(case, table, budget, maps, no_pictures, cautions)
        (folder / "report.html").write_text(report, encoding="utf-8")
        files = sorted(entry.name for entry in folder.iterdir())
    return f"{page}\n{_closing(options.out, files, no_pictures)}"


def _field(options):
    """Write the dense grid of a case into a folder; returns what to print."""
    case = read_case(options.case)
    with reports.whole_folder(options.out, options.overwrite) as folder:
        with _cautions() as cautions:
            model = case.solve()
            angles = _angles_to_show(case, case.survey(model) if case.sensors else None)
            x, y = case.grid_lines(model, winds=len(angles))
            velocity = np.stack([_velocity(case, model, x, y, angle) for angle in angles])
        reports.write_field(folder / "field.npz", case, x, y, case.directions(angles), velocity)
        no_pictures = charts.missing_library()
        if not no_pictures:
            for (angle, picture), each in zip(_pictures("field", angles), velocity, strict=True):
                _draw_map(folder / picture, case, model, x, y, each, angle)
        files = sorted(entry.name for entry in folder.iterdir())
    kind = "bearing" if case.by_bearing else "direction"
    winds = ", ".join(f"{angle:g}" for angle in angles)
    lines = [
        f"{case.title}: velocity on {len(x)} by {len(y)} nodes, {kind} {winds}",
        f"x {x[0]:g} to {x[-1]:g}, y {y[0]:g} to {y[-1]:g} {case.length_unit}",
        *(f"- {caution}" for caution in cautions),
    ]
    return "\n".join(lines) + "\n" + _closing(options.out, files, no_pictures)


def _mounts(options):
    """Search for the mounts that a case asks for into a folder; returns what to print."""
    case = read_case(options.case)
    with reports.whole_folder(options.out, options.overwrite) as folder, _bar(3, "solving") as bar:
        with _cautions() as cautions:
            model = case.solve()
            _advance(bar, "searching")
            found = case.best_mounts(model)
            page = mount_reports.summary(case, found, cautions)
            report = mounts_page(case, found, found.survey(), cautions)
        _advance(bar, "writing")
        (folder / "summary.txt").write_text(page, encoding="utf-8")
        mount_reports.write_csv(folder / "mounts.csv", case, found)
        mount_reports.write_json(folder / "mounts.json", case, found)
        (folder / "report.html").write_text(report, encoding="utf-8")
        no_pictures = charts.missing_library() if found.curve else None
        if found.curve and not no_pictures:
            charts.draw_trade_off(folder / "trade-off.png", case, found)
        files = sorted(entry.name for entry in folder.iterdir())
    return f"{page}\n{_closing(options.out, files, no_pictures)}"


def _bar(total, words):
    """A progress bar on standard error, silent where that is no terminal."""
    return tqdm(total=total, desc=words, file=sys.stderr, disable=None, leave=False)


def _advance(bar, words):
    bar.set_description(words, refresh=False)
    bar.update()


@contextlib.contextmanager
def _cautions():
    """A list that fills with what the library warns of, in place of lines on standard error."""
    cautions = []
    with warnings.catch_warnings():
        warnings.simplefilter("always", AccuracyWarning)
        show = warnings.showwarning

        def keep(message, category, *place):
            if not issubclass(category, AccuracyWarning):
                show(message, category, *place)
            elif str(message) not in cautions:
                cautions.append(str(message))

        warnings.showwarning = keep
        yield cautions


def _angles_to_show(case, table):
    """The winds of the pictures: those asked for, else the one that some sensor reads worst."""
    for asked in (case.region.angles, case.prevailing):
        if asked is not None:
            return asked
    known = [] if table is None else [found for found in table.worst() if np.isfinite(found[1])]
    if not known:
        return case.angles[:1]
    angle, _ = max(known, key=lambda found: abs(found[1] - 1.0))
    return np.array([angle])


def _pictures(stem, angles):
    """Each wind with the name of its picture."""
    for angle in angles:
        yield float(angle), f"{stem}.png" if len(angles) == 1 else f"{stem}-{angle:g}.png"


def _velocity(case, model, x, y, angle):
    """Velocity on the tensor grid for one wind, NaN where there is no flow."""
    direction = float(case.directions(angle))
    rows = max(1, NODES_AT_ONCE // len(x))
    parts = []
    with _bar(len(y), f"grid for {angle:g}") as bar:
        for first in range(0, len(y), rows):
            parts.append(model.grid(x, y[first : first + rows], direction))
            bar.update(len(parts[-1]))
    return np.concatenate(parts)


def _draw_map(path, case, model, x, y, velocity, angle):
    """Draw one wind, with a word across it where nothing in the picture is trusted."""
    direction = float(case.directions(angle))
    xmin, xmax, ymin, ymax = model.extent
    # Far upstream of all bodies no lee reaches: what is not trusted there is not trusted anywhere.
    reach = 10.0 * (xmax - xmin + ymax - ymin)
    place = complex(xmin + xmax, ymin + ymax) / 2 - reach * np.exp(1j * np.radians(direction))
    probe = ob.survey(model, ob.PointSensor(place.real, place.imag), directions=[direction])
    caution = case.in_its_names(probe.reason[0, 0])
    charts.draw_map(path, case, model, x, y, velocity, angle, caution)


def _closing(out, files, no_pictures):
    lines = [f"written to {Path(out)}{os.sep}: {', '.join(files)}"]
    if no_pictures:
        lines.append(no_pictures)
    return "\n".join(lines) + "\n"
