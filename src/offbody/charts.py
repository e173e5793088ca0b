"""Pictures of a case. Matplotlib is imported only when one is drawn."""

import textwrap

import numpy as np
from scipy.ndimage import distance_transform_edt

from offbody.pages import FEW, angle_axis, angle_words, laid_out, value_limits
from offbody.reports import LIMIT, place_of
from offbody.separations import DOUBTFUL_HALF_ANGLE, DOUBTFUL_START, WAKE_HALF_ANGLE
from offbody.surroundings import holds

DOTS_PER_INCH = 150
SENSORS_PER_PICTURE = 8
MOST_LINES = 700  # of a grid, each way: about a line for every two dots

# Bounds of the colours: the white one is where the speed is within 1 percent.
LEVELS = (0, 0.5, 0.8, 0.9, 0.95, 0.98, 0.99, 1.01, 1.02, 1.05, 1.1, 1.2, 1.5, 2)
INK = "#222222"
BODY = "#4d4d4d"
SPEED = "#0072b2"  # blue and vermilion are told apart with every kind of colour vision
DIRECTION = "#d55e00"
SHADE = "#d9d9d9"
MARGIN = "#f0f0f0"  # doubtful, and dotted besides
BAND = "#b8e0cc"
LEE = "#f4f4f4e0"
WIDEST_SHADE = 10.0  # degrees about a wind that is not trusted


def missing_library():
    """Why no picture can be drawn, in one line, or None if it can."""
    try:
        import matplotlib  # noqa: F401
    except ImportError:
        return "no pictures: matplotlib is not installed; pip install 'offbody[plot]' brings it"
    return None


def thin(lines):
    """As many of the grid lines, both ends included, as a picture can show."""
    kept = np.linspace(0, len(lines) - 1, min(len(lines), MOST_LINES))
    return lines[np.round(kept).astype(int)]


def _figure(width, height):
    """An empty figure of its own, apart from any state that a caller's session holds."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), dpi=DOTS_PER_INCH, layout="constrained")
    FigureCanvasAgg(figure)
    return figure


# --- the map --------------------------------------------------------------------------------------


def draw_map(path, case, model, x, y, velocity, angle, caution=""):
    """Draw speed ratio, streamlines, bodies, booms and sensors for one wind.

    Parameters
    ----------
    path : path-like
        The picture to write.
    case : Case
    model : Model
    x, y : (nx,), (ny,) array
        Grid lines.
    velocity : (ny, nx, 2) array
        Over the undisturbed speed, NaN inside bodies.
    angle : float
        Bearing or direction, as the case has it.
    caution : str
        What to print across the head where the whole picture cannot be trusted.
    """
    direction = float(case.directions(angle))
    rows, columns = (np.flatnonzero(np.isin(lines, thin(lines))) for lines in (y, x))
    x, y, velocity = x[columns], y[rows], velocity[np.ix_(rows, columns)]
    spans = x[-1] - x[0], y[-1] - y[0]
    # Keep room for the key and the colour bar, and a picture that fits a page.
    figure = _figure(8.5, float(np.clip(6.3 * spans[1] / spans[0] + 1.6, 4.0, 11.0)))
    axes = figure.add_subplot()
    colours = _draw_speed(axes, x, y, np.hypot(velocity[..., 0], velocity[..., 1]))
    _draw_streamlines(axes, model, x, y, direction)
    _draw_lee(axes, model, y, spans, direction)
    _draw_bodies(axes, case, y)
    _draw_sensors(axes, case, model)
    _draw_stream(axes, case, angle, direction)
    _frame(axes, case, x, y, caution)
    beside = axes.inset_axes([1.03, 0.0, 0.035, 1.0])
    bar = figure.colorbar(colours, cax=beside, ticks=LEVELS, spacing="uniform")
    bar.ax.set_yticklabels([f"{level:g}" for level in LEVELS])
    bar.set_label("speed ratio: local over undisturbed speed (1)")
    # Cut to what is drawn: axes of equal scales leave a rest that no layout foresees.
    figure.savefig(path, bbox_inches="tight", pad_inches=0.15)


def _draw_speed(axes, x, y, ratio):
    from matplotlib import colormaps
    from matplotlib.colors import BoundaryNorm, ListedColormap

    half = len(LEVELS) // 2 - 1
    slow, fast = np.linspace(0.03, 0.42, half), np.linspace(0.58, 0.92, half)
    shades = colormaps["PuOr"]
    colours = ListedColormap([*shades(slow), (1.0, 1.0, 1.0, 1.0), *shades(fast)])
    colours = colours.with_extremes(over=shades(0.99))
    # Contours end a cell short of a gap: carried into the bodies, which are drawn over them.
    nearest = distance_transform_edt(
        np.isnan(ratio), return_distances=False, return_indices=True
    )
    return axes.contourf(
        x, y, ratio[tuple(nearest)], levels=LEVELS, cmap=colours,
        norm=BoundaryNorm(LEVELS, len(LEVELS) - 1), extend="max",
    )


def _draw_streamlines(axes, model, x, y, direction):
    """Lines that start evenly on a line across the stream, upstream of all that is shown."""
    middle = complex(x[0] + x[-1], y[0] + y[-1]) / 2
    reach = abs(complex(x[-1] - x[0], y[-1] - y[0])) / 2
    heading = np.exp(1j * np.radians(direction))
    starts = middle + heading * reach * (-1 + 1j * np.linspace(-1, 1, 37))
    starts = starts[holds(model.surroundings, starts)]
    starts = np.stack([starts.real, starts.imag], axis=-1)
    for line in model.streamlines(starts, direction, length=2.2 * reach):
        if len(line) > 1:
            axes.plot(*line.T, color=INK, linewidth=0.5, alpha=0.55, zorder=2)


def _draw_lee(axes, model, y, spans, direction):
    """Hatch the wakes, where the survey trusts nothing, and dot the doubtful margins round them."""
    from matplotlib.patches import Polygon

    far = 3.0 * sum(spans)
    leaving = [
        _leaving(model, body, direction)
        for body, outline in enumerate(model.outlines) if outline.edge is None
    ]
    leaving += [bracing.ends(np.array([direction]))[0] for bracing in model.bracings]
    for ends in leaving:
        ahead = DOUBTFUL_START * (ends[0] - ends[1]) @ _along(direction + 90.0)
        margin = _strip(ends, direction, DOUBTFUL_HALF_ANGLE, far, ahead)
        wake = _strip(ends, direction, WAKE_HALF_ANGLE, far)
        for shift in _shifts(model.surroundings, y):
            axes.add_patch(Polygon(
                margin + shift, facecolor="none", edgecolor="#808080", hatch="..", linewidth=0,
                zorder=2.5,
            ))
            axes.add_patch(Polygon(
                wake + shift, facecolor=LEE, edgecolor="#a0a0a0", hatch="////", linewidth=0,
                zorder=3,
            ))


def _leaving(model, body, direction):
    """Left and right of the stream, (2, 2), where a survey takes the flow to leave a body."""
    if model.wakes[body] is None:
        return model.widest(body, direction)
    return model.wake(body, direction).points


def _strip(ends, direction, half_angle, far, ahead=0.0):
    """Corners of the strip downstream of two points that widens on either side."""
    left, right = ends - ahead * _along(direction)
    return np.array([
        right, left, left + far * _along(direction + half_angle),
        right + far * _along(direction - half_angle),
    ])


def _along(angle):
    return np.array([np.cos(np.radians(angle)), np.sin(np.radians(angle))])


def _shifts(surroundings, y):
    """By how much what is drawn is shifted to stand for its copies in the picture too."""
    if surroundings.walls or not surroundings.period:
        return [np.zeros(2)]
    most = int((y[-1] - y[0]) / surroundings.period) + 1
    return [np.array([0.0, n * surroundings.period]) for n in range(-most, most + 1)]


def _draw_bodies(axes, case, y):
    for body in case.bodies:
        points = body.outline.points(2000)
        for shift in _shifts(case.surroundings, y):
            axes.fill(*(points + shift).T, color=BODY, linewidth=0.5, zorder=5)
    for face in case.bracings.values():
        for shift in _shifts(case.surroundings, y):
            line = np.array([face.start, face.end]) + shift
            axes.plot(*line.T, color=BODY, linewidth=1.0, linestyle=(0, (3, 2)), zorder=4)
    for boom in case.booms:
        if boom is not None:
            axes.plot(*boom.T, color=BODY, linewidth=1.4, zorder=4, solid_capstyle="round")
    for wall in case.surroundings.walls:
        axes.axhline(wall, color=BODY, linewidth=5, zorder=5)


def _draw_sensors(axes, case, model):
    """Sensors to scale, each with its number, and the key of the numbers below the picture."""
    from matplotlib.patches import Circle

    tags = {}
    for number, sensor in enumerate(case.sensors, start=1):
        for path in getattr(sensor, "paths", [sensor] if sensor.kind == "path" else []):
            axes.plot(*np.transpose([path.start, path.end]), color=INK, linewidth=2.0, zorder=6)
        pair = [sensor.cup, sensor.vane] if sensor.kind == "cup and vane" else [sensor]
        for disc in (part for part in pair if part.kind == "disc"):
            axes.add_patch(Circle(
                disc.centre, disc.radius, facecolor="none", edgecolor=INK, zorder=6
            ))
        for part in pair[1:]:
            axes.plot(*part.centre, "o", markersize=3, color="white", markeredgecolor=INK, zorder=7)
        place = tuple(np.round(place_of(sensor, model), 9))
        axes.plot(*place, "o", markersize=3, color="white", markeredgecolor=INK, zorder=7)
        tags.setdefault(place, []).append(number)
    middle = np.mean(model.extent[:2]), np.mean(model.extent[2:])
    for place, numbers in tags.items():
        away = np.subtract(place, middle)
        away = away / (np.hypot(*away) or 1.0)
        axes.annotate(
            ", ".join(map(str, numbers)), place, xytext=18 * away, textcoords="offset points",
            ha="center", va="center", fontsize=8, fontweight="bold", color=INK, zorder=8,
            bbox={"boxstyle": "circle,pad=0.25", "facecolor": "white", "edgecolor": INK},
        )
    key = [f"{number}  {sensor.name}" for number, sensor in enumerate(case.sensors, start=1)]
    if any(outline.edge is None for outline in model.outlines):
        key.append("hatched: lee, not predicted; dotted: its margin, doubtful")
    axes.figure.supxlabel(_wrapped(" \u2002 ".join(key), 110), fontsize=9, parse_math=False)


def _wrapped(text, width):
    return "\n".join(textwrap.wrap(text, width, break_long_words=False))


def _draw_stream(axes, case, angle, direction):
    """An arrow the way the stream goes, in the corner that it comes from, and its angle."""
    heading = np.radians(direction)
    ahead = np.array([np.cos(heading), np.sin(heading)])
    corner = np.where(ahead > -1e-9, 0.12, 0.88)
    box = {"boxstyle": "round,pad=0.3", "facecolor": "white", "edgecolor": "none", "alpha": 0.85}
    axes.annotate(
        f"wind from {angle:g}\u00b0" if case.by_bearing else f"stream to {angle:g}\u00b0",
        corner, xycoords="axes fraction", xytext=(0, 34 if corner[1] < 0.5 else -34),
        textcoords="offset points", ha="center", va="center", fontsize=9, color=INK, zorder=9,
        bbox=box,
    )
    axes.annotate(
        "", corner, xycoords="axes fraction", xytext=-44.0 * ahead, textcoords="offset points",
        zorder=10, arrowprops={"arrowstyle": "simple", "mutation_scale": 24, "facecolor": INK,
                               "edgecolor": "white", "shrinkA": 0, "shrinkB": 0},
    )


def _frame(axes, case, x, y, caution):
    axes.set_aspect("equal")
    axes.set_xlim(x[0], x[-1])
    axes.set_ylim(y[0], y[-1])
    east, north = (", east", ", north") if case.by_bearing else ("", "")
    axes.set_xlabel(f"x{east} ({case.length_unit})")
    axes.set_ylabel(f"y{north} ({case.length_unit})")
    title = case.title + case.speed_in_words(", ")
    axes.set_title(_wrapped(title, 70), fontsize=11, parse_math=False)
    if caution:
        axes.text(
            0.5, 0.97, _wrapped(f"not to be trusted: {caution}", 70), transform=axes.transAxes,
            ha="center", va="top", color="white", zorder=10, parse_math=False,
            bbox={"boxstyle": "round,pad=0.4", "facecolor": DIRECTION, "edgecolor": "none"},
        )


# --- readings against the wind --------------------------------------------------------------------


def draw_sensors(folder, case, table):
    """Draw what each sensor reads against the wind, eight sensors to a picture.

    Parameters
    ----------
    folder : Path
        Where sensors.png goes, or sensors-1.png, sensors-2.png ... where there are more.
    case : Case
    table : Survey
    """
    places = range(len(table.sensors))
    pages = [
        places[first : first + SENSORS_PER_PICTURE]
        for first in range(0, len(places), SENSORS_PER_PICTURE)
    ]
    for number, page in enumerate(pages, start=1):
        name = "sensors.png" if len(pages) == 1 else f"sensors-{number}.png"
        _draw_page(folder / name, case, table, page)


def _draw_page(path, case, table, page):
    from matplotlib.ticker import MultipleLocator

    figure = _figure(10.0, 1.2 + 2.4 * len(page))
    rows = figure.subplots(len(page), 2, sharex=True, squeeze=False)
    order, angles = laid_out(table.angles)
    *limits, step = angle_axis(angles)
    for (left, right), place in zip(rows, page, strict=True):
        for axes, column in zip((left, right), _columns(case, table, place), strict=True):
            _draw_column(axes, angles, table, place, column, order)
        left.set_title(table.names[place], loc="left", fontsize=10, parse_math=False)
    for axes in rows[-1]:
        axes.set_xlabel(
            "bearing the wind comes from (degrees)" if case.by_bearing
            else "direction the stream goes to (degrees)"
        )
        axes.set_xlim(*limits)
        axes.xaxis.set_major_locator(MultipleLocator(step))
        axes.xaxis.set_major_formatter(lambda angle, _: angle_words(angle))
    figure.suptitle(_wrapped(case.title, 90), fontsize=12, parse_math=False)
    figure.supxlabel(
        "grey: not trusted     dotted: trusted, but doubtful     "
        "green: speed within 1 percent of the undisturbed", fontsize=9,
    )
    figure.savefig(path)


def _columns(case, table, place):
    """Left and right panel of a sensor: label, values, colour, undisturbed value and band."""
    sensor = table.sensors[place]
    band = LIMIT if sensor.reads in ("speed", "both") else None
    if sensor.kind == "port":
        yield "pressure coefficient (1)", table.static_error[:, place], SPEED, 0.0, None
    else:
        kind = "component ratio (1)" if sensor.kind == "path" else "speed ratio (1)"
        yield kind, table.speed_ratio[:, place], SPEED, 1.0, band
    if sensor.kind == "path":
        error = table.component_error[:, place]
        yield "component error,\nover undisturbed speed (1)", error, DIRECTION, 0.0, band
    else:
        sense = "clockwise" if case.by_bearing else "counter-clockwise"
        label = f"direction error (degrees),\n{sense} positive"
        yield label, table.direction_error[:, place], DIRECTION, 0.0, None


def _draw_column(axes, angles, table, place, column, order):
    axes.tick_params(labelsize=8)
    label, values, colour, undisturbed, band = column
    values, trust = values[order], table.trust[order, place]
    if not np.isfinite(values).any():
        axes.set_yticks([])
        axes.text(0.5, 0.5, "not read", transform=axes.transAxes, ha="center", color="#808080")
        return
    axes.set_ylabel(label, fontsize=8)
    steps = np.diff(angles)
    step = min(np.median(steps), WIDEST_SHADE) if steps.size else WIDEST_SHADE
    doubtful = table.doubtful[order, place] & trust
    for shaded, colours, hatch in ((doubtful, MARGIN, ".."), (~trust, SHADE, "")):
        for first, last in _blocks(angles[shaded], step):
            axes.axvspan(first - step / 2, last + step / 2, facecolor=colours, hatch=hatch,
                         edgecolor="#b0b0b0", linewidth=0)
    if band:
        axes.axhspan(undisturbed - band, undisturbed + band, color=BAND, linewidth=0, zorder=1.5)
    axes.axhline(undisturbed, color=INK, linewidth=0.8, linestyle=":")
    gaps = np.flatnonzero(steps > 1.5 * step) + 1
    for dots, shown in (("-", trust), (":", ~trust)):
        line = np.insert(np.where(shown, values, np.nan), gaps, np.nan)
        axes.plot(np.insert(angles, gaps, np.nan), line, dots, color=colour, linewidth=1.4,
                  marker="" if len(angles) > FEW else "o", markersize=3)
    axes.set_ylim(*value_limits(values[trust], undisturbed, 2 * band if band else 0.5))


def _blocks(angles, step):
    """First and last of every block of neighbouring angles."""
    for block in np.split(angles, np.flatnonzero(np.diff(angles) > 1.5 * step) + 1):
        if block.size:
            yield block[0], block[-1]


# --- the trade-off of a search for mounts ---------------------------------------------------------


def draw_trade_off(path, case, found):
    """Draw the worst error of booms against their length, and the share of the wind they serve.

    Parameters
    ----------
    path : path-like
        The picture to write.
    case : Case
    found : Mounts
        Of a search for booms.
    """
    from matplotlib.ticker import LogLocator, NullFormatter

    figure = _figure(7.5, 4.6)
    axes = figure.add_subplot()
    length, worst = found.curve["length"], 100.0 * found.curve["worst_error"]
    some = np.isfinite(worst)
    lines = []
    if some.any():
        lines += axes.plot(length[some], worst[some], color=SPEED, label="worst error")
        axes.set_yscale("log")
        axes.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 5.0)))
        axes.yaxis.set_major_formatter(lambda percent, _: f"{percent:g}")
        axes.yaxis.set_minor_formatter(NullFormatter())
        axes.set_ylabel("worst error (percent of the speed)", color=SPEED)
        lines.append(axes.axhline(
            100.0 * found.limit, color=INK, linewidth=0.9, linestyle=":", label="limit"
        ))
    else:
        axes.set_yticks([])
    share = axes.twinx()
    lines += share.plot(
        length, 100.0 * found.curve["share"], "--", color=DIRECTION,
        label="wind within the limit and trusted",
    )
    share.set_ylim(0.0, 103.0)
    share.set_ylabel("share of the wind (percent)", color=DIRECTION)
    lines.append(axes.axvline(
        found.best.length, color=INK, linewidth=0.9, linestyle="-.", label="best choice"
    ))
    axes.set_xlabel(f"length of the boom{'s' * (len(found.best.angles) > 1)} ({case.length_unit})")
    axes.set_title(_wrapped(case.title, 70), fontsize=11, parse_math=False)
    figure.legend(handles=lines, loc="outside lower center", ncols=2, fontsize=9)
    figure.savefig(path)
