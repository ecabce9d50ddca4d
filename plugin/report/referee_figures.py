"""Figures of a fitted plate beside gravity, strength and age; drawn like those of `figures`."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from ..core.age_check import AgeCheck
from ..core.constants import MILLIGAL, MYR
from ..core.gravity_check import BOUGUER, GravityCheck
from ..core.joint import GRAVITY, JOINT, SURFACE, Answer, JointFit
from ..core.strength import elastic_stress
from ..core.strength_check import StrengthCheck
from ..core.wording import say
from ..translation import tr, translated
from .figures import (
    FAINT,
    INK,
    LOAD,
    LOAD_PALE,
    PLATE,
    PLATE_PALE,
    _log_km,
    _name,
    _tidy,
    new_figure,
    plain,
)
from .words import number, stated

_SMALL = 7.5
_LEGEND = {"fontsize": _SMALL, "frameon": False, "labelcolor": INK}
_SOURCES = {
    SURFACE: (say("surface alone"), {"color": INK, "linestyle": ":", "linewidth": 1.6}),
    GRAVITY: (say("gravity alone"), {"color": LOAD, "linestyle": "--", "linewidth": 1.6}),
    JOINT: (say("both"), {"color": PLATE, "linestyle": "-", "linewidth": 2.2}),
}
_STYLES = ("-", "--", "-.", ":", (0, (1, 1)), (0, (6, 1, 1, 1, 1, 1)))
MOST_NAMES = 25
"""Transects up to which each is named in the figure of ages."""


def gravity_figure(check: GravityCheck) -> Any:
    """Anomaly along the transect, its parts, and the section of the crust below."""
    figure = new_figure(6.2)
    grid = figure.add_gridspec(3, 1, height_ratios=(2.2, 1.3, 1.6), hspace=0.34, left=0.105, right=0.985, top=0.95)
    grid.update(bottom=0.08)
    top, parts, section = (figure.add_subplot(each) for each in grid)
    km, unit = check.distance / 1e3, MILLIGAL.value
    for axes in (top, parts, section):
        _tidy(axes)
        axes.set_xlim(km[0], km[-1])
    bouguer = check.kind == BOUGUER
    seen = np.isfinite(check.observed)
    if seen.any():
        dots = {"linestyle": "none", "marker": "o", "markersize": 2.8}
        used, other = check.used, seen & ~check.used
        words = tr("observed, Bouguer") if bouguer else tr("observed, free-air")
        top.plot(km[used], check.observed[used] / unit, color=INK, label=words, **dots)
        if other.any():
            face = {"markerfacecolor": "white", "markeredgecolor": FAINT}
            top.plot(km[other], check.observed[other] / unit, label=tr("not compared"), **face, **dots)
        top.plot(km, check.predicted / unit, color=PLATE, linewidth=2.0, label=tr("plate, with regional"))
    model = check.model
    if not seen.any():
        top.plot(km, model.free_air / unit, color=PLATE, linewidth=2.0, label=tr("free-air, plate"))
        shift = float(np.median(model.bouguer - model.free_air)) / unit
        words = tr("Bouguer, plate, less {shift} mGal", shift=number(shift))
        top.plot(km, model.bouguer / unit - shift, color=LOAD, linewidth=1.4, linestyle="--", label=words)
    _name(top, y=tr("Bouguer anomaly, mGal") if bouguer and seen.any() else tr("free-air anomaly, mGal"))
    top.legend(loc="lower center", bbox_to_anchor=(0.5, 1.0), ncol=3, **_LEGEND)
    for values, words, style in (
        (model.load, tr("load"), {"color": LOAD, "linestyle": "--"}),
        (model.surface, tr("bent surface"), {"color": INK, "linestyle": "-."}),
        (model.moho, tr("base of the crust"), {"color": PLATE, "linestyle": "-"}),
    ):
        if np.any(values):
            parts.plot(km, values / unit, linewidth=1.4, label=words, **style)
    parts.axhline(0.0, color=FAINT, linewidth=0.8)
    parts.legend(loc="lower center", bbox_to_anchor=(0.5, 0.99), ncol=3, **_LEGEND)
    _name(parts, y=tr("its parts, mGal"))
    _draw_section(section, check)
    figure.align_ylabels()
    return figure


def _draw_section(axes: Any, check: GravityCheck) -> None:
    plate, crust = check.section, check.crust
    at = plate.distance / 1e3
    sunk = (plate.undeflected - plate.deflection) / 1e3
    base = sunk - crust.thickness / 1e3
    top = plate.load_top / 1e3
    bottom = float(base.min()) - 2.0
    axes.fill_between(at, base, sunk, facecolor=PLATE_PALE, edgecolor=PLATE, linewidth=0.8)
    axes.fill_between(at, bottom, base, facecolor="#e7ebec", edgecolor="none")
    rock = (plate.infill > crust.water) & (plate.deflection > 0)
    dots = {"facecolor": "none", "edgecolor": FAINT, "hatch": "....", "linewidth": 0.0}
    axes.fill_between(at, sunk, plate.undeflected / 1e3, where=rock, **dots)
    if plate.under_load.any():
        axes.fill_between(
            at, plate.level / 1e3, top, where=plate.under_load, facecolor=LOAD_PALE, edgecolor=LOAD, hatch="////",
            linewidth=0.0,
        )  # fmt: skip
    axes.axhline(0.0, color=PLATE, linewidth=0.8, linestyle=(0, (6, 3)))
    for height, words in (
        (float(np.median(sunk)) - 0.5 * crust.thickness / 1e3, tr("crust {density} kg/m³", density=stated(crust.crust))),
        (bottom + 0.35 * (float(np.median(base)) - bottom), tr("mantle {density} kg/m³", density=stated(crust.mantle))),
    ):
        axes.text(0.985, height, words, transform=axes.get_yaxis_transform(), ha="right", va="center", fontsize=_SMALL)
    axes.set_ylim(bottom, max(1.0, float(top.max()) + 1.0, float(sunk.max()) + 1.0))
    _name(axes, tr("distance from the line's start, km"), tr("elevation, km"))


def joint_figure(joint: JointFit) -> Any:
    """What surface, gravity and both say about thickness and load density, or of thickness alone without a load."""
    answers = (joint.surface, joint.gravity, joint.joint)
    return _plane(answers) if joint.joint.density.value is not None else _densities(answers)


def _plane(answers: Sequence[Answer]) -> Any:
    from matplotlib.lines import Line2D

    figure = new_figure(3.9)
    axes = figure.add_axes((0.105, 0.125, 0.62, 0.76))
    _tidy(axes)
    handles = []
    te_sides, rho_sides = [], []
    for answer in answers:
        words, style = _SOURCES[answer.source]
        level = _level(answer)
        te_km = answer.te_grid / 1e3
        drawn = {"colors": [style["color"]], "linestyles": [style["linestyle"]], "linewidths": [style["linewidth"]]}
        axes.contour(te_km, answer.rho_grid, answer.log_density.T, levels=[level], **drawn)
        inside = answer.log_density > level
        te_sides += [te_km[inside.any(axis=1)].min(), te_km[inside.any(axis=1)].max()]
        rho_sides += [answer.rho_grid[inside.any(axis=0)].min(), answer.rho_grid[inside.any(axis=0)].max()]
        handles.append(Line2D([], [], label=f"{translated(words)}\n{_answer_words(answer)}", **style))
    best = answers[-1]
    if best.thickness.value is not None:
        axes.plot(
            [best.thickness.value / 1e3], [best.density.value], linestyle="none", marker="P", markersize=8,
            markerfacecolor="white", markeredgecolor=INK, zorder=5,
        )  # fmt: skip
    _log_km(axes, "x", min(te_sides) / 1.06, max(te_sides) * 1.06)
    room = 0.08 * (max(rho_sides) - min(rho_sides))
    axes.set_ylim(min(rho_sides) - room, max(rho_sides) + room)
    _name(axes, tr("elastic thickness, km (logarithmic)"), tr("density of the load, kg/m³"))
    figure.legend(handles=handles, loc="center left", bbox_to_anchor=(0.735, 0.5), labelspacing=1.3, **_LEGEND)
    return figure


def _level(answer: Answer, share: float = 0.9) -> float:
    """ln density of the contour that holds ``share`` of the probability."""
    ordered = np.sort(np.exp(answer.log_density), axis=None)[::-1]
    held = np.cumsum(ordered) / ordered.sum()
    return float(np.log(ordered[min(int(np.searchsorted(held, share)), ordered.size - 1)]))


def _densities(answers: Sequence[Answer]) -> Any:
    figure = new_figure(2.6)
    axes = figure.add_axes((0.105, 0.19, 0.62, 0.76))
    _tidy(axes)
    sides = []
    for answer in answers:
        words, style = _SOURCES[answer.source]
        density = answer.te_density
        axes.plot(answer.te_grid / 1e3, density, label=f"{translated(words)}\n{_answer_words(answer)}", **style)
        sides += list(answer.te_grid[density > 0.01] / 1e3)
    _log_km(axes, "x", min(sides) / 1.06, max(sides) * 1.06)
    axes.set_ylim(0.0, 1.06)
    _name(axes, tr("elastic thickness, km (logarithmic)"), tr("density over its peak"))
    handles, labels = axes.get_legend_handles_labels()
    figure.legend(handles, labels, loc="center left", bbox_to_anchor=(0.735, 0.55), labelspacing=1.3, **_LEGEND)
    return figure


def _answer_words(answer: Answer) -> str:
    te, rho = answer.thickness, answer.density
    words = f"{number(te.value / 1e3)} km" if te.value is not None else tr("no thickness")
    return words + ("" if rho.value is None else f", {number(rho.value, 4)} kg/m³")


def strength_figure(check: StrengthCheck) -> Any:
    """Strength and stress along depth, and moment against curvature with the fitted plate on it."""
    figure = new_figure(4.3)
    left = figure.add_axes((0.085, 0.12, 0.41, 0.68))
    right = figure.add_axes((0.60, 0.12, 0.385, 0.68))
    for axes in (left, right):
        _tidy(axes)
    found = check.verdict
    depth = found.strength.depth / 1e3
    tension, compression = found.strength.tension / 1e6, -found.strength.compression / 1e6
    shade = {"facecolor": PLATE_PALE, "edgecolor": PLATE, "linewidth": 1.0}
    left.fill_betweenx(depth, compression, tension, label=tr("strength"), **shade)
    left.plot(found.bent.stress / 1e6, depth, color=INK, linewidth=1.6, label=tr("stress as far as it holds"))
    inside = np.linspace(0.0, found.elastic_thickness, 50)
    stress = elastic_stress(inside, found.curvature, found.elastic_thickness, check.elastic) / 1e6
    left.plot(stress, inside / 1e3, color=LOAD, linewidth=1.8, linestyle="--", label=tr("stress of the elastic plate"))
    left.axhline(
        found.mechanical / 1e3, color=PLATE, linewidth=1.0, linestyle=":",
        label=tr("mechanical thickness, {thickness} km", thickness=number(found.mechanical / 1e3)),
    )  # fmt: skip
    reach = 1.15 * max(float(np.abs(stress).max()), float(tension.max()), float(-compression.min()))
    left.set_xlim(-reach, reach)
    left.set_ylim(max(depth[-1], 1.1 * found.elastic_thickness / 1e3), 0.0)
    left.axvline(0.0, color=FAINT, linewidth=0.8)
    _name(left, tr("differential stress, MPa (tension +)"), tr("depth in the plate, km"))
    left.legend(loc="lower center", bbox_to_anchor=(0.5, 1.0), ncol=1, **_LEGEND)
    curve = check.curve
    elastic = check.elastic.rigidity(found.elastic_thickness) * curve.curvature
    right.plot(curve.curvature, curve.moment, color=PLATE, linewidth=2.0, label=tr("plate of that strength"))
    right.plot(
        curve.curvature, elastic, color=LOAD, linewidth=1.6, linestyle="--",
        label=tr("elastic plate, {thickness} km", thickness=number(found.elastic_thickness / 1e3)),
    )  # fmt: skip
    right.axhline(found.moment_limit, color=PLATE, linewidth=1.0, linestyle=":", label=tr("largest moment it carries"))
    right.plot(
        [abs(found.curvature)], [found.elastic_moment], linestyle="none", marker="o", markersize=7,
        markerfacecolor="white", markeredgecolor=LOAD, markeredgewidth=1.8, zorder=5, label=tr("fitted plate"),
    )  # fmt: skip
    right.set_xscale("log")
    right.set_yscale("log")
    right.set_xlim(curve.curvature[0], curve.curvature[-1])
    # Two decades at least, so that the axis carries numbers.
    largest = max(found.moment_limit, found.elastic_moment)
    right.set_ylim(min(0.7 * float(curve.moment.min()), 0.01 * largest), 3.0 * largest)
    _name(right, tr("curvature, 1/m (logarithmic)"), tr("moment, N (logarithmic)"))
    right.legend(loc="lower center", bbox_to_anchor=(0.5, 1.0), ncol=1, **_LEGEND)
    return figure


def age_figure(ages: np.ndarray, curves: dict[float, np.ndarray], checks: Sequence[AgeCheck], at_loading: bool) -> Any:
    """Depth of isotherms against age, with the fitted thicknesses on it. ``ages``: s; ``curves``: depth, m, by degrees
    C."""
    figure = new_figure(4.3)
    axes = figure.add_axes((0.085, 0.115, 0.90, 0.78))
    _tidy(axes)
    handles = []
    deepest = 0.0
    for place, (temperature, depth) in enumerate(curves.items()):
        colour = (PLATE, INK)[place % 2]
        handles += axes.plot(
            ages / MYR, depth / 1e3, color=colour, linestyle=_STYLES[place % len(_STYLES)], linewidth=1.4,
            label=f"{stated(temperature)} °C",
        )  # fmt: skip
        deepest = max(deepest, float(np.nanmax(depth)) / 1e3 if np.isfinite(depth).any() else 0.0)
    values = [check.thickness.value / 1e3 for check in checks if check.thickness.value is not None]
    bottom = 1.12 * max([deepest, *values])
    for check, at in zip(checks, _side_by_side(checks, float(ages[-1]) / MYR)):
        te = check.thickness
        if te.value is None:
            continue
        low = 0.0 if te.low is None else te.low / 1e3
        high = bottom if te.high is None else te.high / 1e3
        axes.plot([at, at], [low, high], color=LOAD, linewidth=2.0, zorder=3, solid_capstyle="butt")
        for end, side, arrow in ((low, te.low, "^"), (high, te.high, "v")):
            marker = arrow if side is None else "_"
            axes.plot([at], [end], color=LOAD, marker=marker, markersize=7, zorder=3, clip_on=False)
        dot = axes.plot(
            [at], [te.value / 1e3], linestyle="none", marker="o", markersize=6, markerfacecolor="white",
            markeredgecolor=LOAD, markeredgewidth=1.8, zorder=4,
        )  # fmt: skip
        if check is checks[0]:
            dot[0].set_label(tr("elastic thickness and its interval"))
            handles += dot
    if len(checks) <= MOST_NAMES:
        _label_ages(axes, checks, float(ages[-1]) / MYR)
    axes.set_xlim(0.0, float(ages[-1]) / MYR)
    axes.set_ylim(bottom, 0.0)
    ages_name = tr("age of the plate at loading, Myr") if at_loading else tr("age of the plate, Myr")
    _name(axes, ages_name, tr("depth, km"))
    axes.legend(handles=handles, loc="lower center", bbox_to_anchor=(0.5, 1.0), ncol=min(len(handles), 5), **_LEGEND)
    return figure


def _side_by_side(checks: Sequence[AgeCheck], width: float) -> list[float]:
    """Ages, Myr, those of one age moved apart by a little so that their bars do not hide each other."""
    ages = [round(check.age_at_loading / MYR, 1) for check in checks]
    seen: dict[float, int] = {}
    places = []
    for age in ages:
        rank, count = seen.get(age, 0), ages.count(age)
        seen[age] = rank + 1
        places.append(age + (rank - 0.5 * (count - 1)) * min(0.008, 0.1 / count) * width)
    return places


def _label_ages(axes: Any, checks: Sequence[AgeCheck], oldest: float) -> None:
    """Names beside the dots, to the left of them where the axis (up to ``oldest``, Myr) ends soon; those at one age stand
    in one list."""
    by_age: dict[float, list[tuple[float, str]]] = {}
    for check in checks:
        if check.thickness.value is not None:
            entry = (check.thickness.value / 1e3, plain(check.name))
            by_age.setdefault(round(check.age_at_loading / MYR, 1), []).append(entry)
    for at, group in by_age.items():
        words = "\n".join(name for _, name in group[:6]) + ("\n…" if len(group) > 6 else "")
        lowest = min(thickness for thickness, _ in group)
        left = at > 0.75 * oldest
        away = 7 + 4 * len(group)
        paper = {"facecolor": "white", "edgecolor": "none", "alpha": 0.85, "pad": 1.0}
        axes.annotate(
            words, (at, lowest), xytext=(-away if left else away, 0), textcoords="offset points", fontsize=_SMALL,
            color=INK, va="center", ha="right" if left else "left", bbox=paper,
        )  # fmt: skip
