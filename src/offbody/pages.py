"""One HTML page that needs nothing but itself: its frame, its tables and its drawings.

Nothing here knows of cases or surveys. Texts are escaped where they are set; only what the
functions here return, and only under the name ``body``, is taken as HTML. The drawings are SVG:
told apart by hatch, dots and dashes as well as by blue and orange, which every kind of colour
vision tells apart.
"""

import base64
import math
from dataclasses import dataclass
from html import escape

import numpy as np

INK, SOFT, PALE = "#1a1a1a", "#5c5c5c", "#e4e4e4"
BLUE, ORANGE = "#0a5ea8", "#c2570c"

WIDTH = 720.0  # of a drawing, as is its text, in CSS pixels
CHART_HEIGHT = 172.0
LABEL_HEIGHT = 20.0  # more, where the x axis has a label
PLAN_RADIUS = 262.0  # of the outermost ring
PLAN_HEIGHT = 420.0  # at most, of a plan without rings
RING_BREADTH, RING_GAP = 9.0, 5.0
LONG = 12  # rows of a table, beyond which a sheet of paper may end within it
FEW = 40  # points of a line, up to which each is marked by a dot

# What a sector or a stretch of an axis can be, and how it is filled.
FILLS = {
    "within": BLUE,
    "beyond": "#ffffff",
    "doubtful": "url(#dots)",
    "excluded": "url(#hatch)",
    "band": "#0a5ea833",
    "limit": PALE,
}

STYLE = f"""
html {{ color-scheme: light; }}
body {{ margin: 0 auto; max-width: 60rem; padding: 2.5rem 1.5rem 3rem; background: #fff;
  color: {INK}; font: 1rem/1.5 Charter, "Bitstream Charter", Georgia, "DejaVu Serif", serif;
  overflow-wrap: anywhere; }}
h1 {{ margin: 0 0 .4rem; font-size: 2rem; font-weight: 400; line-height: 1.2; }}
header p, footer, figcaption, caption, .key {{ color: {SOFT}; font-size: .875rem; }}
header p {{ margin: 0; }}
header {{ margin-bottom: 2rem; }}
section {{ display: grid; grid-template-columns: 9rem minmax(0, 1fr); column-gap: 2rem;
  border-top: 1px solid {INK}; padding: .9rem 0 2.2rem; }}
h2 {{ margin: 0; font-size: 1rem; font-style: italic; font-weight: 400; }}
section p:first-child, section ul:first-child, figure:first-child {{ margin-top: 0; }}
.lead {{ font-size: 1.35rem; line-height: 1.4; }}
ul {{ padding-left: 1.1rem; }}
li {{ margin-bottom: .35rem; }}
table {{ border-collapse: collapse; width: 100%; margin: 1.2rem 0;
  font: .8125rem/1.4 "Helvetica Neue", Arial, "DejaVu Sans", sans-serif; }}
caption {{ text-align: left; padding-bottom: .4rem;
  font: .875rem/1.45 Charter, "Bitstream Charter", Georgia, "DejaVu Serif", serif; }}
th, td {{ padding: .35rem .9rem .35rem 0; text-align: left; vertical-align: top;
  border-bottom: 1px solid {PALE}; font-variant-numeric: tabular-nums; }}
thead th {{ border-bottom-color: {INK}; font-weight: 600; vertical-align: bottom; }}
tbody th {{ font-weight: 600; }}
th[scope=row] {{ min-width: 5rem; }}
td, thead th {{ overflow-wrap: break-word; }}
.number {{ text-align: right; white-space: nowrap; }}
figure {{ margin: 1.4rem 0; break-inside: avoid; }}
figure svg, figure img {{ display: block; width: 100%; height: auto; }}
figcaption {{ margin-top: .5rem; }}
svg text {{ font-family: "Helvetica Neue", Arial, "DejaVu Sans", sans-serif; font-size: 12px;
  fill: {INK}; }}
.key {{ margin: .3rem 0; }}
.key svg {{ display: inline-block; width: 28px; height: 12px; vertical-align: -1px;
  margin-right: .35rem; }}
.key span {{ margin-right: 1.3rem; white-space: nowrap; }}
pre {{ font: .8125rem/1.45 "DejaVu Sans Mono", Consolas, monospace; white-space: pre-wrap;
  margin: 1rem 0; border-left: 2px solid {PALE}; padding-left: 1rem; }}
.patterns {{ position: absolute; width: 0; height: 0; }}
@page {{ size: A4; margin: 17mm 16mm 18mm; }}
@media (max-width: 46rem) {{ section {{ display: block; }} h2 {{ margin-bottom: .7rem; }} }}
@media print {{
  html {{ font-size: 10pt; }}
  body {{ padding: 0; max-width: none; }}
  header {{ margin-bottom: 1rem; }}
  section {{ display: block; padding: .5rem 0 1.2rem; }}
  h2 {{ margin-bottom: .5rem; break-after: avoid; }}
  figure, table {{ margin: .8rem 0; }}
  .tall svg {{ max-height: 118mm; }}
  .tall img {{ max-height: 150mm; max-width: 100%; width: auto; }}
  table, tr, li, .key {{ break-inside: avoid; }}
  .long {{ break-inside: auto; }}
  .key {{ break-after: avoid; }}
  p, li, pre {{ orphans: 3; widows: 3; }}
}}
"""

PATTERNS = f"""<svg class="patterns" aria-hidden="true"><defs>
<pattern id="hatch" width="6" height="6" patternUnits="userSpaceOnUse"
 patternTransform="rotate(45)"><rect width="6" height="6" fill="#fff"/>
<rect width="2" height="6" fill="{ORANGE}"/></pattern>
<pattern id="dots" width="5" height="5" patternUnits="userSpaceOnUse">
<rect width="5" height="5" fill="#fff"/><circle cx="2.5" cy="2.5" r="1" fill="{INK}"/></pattern>
</defs></svg>"""


# --- the frame ------------------------------------------------------------------------------------


def page(title, sections, version, under=()):
    """A whole HTML document in English.

    Parameters
    ----------
    title : str
    sections : iterable of (title, body)
        Their headings, and HTML made by the functions of this module.
    version : str
        Of offbody.
    under : iterable of str
        Lines below the title.

    Returns
    -------
    str

    Examples
    --------
    >>> text = page("Mast 2", [("Answer", paragraphs("All is well, up to 3 < 4 m."))], "1.0")
    >>> "<p>All is well, up to 3 &lt; 4 m.</p>" in text
    True
    """
    lines = "".join(f"<p>{escape(line)}</p>\n" for line in under)
    parts = "".join(
        f"<section>\n<h2>{escape(heading)}</h2>\n<div>\n{body}\n</div>\n</section>\n"
        for heading, body in sections
    )
    return (
        f'<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        f'<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{escape(title)}</title>\n<style>{STYLE}</style>\n</head>\n<body>\n{PATTERNS}\n"
        f"<header>\n<h1>{escape(title)}</h1>\n{lines}</header>\n<main>\n{parts}</main>\n"
        f"<footer>offbody {escape(version)}</footer>\n</body>\n</html>\n"
    )


def paragraphs(*texts, kind=""):
    """A paragraph of each text; kind "lead" sets them larger."""
    mark = f' class="{kind}"' if kind else ""
    return "\n".join(f"<p{mark}>{escape(text)}</p>" for text in texts)


def bullets(texts):
    """A list of texts."""
    return "<ul>\n" + "".join(f"<li>{escape(text)}</li>\n" for text in texts) + "</ul>"


def verbatim(text):
    """A text as it stands, line by line."""
    return f"<pre>\n{escape(text)}</pre>"  # a browser drops the first line break


def table(caption, heads, rows, numbers=()):
    """A table whose first column heads its rows.

    Parameters
    ----------
    caption : str
    heads : sequence of str
    rows : iterable of sequences of str
    numbers : collection of int
        The columns to align at their right.
    """


    def cell(column, text, scope):
        mark = ' class="number"' if column in numbers else ""
        if scope:
            return f'<th scope="{scope}"{mark}>{escape(text)}</th>'
        return f"<td{mark}>{escape(text)}</td>"

    head = "".join(cell(column, text, "col") for column, text in enumerate(heads))
    lines = (
        "".join(cell(column, text, "" if column else "row") for column, text in enumerate(row))
        for row in rows
    )
    body = [f"<tr>{line}</tr>\n" for line in lines]
    kind = ' class="long"' if len(body) > LONG else ""
    return (
        f"<table{kind}>\n<caption>{escape(caption)}</caption>\n<thead><tr>{head}</tr></thead>\n"
        f"<tbody>\n{''.join(body)}</tbody>\n</table>"
    )


def figure(body, caption, entries=(), tall=False):
    """Drawings with their key, entries of (fill, text), and their caption.

    A tall one is drawn smaller on paper, to leave room on the sheet.
    """
    shown = key(entries) if entries else ""
    mark = ' class="tall"' if tall else ""
    return f"<figure{mark}>\n{body}\n{shown}<figcaption>{escape(caption)}</figcaption>\n</figure>"


def key(entries):
    """What the fills of a drawing mean, one line of (fill, text); "line" and "dashed" are lines."""
    shown = []
    for fill, text in entries:
        if fill in FILLS:
            mark = (
                f'<rect x="0.5" y="0.5" width="27" height="11" fill="{FILLS[fill]}" '
                f'stroke="{SOFT}"/>'
            )
        else:
            dashes = ' stroke-dasharray="5 3"' if fill == "dashed" else ""
            mark = f'<path d="M0 6H28" stroke="{BLUE}" stroke-width="2"{dashes}/>'
        shown.append(
            f'<span><svg viewBox="0 0 28 12" aria-hidden="true">{mark}</svg>{escape(text)}</span>'
        )
    return f'<p class="key">{" ".join(shown)}</p>\n'


def picture(png, description):
    """A PNG, as bytes, inside the page itself."""
    code = base64.b64encode(png).decode("ascii")
    return f'<img src="data:image/png;base64,{code}" alt="{escape(description)}">'


def _drawing(height, parts, description):
    return (
        f'<svg viewBox="0 0 {WIDTH:g} {height:.5g}" role="img" '
        f'aria-label="{escape(description)}">\n' + "\n".join(parts) + "\n</svg>"
    )


# --- curves ---------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Line:
    """A curve: x, y of equal length, NaN where it breaks off; low and high bound its band."""

    x: np.ndarray
    y: np.ndarray
    name: str = ""
    colour: str = BLUE
    dashed: bool = False
    low: np.ndarray | None = None
    high: np.ndarray | None = None


@dataclass(frozen=True, eq=False)
class Chart:
    """Curves over one pair of axes.

    Attributes
    ----------
    x_label, y_label : str
        With their units; the first may be left empty, as above another chart of the same axis.
    lines : tuple of Line
    x_limits, y_limits : (low, high)
    x_step : float or None
        Between the marks of the x axis; None: chosen.
    x_words : function
        What stands at a mark of the x axis.
    spans : tuple of (from, to, fill)
        Stretches of the x axis that are filled, as in FILLS.
    limit : float or None
        Half-width of a filled strip about y = 0.
    points : tuple of (x, y, text)
        Marked and named.
    """

    x_label: str
    y_label: str
    lines: tuple
    x_limits: tuple
    y_limits: tuple
    x_step: float | None = None
    x_words: object = "{:g}".format
    spans: tuple = ()
    limit: float | None = None
    points: tuple = ()


def chart(chart, description):
    """The SVG of a Chart; the description is what someone who cannot see it is told."""
    left, top, bottom = 52.0, 26.0, 24.0
    wide, high = WIDTH - left - 14.0, CHART_HEIGHT - top - bottom
    height = CHART_HEIGHT + (LABEL_HEIGHT if chart.x_label else 0.0)
    (x0, x1), (y0, y1) = chart.x_limits, chart.y_limits

    def across(x):
        return (np.asarray(x, float) - x0) / (x1 - x0) * wide

    def down(y):
        return (y1 - np.asarray(y, float)) / (y1 - y0) * high

    inside, parts = [], [_text(0, 14, chart.y_label, weight=600)]
    if chart.limit is not None:
        inside.append(_rectangle(0.0, wide, *down([chart.limit, -chart.limit]), "limit"))
    for y in ticks(y0, y1):
        at = float(down(y))
        inside.append(_path(f"M0 {at:.1f}h{wide:g}", SOFT if y == 0 else PALE))
        parts.append(_text(left - 8, top + at + 4, f"{y:.4g}", "end"))
    inside += [
        _rectangle(*across([start, stop]), 0.0, high, fill)
        for start, stop, fill in chart.spans
        if start < x1 and stop > x0
    ]
    for line in chart.lines:
        inside += _curve(line, across, down)
    for x, y, text in chart.points:
        inside += _named_point(float(across(x)), float(down(y)), text, wide)
    # A nested drawing cuts off what leaves the axes.
    parts.append(
        f'<svg x="{left:g}" y="{top:g}" width="{wide:g}" height="{high:g}">'
        + "".join(inside) + "</svg>"
    )
    parts.append(_path(f"M{left:g} {top + high:g}h{wide:g}", INK))
    for x in ticks(x0, x1, chart.x_step):
        at = left + float(across(x))
        parts.append(_path(f"M{at:.1f} {top + high:g}v5", INK))
        parts.append(_text(at, top + high + 18, chart.x_words(x), "middle"))
    if chart.x_label:
        parts.append(_text(left + wide, height - 6, chart.x_label, "end"))
    parts += _names(chart.lines)
    return _drawing(height, parts, description)


def _curve(line, across, down):
    x = across(line.x)
    if line.low is not None:
        low, high = down(line.low), down(line.high)
        for piece in _pieces(x + low + high):
            there, back = _points(x[piece], high[piece]), _points(x[piece][::-1], low[piece][::-1])
            yield f'<path d="M{there}L{back}Z" fill="{FILLS["band"]}"/>'
    y = down(line.y)
    for piece in _pieces(x + y):
        yield _path(f"M{_points(x[piece], y[piece])}", line.colour, 1.8, line.dashed)
    if len(x) <= FEW:
        for one in np.flatnonzero(np.isfinite(x + y)):
            yield f'<circle cx="{x[one]:.1f}" cy="{y[one]:.1f}" r="2.4" fill="{line.colour}"/>'


def _pieces(values):
    """Slices between the gaps, where values are NaN."""
    known = np.concatenate([[False], np.isfinite(values), [False]])
    edges = np.flatnonzero(known[1:] != known[:-1])
    return [slice(first, last) for first, last in edges.reshape(-1, 2)]


def _named_point(x, y, text, wide):
    side, away = ("end", -9) if x > wide / 2 else ("start", 9)
    yield f'<circle cx="{x:.1f}" cy="{y:.1f}" r="4" fill="#fff" stroke="{INK}"/>'
    yield _text(x + away, y - 6, text, side)


def _names(lines):
    """The names of the curves, from the right above the axes."""
    right = WIDTH - 14.0
    for line in reversed([line for line in lines if line.name]):
        yield _text(right, 14, line.name, "end")
        right -= 7.0 * len(line.name) + 8
        yield _path(f"M{right - 26:g} 10h26", line.colour, 2.0, line.dashed)
        right -= 44


def ticks(low, high, step=None):
    """Round numbers between two limits, both included, about five of them if no step is given.

    Examples
    --------
    >>> ticks(-1.3, 2.2)
    [-1.0, 0.0, 1.0, 2.0]
    """
    step = step or round_below((high - low) / 3)
    first, last = math.ceil(low / step - 1e-9), math.floor(high / step + 1e-9)
    return [number * step + 0.0 for number in range(first, last + 1)]


def round_below(value):
    """The greatest of ... 0.1, 0.2, 0.5, 1, 2, 5 ... that is no greater than a value."""
    power = 10.0 ** math.floor(math.log10(value))
    return max(step for step in (1, 2, 5) if step * power <= value * (1 + 1e-9)) * power


def laid_out(angles):
    """The order in which angles grow along an axis, and how they are counted there.

    Angles of less than half a turn start after the gap, which may carry them across north.

    Returns
    -------
    (order, turned) : (n,) int array, (n,) array
    """
    turned = angles % 360.0
    order = np.argsort(turned)
    turned = turned[order]
    gaps = np.diff(turned, append=turned[0] + 360.0)
    cut = int(gaps.argmax()) + 1
    if gaps[cut - 1] > 180.0:
        turned = np.concatenate([turned[cut:], turned[:cut] + 360.0])
        order = np.roll(order, -cut)
    return order, turned


def angle_axis(turned):
    """Where an axis of angles, as ``laid_out`` counts them, begins and ends, and its step."""
    room = 5.0 if len(turned) <= FEW else 0.0
    span = np.ptp(turned)
    step = 45.0 if span > 120.0 else 15.0 if span > 30.0 else 5.0
    if span >= 180.0:
        return -room, 360.0 + room, step
    return turned[0] - room, turned[-1] + room, step


def angle_words(angle):
    """An angle as it is counted on an axis, back within the turn."""
    return f"{angle - 360 * (angle > 360):g}"


def value_limits(values, undisturbed, least):
    """Limits that show every value, and never blow up a trifle."""
    departures = np.append(values[np.isfinite(values)] - undisturbed, [-least, least])
    room = 0.08 * np.ptp(departures)
    return undisturbed + departures.min() - room, undisturbed + departures.max() + room


# --- the plan -------------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False)
class Marker:
    """A sensor: its place, its tag, and its paths and the radius of its disc to scale."""

    place: np.ndarray
    tag: str
    paths: tuple = ()
    radius: float = 0.0


@dataclass(frozen=True, eq=False)
class Ring:
    """What a sensor is worth by where the stream comes from.

    sectors: (from, to, fill), degrees counter-clockwise from +x, as in FILLS.
    """

    tag: str
    sectors: tuple


@dataclass(frozen=True, eq=False)
class Plan:
    """What stands where, to scale, in one unit of length.

    Attributes
    ----------
    bodies, booms : sequences of (k, 2) array
        Closed outlines, and open lines.
    markers : sequence of Marker
    rings : sequence of Ring
        From the inside to the outside; none where there are walls.
    walls : sequence of float
        Heights of plane walls: none, the ground's, or a duct's two.
    length_unit : str
    by_bearing : bool
        Whether the angles round the plan are bearings or the directions of streams.
    """

    bodies: tuple
    booms: tuple
    markers: tuple
    rings: tuple = ()
    walls: tuple = ()
    length_unit: str = ""
    by_bearing: bool = False


def plan(plan, description):
    """The SVG of a Plan, to scale."""
    points = np.concatenate(
        [*plan.bodies, *plan.booms, *(_reach(marker) for marker in plan.markers)]
    )
    low, high = points.min(axis=0), points.max(axis=0)
    if plan.rings:
        return _ringed(plan, points, (low + high) / 2, description)
    room = 0.15 * max(high - low)
    low, high = low - room, high + room
    if plan.walls:
        low[1], high[1] = min(plan.walls[0], low[1]), max(plan.walls[-1], high[1])
    scale = min((WIDTH - 40) / (high - low)[0], PLAN_HEIGHT / (high - low)[1])
    middle = (low + high) / 2
    height = scale * (high - low)[1] + 82
    to_paper = _placing(scale, middle, (WIDTH / 2, 12 + scale * (high - low)[1] / 2))
    parts = [_wall(float(to_paper((0.0, wall))[1]), number) for number, wall in
             enumerate(plan.walls)]
    parts += _standing(plan, to_paper, scale, middle)
    return _drawing(height, [*parts, *_scale_bar(scale, height - 10, plan)], description)


def _reach(marker):
    """The points, (4 or more, 2), within which a marker lies."""
    corners = np.asarray(marker.place) + marker.radius * np.array(
        [[1, 0], [-1, 0], [0, 1], [0, -1]]
    )
    return np.concatenate([corners, *(np.reshape(path, (2, 2)) for path in marker.paths)])


def _placing(scale, middle, centre):
    """From lengths to paper, on which y runs down."""
    return lambda points: (np.asarray(points) - middle) * (scale, -scale) + centre


def _ringed(plan, points, middle, description):
    """A plan inside its rings, with the angles round them."""
    inner = PLAN_RADIUS - (RING_BREADTH + RING_GAP) * len(plan.rings)
    scale = (inner - 34.0) / np.hypot(*(points - middle).T).max()
    centre = (WIDTH / 2, PLAN_RADIUS + 30.0)
    height = 2 * PLAN_RADIUS + 60.0
    parts = []
    for number, ring in enumerate(plan.rings):
        near = inner + number * (RING_BREADTH + RING_GAP)
        parts.append(
            f'<circle cx="{centre[0]:g}" cy="{centre[1]:g}" r="{near + RING_BREADTH / 2:g}" '
            f'fill="none" stroke="{PALE}"/>'
        )
        for start, stop, fill in ring.sectors:
            parts.append(_sector(centre, near, near + RING_BREADTH, start, stop, fill))
        x, y = _polar(centre, near + RING_BREADTH / 2, 45.0)
        parts.append(f'<circle cx="{x:.1f}" cy="{y:.1f}" r="7" fill="#fff"/>')
        parts.append(_text(x, y + 4, ring.tag, "middle", 600))
    for place in range(0, 360, 30):
        (x, y), (tick_x, tick_y) = (
            _polar(centre, PLAN_RADIUS + away, place) for away in (16, 0)
        )
        end_x, end_y = _polar(centre, PLAN_RADIUS + 4, place)
        parts.append(_path(f"M{tick_x:.1f} {tick_y:.1f}L{end_x:.1f} {end_y:.1f}", INK))
        parts.append(_text(x, y + 4, _angle_at(place, plan.by_bearing), "middle"))
    to_paper = _placing(scale, middle, centre)
    parts += _standing(plan, to_paper, scale, middle)
    return _drawing(height, [*parts, *_scale_bar(scale, height - 10, plan)], description)


def _angle_at(place, by_bearing):
    """The angle of the stream that comes from a place round the plan, in words."""
    if not by_bearing:
        return f"{(place + 180) % 360}\u00b0"
    bearing = (90 - place) % 360
    return {0: "N", 90: "E", 180: "S", 270: "W"}.get(bearing, f"{bearing}\u00b0")


def _polar(centre, radius, degrees):
    angle = math.radians(degrees)
    return centre[0] + radius * math.cos(angle), centre[1] - radius * math.sin(angle)


def _sector(centre, near, far, start, stop, fill):
    """A piece of a ring; an arc of SVG cannot close upon itself, so two make the whole turn."""
    stop = min(stop, start + 360.0)
    middle = (start + stop) / 2
    outward, inward = [], []
    for angle in (middle, stop):
        x, y = _polar(centre, far, angle)
        outward.append(f"A{far:.1f} {far:.1f} 0 0 0 {x:.2f} {y:.2f}")
    for angle in (middle, start):
        x, y = _polar(centre, near, angle)
        inward.append(f"A{near:.1f} {near:.1f} 0 0 1 {x:.2f} {y:.2f}")
    (x, y), (back_x, back_y) = _polar(centre, far, start), _polar(centre, near, stop)
    link = "M" if stop - start >= 360.0 else "L"
    return (
        f'<path d="M{x:.2f} {y:.2f}{"".join(outward)}{link}{back_x:.2f} {back_y:.2f}'
        f'{"".join(inward)}Z" fill="{FILLS[fill]}" fill-rule="evenodd" stroke="{SOFT}" '
        'stroke-width="0.6"/>'
    )


def _standing(plan, to_paper, scale, middle):
    """Booms, bodies, sensors and their tags."""
    for boom in plan.booms:
        yield _path(f"M{_points(*to_paper(boom).T)}", INK, 2.0)
    for body in plan.bodies:
        yield f'<path d="M{_points(*to_paper(body).T)}Z" fill="#444" stroke="{INK}"/>'
    tags = []
    for marker in plan.markers:
        for path in marker.paths:
            yield _path(f"M{_points(*to_paper(path).T)}", BLUE, 3.0)
        x, y = to_paper(marker.place)
        if marker.radius:
            yield (f'<circle cx="{x:.1f}" cy="{y:.1f}" r="{scale * marker.radius:.1f}" '
                   f'fill="none" stroke="{BLUE}" stroke-width="1.5"/>')
        yield (f'<circle cx="{x:.1f}" cy="{y:.1f}" r="3" fill="#fff" stroke="{BLUE}" '
               'stroke-width="1.5"/>')
        away = np.subtract(marker.place, middle) * (1, -1)
        _tag(tags, np.array([x, y]) + 19.0 * away / (np.hypot(*away) or 1.0), marker.tag)
    for place, names in tags:
        text = ", ".join(names)
        half = max(9.0, 5.0 + 3.5 * len(text))
        x, y = place
        yield (f'<rect x="{x - half:.1f}" y="{y - 9:.1f}" width="{2 * half:.1f}" height="18" '
               f'rx="9" fill="#fff" stroke="{INK}"/>')
        yield _text(x, y + 4, text, "middle", 600)


def _tag(tags, place, name):
    """Add a tag; where it would cover another, it joins that one."""
    for other, names in tags:
        if np.abs(other - place).max() < 18.0:
            names.append(name)
            return
    tags.append((place, [name]))


def _wall(y, number):
    """A plane wall, solid toward the bodies, hatched behind; the first one is the lower."""
    behind = y if number == 0 else y - 10
    return (
        f'<rect x="0" y="{behind:.1f}" width="{WIDTH:g}" height="10" fill="#bbb"/>'
        + _path(f"M0 {y:.1f}H{WIDTH:g}", INK, 2.0)
    )


def _scale_bar(scale, y, plan):
    """A round length, lower left, and which way x and y run, lower right."""
    length = round_below(110.0 / scale)
    wide = length * scale
    yield _path(f"M1 {y - 5:.1f}v5h{wide:.1f}v-5", INK, 1.5)
    yield _text(wide + 9, y, f"{length:g} {plan.length_unit}")
    x = WIDTH - 52
    yield _path(f"M{x} {y - 30:.1f}v30h30m-5 -4l5 4l-5 4M{x - 4} {y - 25:.1f}l4 -5l4 5", INK, 1.2)
    yield _text(x + 36, y + 4, "x")
    yield _text(x, y - 36, "y", "middle")


# --- strokes --------------------------------------------------------------------------------------


def _points(x, y):
    return "L".join(f"{a:.1f} {b:.1f}" for a, b in zip(x, y, strict=True))


def _path(d, colour, width=1.0, dashed=False):
    dashes = ' stroke-dasharray="6 4"' if dashed else ""
    return (f'<path d="{d}" fill="none" stroke="{colour}" stroke-width="{width:g}" '
            f'stroke-linejoin="round"{dashes}/>')


def _rectangle(left, right, top, bottom, fill):
    return (f'<rect x="{left:.1f}" y="{top:.1f}" width="{right - left:.1f}" '
            f'height="{bottom - top:.1f}" fill="{FILLS[fill]}"/>')


def _text(x, y, text, anchor="start", weight=400):
    return (f'<text x="{x:.1f}" y="{y:.1f}" text-anchor="{anchor}" font-weight="{weight}">'
            f"{escape(text)}</text>")
