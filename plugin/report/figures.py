"""Figures of profiles and results, drawn into a matplotlib Figure that the caller provides or that is turned into SVG.

Nothing here uses pyplot or any global state of matplotlib but its settings while an SVG is written, so that figures may
be drawn off the main thread. Whatever a figure tells by colour it also tells by line style, marker or hatch.
"""

from __future__ import annotations

import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from ..core.result import Bent, ChoiceRow, Estimate, Fit, FitResult, MisfitRow
from ..core.settings import LOAD_RELIEF, PLATE_NAMES
from ..core.wording import say
from ..translation import tr, translated
from .words import interval_words, is_resolved, number, stated

INK = "#26343a"
"""Text, observed surface, axes."""
PLATE = "#1f6f84"
"""What the plate does."""
PLATE_PALE = "#bfdde4"
LOAD = "#e08a2e"
"""What bears on it."""
LOAD_PALE = "#f6dcc0"
FAINT = "#8a969b"

MOST_DOTS = 200
"""Observed stations that are drawn as dots; of more, every second, third ... is drawn, which the legend says."""
NEGLIGIBLE = 1e-4
"""Likelihood over its peak below which trials may lie outside the misfit figure."""
MOST_CORNERS = 250
"""Stations, or up to twice as many, at which shaded areas have corners."""

_LONG_DECIMALS = re.compile(r"(?<![\w.#])([1-9]\d*\.\d)\d+")
"""Numbers from 1 on with more than one decimal: in an SVG a tenth of a point is enough. Smaller ones are scales."""
_COMMENT_OR_INDENT = re.compile(r"<!--.*?-->|(?<=\n)[ \n]+", re.DOTALL)
_ALIKE = re.compile(r'<use [^>]*? style="([^"]*)"/>\n(?:<use [^>]*? style="\1"/>\n){3,}')
"""Markers in a row that are drawn alike."""
_GLYPH = re.compile(r'<path id="(\w+-[0-9a-f]+)" d="[^"]*" transform="scale\(0\.015625\)"/>\n')

_GLYPH_USE = re.compile(r'"#([\w-]+)"')

_TEXT = 8.5
_WIDTH = 7.4  # inches: fits a page of A4 or letter

_DOT = {"linestyle": "none", "marker": "o", "markersize": 2.8}
_FITTED = {**_DOT, "color": INK, "markeredgewidth": 0.0}
_NOT_FITTED = {**_DOT, "markerfacecolor": "white", "markeredgecolor": FAINT, "markeredgewidth": 0.6}
_PICK = {"linestyle": "none", "marker": "x", "markersize": 5, "color": INK}
_PREDICTED = {"color": PLATE, "linewidth": 2.0}
_LOADED = {"facecolor": LOAD_PALE, "edgecolor": LOAD, "hatch": "////", "linewidth": 0.0}
_BAND = {"facecolor": PLATE_PALE, "edgecolor": PLATE, "linewidth": 0.6, "linestyle": ":"}
_INTERVAL = {"facecolor": PLATE_PALE, "edgecolor": PLATE, "hatch": "\\\\\\\\", "linewidth": 0.0}
_PLAQUE = {"boxstyle": "round,pad=0.12", "facecolor": "white", "edgecolor": "none", "alpha": 0.8}
_LEGEND = {"fontsize": _TEXT, "frameon": False, "labelcolor": INK}
_ABOVE = {**_LEGEND, "loc": "lower center", "bbox_to_anchor": (0.5, 1.0), "borderaxespad": 0.3, "columnspacing": 1.4}


def missing_package() -> str:
    """One sentence on what is missing for figures and how to get it; empty where nothing is."""
    try:
        import matplotlib.figure  # noqa: F401
    except ImportError:
        return tr(
            "Figures need the Python package matplotlib, which this QGIS does not have. On Debian and Ubuntu: sudo apt "
            "install python3-matplotlib. Elsewhere, in the shell of this QGIS: python3 -m pip install matplotlib. "
            "Then start QGIS again."
        )
    return ""


def plain(text: str) -> str:
    """Text that matplotlib shows as it is: without this, what stands between two dollar signs would be set as formula.

    >>> plain("a $x$ b")
    'a \\\\$x\\\\$ b'
    """
    return text.replace("\\", "\\\\").replace("$", "\\$") if "$" in text else text


def svg(figure: Any) -> str:
    """The figure as an ``<svg>`` element without network references, its text drawn as shapes.

    Equal figures give equal text.
    """
    import matplotlib
    from matplotlib.backends.backend_svg import FigureCanvasSVG

    buffer = io.StringIO()
    with matplotlib.rc_context({"svg.fonttype": "path", "svg.hashsalt": "downwarp", "text.usetex": False}):
        nothing = dict.fromkeys(("Creator", "Date", "Format", "Type"))
        FigureCanvasSVG(figure).print_svg(buffer, metadata=nothing)
    text = buffer.getvalue()
    text = _COMMENT_OR_INDENT.sub("", text[text.index("<svg") :])
    return _ALIKE.sub(_style_once, _LONG_DECIMALS.sub(r"\1", text))


def without_glyphs(image: str, glyphs: dict[str, str]) -> str:
    """An SVG without the shapes of its letters, which are added to ``glyphs`` by their id.

    On a page with many figures each letter's shape is then needed once only: ids hold for the whole page.
    """

    short: dict[str, str] = {}

    def take(glyph: re.Match) -> str:
        font, _, code = glyph[1].rpartition("-")
        name = "".join(re.findall("[A-Z]", font)) + code
        short[glyph[1]] = name
        glyphs[name] = glyph[0].replace(glyph[1], name, 1)
        return ""

    image = _GLYPH.sub(take, image)
    return _GLYPH_USE.sub(lambda use: f'"#{short.get(use[1], use[1])}"', image)


def _style_once(run: re.Match) -> str:
    style = f' style="{run[1]}"'
    return f"<g{style}>{run[0].replace(style, '')}</g>\n"


def new_figure(height: float, width: float = _WIDTH) -> Any:
    """An empty figure of a size in inches, not bound to any window."""
    from matplotlib.figure import Figure

    return Figure(figsize=(width, height), facecolor="white")


def _tidy(axes: Any) -> None:
    axes.set_facecolor("white")
    axes.grid(True, color="#e3e8ea", linewidth=0.6)
    axes.set_axisbelow(True)
    axes.tick_params(labelsize=_TEXT, colors=INK, length=3)
    for side, spine in axes.spines.items():
        spine.set_visible(side in ("left", "bottom"))
        spine.set_color(FAINT)
    for label in (axes.xaxis.label, axes.yaxis.label):
        label.set_size(_TEXT)
        label.set_color(INK)


def _name(axes: Any, x: str = "", y: str = "") -> None:
    if x:
        axes.set_xlabel(x, fontsize=_TEXT, color=INK)
    if y:
        axes.set_ylabel(y, fontsize=_TEXT, color=INK)


@dataclass(frozen=True)
class ProfileAxes:
    """What `profile_axes` drew."""

    surface: Any
    """Axes of the surfaces: km along the transect, m up."""
    residual: Any
    """Axes of the residuals: km, m."""
    load: Any
    """Axes of the load: km, MPa; None where the load shows as relief or there is none."""


MARKER_STYLES = {"break": ("|", LOAD), "deepest": ("v", PLATE), "node": ("D", "white"), "bulge": ("^", PLATE)}
"""Marker and face colour of each marked place."""
PLACE_WORDS = {"break": say("break"), "deepest": say("deepest"), "node": say("node"), "bulge": say("bulge")}
"""What each of them is called."""


def marked_places(bent: Bent) -> dict[str, tuple[float, float | None]]:
    """Distance (m) and deflection (m, positive down; None before the plate) of the places that the plate has."""
    places: dict[str, tuple[float, float | None]] = {}
    if bent.break_position is not None:
        places["break"] = bent.break_position, _deflection_at(bent, bent.break_position)
    for kind in ("deepest", "node", "bulge"):
        place = getattr(bent.markers, kind)
        if place is not None:
            places[kind] = (place.distance, place.deflection)
    return places


def place_words(kind: str, deflection: float | None) -> str:
    """What a marked place is called: of a raised plate the point of largest deflection is its highest."""
    if kind == "deepest" and deflection is not None and deflection < 0:
        return tr("highest")
    return translated(PLACE_WORDS[kind])


def _deflection_at(bent: Bent, distance: float) -> float | None:
    """Deflection, m, on the plate and up to one station's step before it, where it is continued by its slope."""
    stations, known = bent.stations, np.flatnonzero(np.isfinite(bent.stations.deflection))
    at = bent.problem.profile.distance
    if known.size == 0 or not at[max(known[0] - 1, 0)] <= distance <= at[known[-1]]:
        return None
    if distance < at[known[0]]:
        return float(stations.deflection[known[0]] + stations.slope[known[0]] * (distance - at[known[0]]))
    return float(np.interp(distance, at[known], stations.deflection[known]))


def profile_axes(figure: Any, bent: Bent, rms: float | None = None, legend: bool = True) -> ProfileAxes:
    """Draw a transect into an empty ``figure``: relief, load, observed and predicted surface, markers; residuals below.

    ``rms``: root mean square residual, m, drawn as a pair of lines. Bent plates that were not fitted have no residuals
    in the fit; those of observed stations are drawn open. The legend, with the values of the marked places, takes the
    foot of the figure; it wants a figure at least 4.5 inches wide and 4 high.
    """
    profile, stations, problem = bent.problem.profile, bent.stations, bent.problem
    km = profile.distance / 1e3
    relief_is_load = problem.options.chosen("load")[0] == LOAD_RELIEF
    strip = bool(np.any(stations.load)) and not relief_is_load
    heights = [0.55, 2.6, 1.0] if strip else [2.6, 1.0]
    shape = {"nrows": len(heights), "ncols": 1, "height_ratios": heights, "hspace": 0.12}
    width, height = figure.get_size_inches()
    shape.update(left=0.78 / width, right=1.0 - 0.11 / width, top=0.97)
    grid = figure.add_gridspec(**shape)
    surface = figure.add_subplot(grid[-2])
    residual = figure.add_subplot(grid[-1], sharex=surface)
    load = figure.add_subplot(grid[0], sharex=surface) if strip else None
    for axes in (surface, residual, load):
        if axes is not None:
            _tidy(axes)
    handles = _draw_surfaces(surface, bent, km, relief_is_load)
    _draw_residuals(residual, bent, km, rms)
    if load is not None:
        load.fill_between(km, 0.0, stations.load / 1e6, **_LOADED)
        _name(load, y=tr("load, MPa"))
        load.tick_params(labelbottom=False)
    surface.tick_params(labelbottom=False)
    surface.set_xlim(km[0], km[-1])
    _name(surface, y=tr("elevation, m"))
    _name(residual, x=tr("distance from the line's start, km"), y=tr("residual, m"))
    # The legend below takes as much room as it has rows.
    columns = max(1, int(width / 2.2))
    room = min(0.6, (0.55 + (0.17 * -(-len(handles) // columns) if legend else 0.0)) / height)
    grid = figure.add_gridspec(**shape, bottom=room)
    for axes, cell in zip(figure.axes if not strip else (load, surface, residual), range(len(heights))):
        axes.set_position(grid[cell].get_position(figure))
    figure.align_ylabels()
    if legend:
        place = {"loc": "lower center", "bbox_to_anchor": (0.53, 0.0), "ncol": columns, "columnspacing": 1.6}
        figure.legend(handles=handles, **place, **_LEGEND)
    return ProfileAxes(surface, residual, load)


def _thinned(chosen: np.ndarray) -> tuple[np.ndarray, str]:
    """Indices of at most `MOST_DOTS` stations, and words for the legend on what was left out."""
    indices = np.flatnonzero(chosen)
    every = -(-indices.size // MOST_DOTS)
    words = {0: "", 1: "", 2: tr(" (every 2nd)"), 3: tr(" (every 3rd)")}.get(
        every, tr(" (every {count}th)", count=every)
    )
    return indices[:: max(every, 1)], words


def _outline(values: np.ndarray) -> np.ndarray:
    """Indices whose values, joined by lines, look like all of them on paper: of many stations the least and the
    greatest of each of `MOST_CORNERS` stretches, and both ends."""
    if values.size <= 2 * MOST_CORNERS:
        return np.arange(values.size)
    stretches = np.array_split(np.arange(values.size), MOST_CORNERS)
    known = np.isfinite(values)
    low, high = np.where(known, values, np.inf), np.where(known, values, -np.inf)
    picked = [each[np.argmin(low[each])] for each in stretches] + [each[np.argmax(high[each])] for each in stretches]
    return np.unique([0, *picked, values.size - 1])


def _draw_surfaces(axes: Any, bent: Bent, km: np.ndarray, relief_is_load: bool) -> list[Any]:
    """Draw the surfaces and return the entries of the legend."""
    problem, stations, profile = bent.problem, bent.stations, bent.problem.profile
    handles: list[Any] = []
    some = slice(None, None, max(1, km.size // MOST_CORNERS))
    if relief_is_load or problem.bare:
        shown = _outline(profile.relief)
        relief = {"color": FAINT, "linewidth": 1.0, "label": tr("relief (DEM)"), "zorder": 2}
        handles += axes.plot(km[shown], profile.relief[shown], **relief)
    level = problem.reference_level
    if relief_is_load and level is not None and problem.under_load.any():
        top = np.nan_to_num(profile.relief, nan=level)[some]
        shaded = axes.fill_between(km[some], level, top, where=problem.under_load[some], zorder=1, **_LOADED)
        shaded.set_label(tr("load, above {level} m", level=number(level, 4)))
        handles.append(shaded)
    if np.isfinite(stations.predicted_low).any():
        sides = stations.predicted_low[some], stations.predicted_high[some]
        band = axes.fill_between(km[some], *sides, zorder=3, **_BAND)
        band.set_label(tr("its {confidence} % band", confidence=stated(problem.options.confidence * 100)))
        handles.append(band)
    seen = np.isfinite(stations.observed)
    for chosen, words, style, order in (
        (seen & ~stations.in_fit, tr("observed, not fitted"), _NOT_FITTED, 4),
        (seen & stations.in_fit, tr("observed, fitted"), _FITTED, 5),
    ):
        some_of, left_out = _thinned(chosen)
        if some_of.size:
            handles += axes.plot(km[some_of], stations.observed[some_of], label=words + left_out, zorder=order, **style)
    picks = profile.picks
    if picks.distance.size:
        sigma = np.nan_to_num(picks.sigma)
        bars = {"yerr": sigma, "elinewidth": 0.8, "label": tr("picks"), "zorder": 6, **_PICK}
        handles.append(axes.errorbar(picks.distance / 1e3, picks.elevation, **bars))
    shown = _outline(stations.predicted)
    handles += axes.plot(km[shown], stations.predicted[shown], label=tr("predicted surface"), zorder=7, **_PREDICTED)
    return handles + _draw_markers(axes, bent)


def _draw_markers(axes: Any, bent: Bent) -> list[Any]:
    """Draw the marked places on the predicted surface; their values stand in the legend, where they never overlap."""
    handles = []
    for kind, (distance, deflection) in marked_places(bent).items():
        told = {"place": place_words(kind, deflection), "distance": number(distance / 1e3)}
        if kind in ("deepest", "bulge") and deflection is not None:
            words = tr("{place}, {distance} km: {deflection} m", deflection=number(abs(deflection)), **told)
        else:
            words = tr("{place}, {distance} km", **told)
        if kind == "break":
            line = axes.axvline(distance / 1e3, color=LOAD, linewidth=1.4, linestyle=(0, (5, 1.5, 1, 1.5)), zorder=6)
            line.set_label(words)
            handles.append(line)
            continue
        marker, face = MARKER_STYLES[kind]
        height = sum(c * distance**power for power, c in enumerate(bent.regional)) - (deflection or 0.0)
        handles += axes.plot(
            [distance / 1e3], [height], linestyle="none", marker=marker, markersize=8, markerfacecolor=face,
            markeredgecolor=INK, markeredgewidth=0.9, label=words, zorder=8, clip_on=False,
        )  # fmt: skip
    return handles


def _draw_residuals(axes: Any, bent: Bent, km: np.ndarray, rms: float | None) -> None:
    stations, picks = bent.stations, bent.problem.profile.picks
    values = stations.observed - stations.predicted
    known = np.isfinite(values)
    axes.axhline(0.0, color=PLATE, linewidth=1.4, zorder=2)
    if rms is not None:
        for side in (-rms, rms):
            axes.axhline(side, color=FAINT, linewidth=0.8, linestyle="--", zorder=1)
        axes.annotate(
            tr("dashed: rms {rms} m", rms=number(rms)), (0.995, 0.97), xycoords="axes fraction", ha="right", va="top",
            fontsize=_TEXT - 1, color=INK, zorder=6, bbox=_PLAQUE,
        )  # fmt: skip
    other, _ = _thinned(known & ~stations.in_fit)
    fitted, _ = _thinned(known & stations.in_fit)
    axes.plot(km[other], values[other], zorder=3, **_NOT_FITTED)
    axes.plot(km[fitted], values[fitted], zorder=4, **_FITTED)
    scale = [values[known & stations.in_fit]]
    plate = np.isfinite(stations.predicted)
    if picks.distance.size and plate.any():
        apart = picks.elevation - np.interp(picks.distance / 1e3, km[plate], stations.predicted[plate], np.nan, np.nan)
        axes.plot(picks.distance / 1e3, apart, zorder=5, **_PICK)
        scale.append(apart[np.isfinite(apart)])
    largest = np.concatenate(scale) if sum(each.size for each in scale) else values[known]
    if largest.size:
        # Stations that were not fitted, such as those under the load, must not set the scale.
        reach = max(1.25 * float(np.abs(largest).max()), 1.5 * (rms or 0.0), 1e-3)
        axes.set_ylim(-reach, reach)


@dataclass(frozen=True)
class Density:
    """Posterior density of the elastic thickness."""

    thickness: np.ndarray
    """m, increasing, shape (n,)."""
    density: np.ndarray
    """Density in ln thickness over its largest value, shape (n,)."""


def thickness_density(misfit: Sequence[MisfitRow]) -> Density | None:
    """Posterior density of thickness from the trials of one kind of plate, integrated over the break.

    Trials come on nested grids of thickness by break; within the range of the finest breaks only trials as fine count,
    for a coarse row that misses a narrow ridge would be too low. None where there are fewer than three thicknesses.
    """
    if not misfit:
        return None
    log_te = np.round(np.log([row.thickness for row in misfit]), 9)
    likelihood = np.array([row.relative_likelihood for row in misfit], dtype=float)
    breaks = np.array([np.nan if row.break_position is None else row.break_position for row in misfit])
    every, group = np.unique(log_te, return_inverse=True)
    density, spacing = np.zeros(every.size), np.zeros(every.size)
    for index in range(every.size):
        rows = np.flatnonzero(group == index)
        at, first = np.unique(breaks[rows], return_index=True)
        values = likelihood[rows][first]
        if at.size > 1:
            gaps = np.diff(at)
            density[index], spacing[index] = (0.5 * gaps * (values[1:] + values[:-1])).sum(), float(np.median(gaps))
        else:
            density[index] = values.max()
    if spacing.any():
        finest = spacing <= 1.5 * spacing[spacing > 0].min()
        finest &= spacing > 0
        inside = (every >= every[finest][0]) & (every <= every[finest][-1])
        use = finest | (~inside & (spacing > 0))
        every, density = every[use], density[use]
    if every.size < 3 or not density.max() > 0:
        return None
    return Density(np.exp(every), density / density.max())


def _log_km(axes: Any, which: str, low: float, high: float) -> None:
    """A logarithmic axis of km with plain numbers."""
    from matplotlib.ticker import FixedLocator, FuncFormatter, MaxNLocator, NullLocator

    ticks = np.array([m * 10.0**e for e in range(-2, 5) for m in (1, 1.5, 2, 3, 5, 7)])
    ticks = ticks[(ticks >= low * 0.999) & (ticks <= high * 1.001)]
    if ticks.size > 9:
        ticks = ticks[[f"{tick:e}"[:3] in ("1.0", "2.0", "5.0") for tick in ticks]]
    if ticks.size < 4:
        ticks = MaxNLocator(6).tick_values(low, high)
        ticks = ticks[(ticks >= low) & (ticks <= high) & (ticks > 0)]
    getattr(axes, f"set_{which}scale")("log")
    axis = getattr(axes, f"{which}axis")
    axis.set_major_locator(FixedLocator(ticks))
    axis.set_minor_locator(NullLocator())
    axis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:.4g}"))
    getattr(axes, f"set_{which}lim")(low, high)


def posterior_figure(result: FitResult) -> Any | None:
    """Posterior density of the elastic thickness, one line per kind of plate, with the answer's interval."""
    densities = [(fit, thickness_density(fit.misfit)) for fit in result.fits]
    drawn = [(fit, density) for fit, density in densities if density is not None]
    if not drawn:
        return None
    rows = 2 if len(drawn) > 1 else 1
    height = 2.35 + 0.17 * rows
    figure = new_figure(height)
    axes = figure.add_axes((0.105, 0.5 / height, 0.88, 1.65 / height))
    _tidy(axes)
    best, options = result.best, result.best.bent.problem.options
    for (fit, density), style in zip(drawn, ("-", "--")):
        km = density.thickness / 1e3
        line = {"color": PLATE, "linewidth": 2.0} if fit is best else {"color": INK, "linewidth": 1.2}
        words = tr("{kind} plate", kind=PLATE_NAMES[fit.kind])
        axes.plot(km, density.density, linestyle=style, label=words, zorder=4, **line)
        if fit is best and is_resolved(fit) and fit.thickness.value is not None:
            low = km[0] if fit.thickness.low is None else fit.thickness.low / 1e3
            high = km[-1] if fit.thickness.high is None else fit.thickness.high / 1e3
            inside = np.union1d(km[(km > low) & (km < high)], [low, high])
            shaded = axes.fill_between(inside, 0.0, np.interp(inside, km, density.density), zorder=2, **_INTERVAL)
            told = {
                "confidence": stated(options.confidence * 100),
                "interval": interval_words(fit.thickness, "km", 1e3),
            }
            shaded.set_label(tr("{confidence} % interval, {interval}", **told))
            value = fit.thickness.value / 1e3
            words = tr("most probable, {value} km", value=number(value))
            axes.axvline(value, color=LOAD, linewidth=1.4, linestyle=(0, (5, 1.5)), zorder=5, label=words)
    heard = [density.thickness[density.density > 1e-3] / 1e3 for _, density in drawn]
    low = max(options.te_from / 1e3, min(each.min() for each in heard) / 1.3)
    high = min(options.te_to / 1e3, max(each.max() for each in heard) * 1.3)
    _log_km(axes, "x", low, high)
    axes.set_ylim(0.0, 1.06)
    axes.set_yticks([0.0, 0.5, 1.0])
    _name(axes, tr("elastic thickness, km (logarithmic)"), tr("density over its peak"))
    axes.legend(ncol=2 if rows == 2 else 3, **_ABOVE)
    return figure


def misfit_figure(fit: Fit) -> Any | None:
    """Misfit over thickness and break around the best fit, with contours of relative likelihood; None where the break
    was not searched."""
    rows = [row for row in fit.misfit if row.break_position is not None]
    if not rows or np.ptp([row.break_position for row in rows]) == 0 or np.ptp([row.thickness for row in rows]) == 0:
        return None
    from matplotlib.colors import LinearSegmentedColormap
    from matplotlib.lines import Line2D
    from matplotlib.tri import LinearTriInterpolator, Triangulation

    points = np.array([(np.log(row.thickness), row.break_position, row.rms, row.relative_likelihood) for row in rows])
    _, unique = np.unique(np.round(points[:, :2], 6), axis=0, return_index=True)
    log_te, breaks, rms, likelihood = points[unique].T
    low, span = np.array([log_te.min(), breaks.min()]), np.array([np.ptp(log_te), np.ptp(breaks)])
    unit = (np.column_stack([log_te, breaks]) - low) / span
    near = unit[likelihood > NEGLIGIBLE * likelihood.max()]
    room = 0.3 * np.ptp(near, axis=0) + 0.03
    first, last = np.maximum(near.min(axis=0) - room, 0.0), np.minimum(near.max(axis=0) + room, 1.0)
    x, y = np.linspace(first[0], last[0], 41), np.linspace(first[1], last[1], 29)
    triangles, mesh = Triangulation(*unit.T), np.meshgrid(x, y)
    surface = LinearTriInterpolator(triangles, rms)(*mesh)
    log_likelihood = LinearTriInterpolator(triangles, np.log(np.maximum(likelihood, 1e-12)))(*mesh)
    te_km, break_km = np.exp(low[0] + x * span[0]) / 1e3, (low[1] + y * span[1]) / 1e3

    figure = new_figure(3.5)
    axes = figure.add_axes((0.105, 0.145, 0.74, 0.74))
    _tidy(axes)
    axes.grid(False)
    # Levels crowd near the best fit, where the answer is decided.
    levels = np.unique(np.quantile(surface.compressed(), [0.0, 0.05, 0.1, 0.2, 0.35, 0.5, 0.75, 1.0]))
    shades = LinearSegmentedColormap.from_list("downwarp misfit", ["#ffffff", PLATE_PALE, PLATE, "#123f4c"])
    if levels.size > 1:
        filled = axes.contourf(te_km, break_km, surface, levels=levels, cmap=shades, norm=_even_norm(levels))
        bar = figure.colorbar(filled, cax=figure.add_axes((0.865, 0.145, 0.022, 0.74)), spacing="uniform", ticks=levels)
        bar.ax.set_yticklabels([number(level) for level in levels])
        bar.ax.tick_params(labelsize=_TEXT - 0.5, colors=INK, length=2)
        bar.set_label(tr("rms residual, m"), size=_TEXT, color=INK)
        bar.outline.set_edgecolor(FAINT)
    handles = []
    for share, style in ((0.5, "-"), (0.1, "--"), (0.01, ":")):
        if np.ma.min(log_likelihood) < np.log(share) < np.ma.max(log_likelihood):
            level = {"levels": [np.log(share)], "colors": [LOAD], "linestyles": [style], "linewidths": 1.8}
            axes.contour(te_km, break_km, log_likelihood, **level)
            words = tr("likelihood {share:g} of its peak", share=share)
            handles.append(Line2D([], [], color=LOAD, linestyle=style, linewidth=1.8, label=words))
    if fit.break_position.value is not None and fit.thickness.value is not None:
        handles += axes.plot(
            [fit.thickness.value / 1e3], [fit.break_position.value / 1e3], linestyle="none", marker="P", markersize=9,
            markerfacecolor="white", markeredgecolor=INK, label=tr("most probable"), clip_on=False, zorder=5,
        )  # fmt: skip
    _log_km(axes, "x", float(te_km[0]), float(te_km[-1]))
    _name(axes, tr("elastic thickness, km (logarithmic)"), tr("break, km from the line's start"))
    axes.legend(handles=handles, ncol=4, **{**_ABOVE, "fontsize": _TEXT - 0.5, "columnspacing": 1.2})
    return figure


def _even_norm(levels: np.ndarray) -> Any:
    from matplotlib.colors import BoundaryNorm

    return BoundaryNorm(levels, 256)


def _interval_bar(
    axes: Any,
    at: float,
    estimate: Estimate,
    limits: tuple[float, float],
    upright: bool,
    color: str,
    face: str = "white",
    linewidth: float = 2.2,
) -> None:
    """One interval with its value, in km, at a place across the bar; an open side ends in an arrow at the limit."""
    if estimate.value is None:
        return

    def plot(along: list[float], **style: Any) -> None:
        across = [at] * len(along)
        axes.plot(*((across, along) if upright else (along, across)), **style)

    low = limits[0] if estimate.low is None else estimate.low / 1e3
    high = limits[1] if estimate.high is None else estimate.high / 1e3
    plot([low, high], linewidth=linewidth, color=color, solid_capstyle="butt", zorder=4)
    closed, arrows = ("_", "v^") if upright else ("|", "<>")
    for end, side, arrow in ((low, estimate.low, arrows[0]), (high, estimate.high, arrows[1])):
        marker = arrow if side is None else closed
        plot([end], linestyle="none", marker=marker, markersize=6, color=color, zorder=4, clip_on=False)
    edge = {"markeredgecolor": color, "markeredgewidth": 1.4, "markersize": 5.5}
    plot([estimate.value / 1e3], linestyle="none", marker="o", markerfacecolor=face, zorder=5, **edge)


def choices_figure(result: FitResult) -> Any | None:
    """How the answer moves with each reasonable choice: one interval per choice beside the answer's, which is the first
    row; None without any."""
    rows: Sequence[ChoiceRow] = result.choices
    if not rows:
        return None
    options = result.best.bent.problem.options
    limits = _thickness_limits([row.thickness for row in rows], (options.te_from, options.te_to))
    height = 0.55 + 0.235 * len(rows)
    figure = new_figure(height)
    bottom = 0.46 / height
    axes = figure.add_axes((0.40, bottom, 0.575, 1.0 - bottom - 0.08 / height))
    _tidy(axes)
    axes.grid(False, axis="y")
    answer = result.best.thickness
    if is_resolved(result.best):
        low = limits[0] if answer.low is None else answer.low / 1e3
        high = limits[1] if answer.high is None else answer.high / 1e3
        axes.axvspan(low, high, alpha=0.55, zorder=1, **_BAND)
    for place, row in enumerate(rows):
        if row.thickness.value is None or (row.thickness.low is None and row.thickness.high is None):
            middle = np.sqrt(limits[0] * limits[1])
            axes.text(middle, place, tr("not resolved"), ha="center", va="center", fontsize=_TEXT, color=INK)
        else:
            colours = (PLATE, PLATE) if place == 0 else (INK, "white")
            _interval_bar(axes, place, row.thickness, limits, False, color=colours[0], face=colours[1])
    axes.set_yticks(range(len(rows)))
    labels = [": ".join(translated(words) for words in (row.choice, row.option) if words) for row in rows]
    axes.set_yticklabels([plain(_shortened(label, 44)) for label in labels])
    axes.set_ylim(len(rows) - 0.4, -0.6)
    axes.spines["left"].set_visible(False)
    axes.tick_params(axis="y", length=0, pad=9)
    _log_km(axes, "x", *limits)
    _name(axes, tr("elastic thickness, km (logarithmic)"))
    return figure


def _shortened(text: str, most: int) -> str:
    return text if len(text) <= most else text[: most - 1].rstrip() + "…"


@dataclass(frozen=True)
class StrikeRow:
    """What the figure along strike shows of one transect."""

    number: int
    """Its number in the report, from 1."""
    along: float | None
    """Distance along strike, m."""
    thickness: Estimate
    """m; its value is None where it is not resolved."""
    break_position: float | None
    """m from the line's start."""
    bulge: float | None
    """m from the line's start."""
    end_shear: Estimate
    """N/m, positive down; its value is None where there is none."""


def strike_figure(rows: Sequence[StrikeRow], te_range: tuple[float, float]) -> Any | None:
    """Thickness, break, bulge and end shear from transect to transect; None for fewer than two transects.

    ``te_range``: search range of the thickness, m, at which intervals that the data leave open end in an arrow.
    """
    if len(rows) < 2:
        return None
    known_along = all(row.along is not None for row in rows)
    x = np.array([row.number if row.along is None or not known_along else row.along / 1e3 for row in rows], dtype=float)
    order = np.argsort(x, kind="stable")
    has_break = any(row.break_position is not None for row in rows)
    has_bulge = any(row.bulge is not None for row in rows)
    has_shear = any(row.end_shear.value is not None for row in rows)
    panels = 1 + (has_break or has_bulge) + has_shear
    height = 0.5 + 1.75 * panels
    figure = new_figure(height)
    grid = figure.add_gridspec(panels, 1, left=0.115, right=0.985, hspace=0.16)
    grid.update(top=1.0 - 0.22 / height, bottom=0.5 / height)
    first = figure.add_subplot(grid[0])
    _tidy(first)
    limits = _thickness_limits([row.thickness for row in rows], te_range)
    linewidth = 1.0 if len(rows) > 60 else 2.2
    for at, row in zip(x, rows):
        if row.thickness.value is None:
            first.plot([at], [limits[0]], clip_on=False, zorder=5, **_PICK)
        else:
            _interval_bar(first, at, row.thickness, limits, True, color=PLATE, linewidth=linewidth)
    _log_km(first, "y", *limits)
    _name(first, y=tr("elastic thickness, km"))
    axes = [first]
    if has_break or has_bulge:
        places = figure.add_subplot(grid[1], sharex=first)
        _tidy(places)
        for words, values, style in (
            (tr("break"), [row.break_position for row in rows], {"color": LOAD, "marker": "s", "linestyle": "--"}),
            (tr("bulge"), [row.bulge for row in rows], {"color": PLATE, "marker": "^", "linestyle": "-"}),
        ):
            km = np.array([np.nan if value is None else value / 1e3 for value in values])
            if np.isfinite(km).any():
                places.plot(x[order], km[order], markersize=5, linewidth=1.0, markeredgecolor=INK, label=words, **style)
        places.legend(loc="best", ncol=2, **{**_LEGEND, "frameon": True}, framealpha=0.85, edgecolor="none")
        _name(places, y=tr("from line's start, km"))
        axes.append(places)
    if has_shear:
        shear = figure.add_subplot(grid[panels - 1], sharex=first)
        _tidy(shear)
        for at, row in zip(x, rows):
            value = row.end_shear
            if value.value is None:
                continue
            if value.low is not None and value.high is not None:
                sides = [value.low / 1e12, value.high / 1e12]
                shear.plot([at, at], sides, color=INK, linewidth=1.4, marker="_", markersize=6)
            shear.plot([at], [value.value / 1e12], marker="o", markerfacecolor="white", markeredgecolor=INK)
        shear.axhline(0.0, color=FAINT, linewidth=0.8)
        _name(shear, y=tr("end shear, 10¹² N/m"))
        axes.append(shear)
    for each in axes[:-1]:
        each.tick_params(labelbottom=False)
    if not known_along:
        from matplotlib.ticker import MaxNLocator

        axes[-1].xaxis.set_major_locator(MaxNLocator(integer=True, nbins=16))
    _name(axes[-1], tr("distance along strike, km") if known_along else tr("number of the transect"))
    figure.align_ylabels()
    return figure


def _thickness_limits(estimates: Sequence[Estimate], te_range: tuple[float, float]) -> tuple[float, float]:
    """Limits of an axis of thickness, km: what the estimates span and some room, within the search range.

    Estimates that are open on both sides do not count: their value says nothing.
    """
    told = [each for each in estimates if each.low is not None or each.high is not None]
    sides = [side for each in told for side in (each.value, each.low, each.high) if side is not None]
    if not sides:
        return te_range[0] / 1e3, te_range[1] / 1e3
    return max(te_range[0], min(sides) / 1.6) / 1e3, min(te_range[1], 1.6 * max(sides)) / 1e3


def map_figure(lines: Sequence[tuple[int, np.ndarray]], guide: np.ndarray | None = None) -> Any | None:
    """A sketch of lines given as (number, longitude and latitude in degrees (n, 2)): north up, equal scale; None for
    none.

    The plane is an azimuthal equidistant projection about the middle of the lines. ``guide``: a line drawn dashed.
    """
    if not lines:
        return None
    from pyproj import Proj

    project, middle = _local_plane(lines, Proj)
    flat = [(label, project(line)) for label, line in lines]
    every = np.concatenate([xy for _, xy in flat] + ([] if guide is None else [project(guide)]))
    low, high = every.min(axis=0), every.max(axis=0)
    size = np.maximum(high - low, 0.35 * max((high - low).max(), 1.0))
    centre = 0.5 * (low + high)
    low, high = centre - 0.60 * size, centre + 0.60 * size
    frame = np.array([5.6, 4.2])
    scale = float((frame / (high - low)).min())
    width, height = (high - low) * scale
    total = np.array([_WIDTH, height + 0.55])
    figure = new_figure(total[1])
    axes = figure.add_axes(((total[0] - width) / 2 / total[0], 0.4 / total[1], width / total[0], height / total[1]))
    _tidy(axes)
    axes.grid(False)
    axes.set_xlim(low[0], high[0])
    axes.set_ylim(low[1], high[1])
    for spine in axes.spines.values():
        spine.set_visible(True)
    _graticule(axes, project, middle, low, high)
    if guide is not None:
        axes.plot(*project(guide).T, color=INK, linewidth=1.4, linestyle=(0, (4, 2)), zorder=3)
    every_nth = -(-len(flat) // 25)
    few = len(flat) <= 60
    dot = {"color": LOAD, "markersize": 4.5 if few else 2.0, "markeredgecolor": INK, "markeredgewidth": 0.6}
    for index, (label, xy) in enumerate(flat):
        axes.plot(*xy.T, color=PLATE, linewidth=1.6 if few else 0.9, zorder=4, solid_capstyle="round")
        axes.plot(*xy[0], marker="o", zorder=5, **dot)
        if index % every_nth == 0:
            outward = xy[0] - xy[min(1, len(xy) - 1)]
            outward = outward / max(float(np.hypot(*outward)), 1e-9)
            axes.annotate(
                str(label), xy[0], xytext=tuple(9.0 * outward), textcoords="offset points", ha="center", va="center",
                fontsize=_TEXT, color=INK, zorder=6, bbox=_PLAQUE,
            )  # fmt: skip
    _scale_and_north(figure, axes, low, high, total)
    return figure


def _local_plane(lines: Sequence[tuple[int, np.ndarray]], projection: Any) -> tuple[Any, tuple[float, float]]:
    """A function from (n, 2) degrees to km in a plane about the middle of the lines, and that middle, degrees."""
    longitude, latitude = np.radians(np.concatenate([line for _, line in lines])).T
    x, y = np.mean(np.cos(latitude) * np.cos(longitude)), np.mean(np.cos(latitude) * np.sin(longitude))
    z = np.mean(np.sin(latitude))
    middle = float(np.degrees(np.arctan2(y, x))), float(np.degrees(np.arctan2(z, np.hypot(x, y))))
    plane = projection(f"+proj=aeqd +lon_0={middle[0]:.6f} +lat_0={middle[1]:.6f} +ellps=WGS84 +units=km")

    def project(line: np.ndarray) -> np.ndarray:
        return np.column_stack(plane(*np.asarray(line, dtype=float).T))

    return project, middle


def _graticule(axes: Any, project: Any, middle: tuple[float, float], low: np.ndarray, high: np.ndarray) -> None:
    """Faint meridians and parallels, labelled where they meet the frame's bottom and left."""
    reach = float(np.hypot(*(high - low))) / 111.2
    cosine = max(np.cos(np.radians(middle[1])), 0.05)
    steps = np.array([0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 20.0, 45.0])
    for across in (True, False):
        span = float((high - low)[0 if across else 1]) / 111.2 / (cosine if across else 1.0)
        step = steps[min(int(np.searchsorted(steps, span / 5.0)), steps.size - 1)]
        centre = middle[0 if across else 1]
        wide = min(reach / (cosine if across else 1.0), 180.0)
        values = np.arange(np.ceil((centre - wide) / step), np.floor((centre + wide) / step) + 1) * step
        for value in values:
            if not across and abs(value) >= 90.0:
                continue
            if across:
                line = np.column_stack([np.full(61, value), np.linspace(middle[1] - reach, middle[1] + reach, 61)])
            else:
                half = min(reach / cosine, 179.0)
                line = np.column_stack([np.linspace(middle[0] - half, middle[0] + half, 61), np.full(61, value)])
            line[:, 1] = np.clip(line[:, 1], -89.9, 89.9)
            xy = project(line)
            axes.plot(*xy.T, color="#d5dde0", linewidth=0.6, zorder=1)
            along, edge = (0, 1) if across else (1, 0)
            crossing = np.flatnonzero(np.diff(np.sign(xy[:, edge] - low[edge])) != 0)
            if crossing.size:
                first = xy[crossing[0]], xy[crossing[0] + 1]
                share = (low[edge] - first[0][edge]) / (first[1][edge] - first[0][edge])
                at = first[0][along] + share * (first[1][along] - first[0][along])
                if low[along] + 0.02 * (high - low)[along] < at < high[along] - 0.02 * (high - low)[along]:
                    point, beside = ((at, low[1]), (0, -4)) if across else ((low[0], at), (-4, 0))
                    axes.annotate(
                        _degrees(value, across), point, xytext=beside, textcoords="offset points", color=INK,
                        fontsize=_TEXT - 1, annotation_clip=False, ha="center" if across else "right",
                        va="top" if across else "center",
                    )  # fmt: skip
    axes.set_xticks([])
    axes.set_yticks([])


def _degrees(value: float, longitude: bool) -> str:
    value = (value + 180.0) % 360.0 - 180.0 if longitude else value
    side = (tr("E") if value > 0 else tr("W")) if longitude else (tr("N") if value > 0 else tr("S"))
    return f"{abs(value):.4g}°{'' if abs(value) < 1e-9 or abs(value) == 180.0 else side}"


def _scale_and_north(figure: Any, axes: Any, low: np.ndarray, high: np.ndarray, total: np.ndarray) -> None:
    """Scale bar below the frame and a north arrow beside it."""
    room = 0.3 * (high[0] - low[0])
    magnitude = 10.0 ** np.floor(np.log10(room))
    length = magnitude * max(factor for factor in (1.0, 2.0, 5.0) if factor * magnitude <= room)
    box = axes.get_position()
    wide = box.width * length / (high[0] - low[0])
    margin = figure.add_axes((box.x1 + 0.01, box.y0, 0.99 - box.x1 - 0.01, box.height))
    margin.set_axis_off()
    margin.set_xlim(0.0, 1.0)
    margin.set_ylim(0.0, 1.0)
    margin.annotate("", (0.5, 0.97), (0.5, 0.80), arrowprops={"arrowstyle": "-|>", "color": INK, "linewidth": 1.4})
    margin.text(0.5, 0.78, tr("north"), ha="center", va="top", fontsize=_TEXT, color=INK)
    bar = figure.add_axes((box.x1 - wide, 0.03 / total[1], wide, 0.2 / total[1]))
    bar.set_axis_off()
    bar.set_xlim(0.0, 1.0)
    bar.set_ylim(0.0, 1.0)
    bar.plot([0.0, 0.0, 1.0, 1.0], [0.95, 0.7, 0.7, 0.95], color=INK, linewidth=1.4, clip_on=False)
    bar.text(0.5, 0.6, f"{length:g} km", ha="center", va="top", fontsize=_TEXT, color=INK)
