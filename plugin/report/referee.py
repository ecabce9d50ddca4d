"""Reports that weigh a fitted plate against independent evidence: gravity, strength, age."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path

import numpy as np

from ..core.age_check import AgeCheck
from ..core.constants import (
    GRAVITY_CONSTANTS,
    HEAT_CONSTANTS,
    MILLIGAL,
    MYR,
    STRENGTH_CONSTANTS,
    Constant,
)
from ..core.cooling import STEADY, Geotherm
from ..core.crust import HELD, MIRRORED
from ..core.gravity_check import GravityCheck
from ..core.joint import JointFit
from ..core.result import Estimate
from ..core.strength import CONTINENTAL
from ..core.strength_check import TOO_MUCH, YIELDING, StrengthCheck
from ..core.wording import Said, listed, say
from ..translation import joined, tr, translated
from . import referee_figures
from .page import MOST_FIGURES, Report, _table, escaped
from .words import DASH, interval_words, number, stated

_BEFORE = {MIRRORED: say("its mirror image"), HELD: say("its first values, held")}


class RefereeReport(Report):
    """A page of sections and failures, in the form of the fit's report."""

    def __init__(self, inputs: Mapping[str, str], versions: Mapping[str, str], title: str) -> None:
        super().__init__(inputs, versions, title)
        self._answers_said: list[tuple[str, str]] = []
        self._closing: list[str] = []
        self._opening: list[str] = []

    def page(self) -> str:
        """The whole page."""
        return self.document((self._answer_section(), *self._opening, *self._sections, *self._closing))

    def say(self, name: str, sentence: str) -> None:
        """Add one transect's answer, in one sentence."""
        self._answers_said.append((name, sentence))

    def open_with(self, section: str) -> None:
        """Add a section before those of the transects."""
        self._opening.append(section)

    def section(self, name: str, sentence: str, remarks: Sequence[str], parts: Iterable[str]) -> None:
        """Add a transect's section, as long as there are not too many."""
        if len(self._sections) >= MOST_FIGURES:
            return
        said = "".join(f"<li>{escaped(remark)}</li>" for remark in remarks)
        self._sections.append(
            "\n".join(
                part
                for part in (
                    f'<section class="transect"><h2>{escaped(name)}</h2>',
                    f'<p class="headline">{escaped(sentence)}</p>',
                    f'<ul class="remarks">{said}</ul>' if said else "",
                    *parts,
                    "</section>",
                )
                if part
            )
        )

    def close(self, method: Sequence[str], cautions: Sequence[str], constants: Sequence[Constant]) -> None:
        """Add method (paragraphs as HTML), cautions and constants."""
        paragraphs = "\n".join(f"<p>{translated(paragraph)}</p>" for paragraph in method)
        head = (tr("constant"), tr("symbol"), tr("value"), tr("unit"), tr("source"))
        rows = [
            (escaped(each.name), escaped(each.symbol), f"{each.value:.6g}", escaped(each.unit), escaped(each.source))
            for each in constants
        ]
        items = "".join(f"<li>{escaped(each)}</li>" for each in cautions)
        self._closing += [
            f"<section><h2>{tr('Method')}</h2>{paragraphs}</section>",
            f"<section><h2>{tr('Assumptions and cautions')}</h2><ul>{items}</ul></section>",
            f"<section><h2>{tr('Published constants')}</h2>"
            + _table(head, rows, tr("Constants"), free=4)
            + "</section>",
        ]

    def _answer_section(self) -> str:
        shown = self._answers_said[:MOST_FIGURES]
        items = "".join(f"<li><b>{escaped(name)}</b>: {escaped(sentence)}</li>" for name, sentence in shown)
        more = len(self._answers_said) - len(shown)
        words = tr("{count} more transects are in the output layers.", count=more)
        rest = f"<p>{words}</p>" if more else ""
        failed = _table(
            (tr("transect"), tr("why there is no answer")),
            [(escaped(name), escaped(reason)) for name, reason in self._failures],
            tr("Not answered"),
            free=0,
        )
        heading = tr("Answer")
        beside = f'<p class="note">{translated(_BESIDE)}</p>'
        return f'<section><h2>{heading}</h2><ol class="answers">{items}</ol>{beside}{rest}{failed}</section>'


_BESIDE = say(
    "These answers hold for an elastic, steady plate without faulting and without a history of loading or of bending; see "
    "the assumptions and cautions below. They are no basis for drilling, navigation, siting or engineering."
)
"""Beside every answer."""
_ALWAYS = (
    say(
        "The plate is elastic and steady: no creep, no history of loading or of bending, no heat. The thickness is that "
        "of the elastic plate which bends alike, not a layer."
    ),
    say("No faulting: bending faults, fracture zones and the weakness that they leave are not in the model."),
    say(
        "This is a scientific estimate. It is no basis for drilling, navigation, siting or engineering: those need "
        "licensed practice and the local codes."
    ),
)


def _write(report: RefereeReport, path: str | Path, failures: Sequence[tuple[str, str]]) -> None:
    for name, reason in failures:
        report.add_failure(name, reason)
    report.write(path)


def _interval(estimate: Estimate, scale: float, unit: str) -> str:
    if estimate.value is None:
        return DASH
    value, interval = number(estimate.value / scale, 4), interval_words(estimate, unit, scale, 4)
    return tr("{value} {unit} ({interval})", value=value, unit=unit, interval=interval)


# Gravity


def gravity_words(check: GravityCheck) -> str:
    """The answer of one transect in one plain sentence."""
    unit = MILLIGAL.value
    free_air = check.model.free_air / unit
    if check.rms is None:
        return tr(
            "The plate's free-air anomaly runs from {low} to {high} mGal; "
            "nothing observed was given to compare it with.",
            low=number(float(free_air.min())),
            high=number(float(free_air.max())),
        )
    left = np.var((check.observed - check.predicted)[check.used])
    share = 1.0 - left / max(float(np.var(check.observed[check.used])), 1e-300)
    words = tr(
        "Gravity of the plate as given misses the observed anomaly by {rms} mGal rms and explains {share} % of its "
        "variance.",
        rms=number(check.rms / unit),
        share=number(100 * max(float(share), 0.0), 3),
    )
    if check.joint is None:
        return words
    answer = check.joint.joint
    thickness = _interval(answer.thickness, 1e3, "km")
    if answer.density.value is None:
        return words + tr(" Surface and gravity together: elastic thickness {thickness}.", thickness=thickness)
    return words + tr(
        " Surface and gravity together: elastic thickness {thickness}, density of the load {density}.",
        thickness=thickness,
        density=_interval(answer.density, 1.0, "kg/m³"),
    )


def write_gravity_report(
    path: str | Path,
    checks: Iterable[GravityCheck],
    failures: Sequence[tuple[str, str]],
    inputs: Mapping[str, str],
    versions: Mapping[str, str],
) -> None:
    """Write the report of gravitytransects."""
    report = RefereeReport(inputs, versions, say("Gravity of bent plates"))
    for check in checks:
        sentence = gravity_words(check)
        report.say(check.name, sentence)
        parts = [
            report._figure(
                lambda check=check: referee_figures.gravity_figure(check),
                tr(
                    "Anomaly at sea level, on land at the ground: observed and of the plate; what the load, the bent "
                    "surface and the base of the crust give to it; and the section that they are made of, with the "
                    "load hatched, infill denser than water dotted and the sea's surface dashed."
                ),
                tr("Gravity along {name}", name=check.name),
            )
        ]
        if check.joint is not None:
            joint = check.joint
            parts += [
                report._figure(
                    lambda joint=joint: referee_figures.joint_figure(joint),
                    tr(
                        "What the bent surface, gravity and both together say. Lines hold nine tenths of the "
                        "probability (of a plate without a load: density of the elastic thickness); the cross is the "
                        "most probable of both."
                    ),
                    tr("Elastic thickness and load density of {name}", name=check.name),
                ),
                _joint_table(joint),
            ]
        parts.append(_crust_table(check))
        report.section(check.name, sentence, check.remarks, parts)
    report.close(_GRAVITY_METHOD, _GRAVITY_CAUTIONS, GRAVITY_CONSTANTS)
    _write(report, path, failures)


def _joint_table(joint: JointFit) -> str:
    rows = []
    for answer in (joint.surface, joint.gravity, joint.joint):
        rows.append((
            escaped(answer.source), _interval(answer.thickness, 1e3, "km"), _interval(answer.density, 1.0, "kg/m³"),
            number(answer.surface_rms),
            number(None if answer.gravity_rms is None else answer.gravity_rms / MILLIGAL.value),
        ))  # fmt: skip
    head = (
        tr("evidence"), tr("elastic thickness (interval)"), tr("density of the load (interval)"), tr("rms, m"),
        tr("rms, mGal"),
    )  # fmt: skip
    return _table(head, rows, tr("Surface, gravity and both"), numeric_from=3)


def _crust_table(check: GravityCheck) -> str:
    crust = check.crust
    rows = [
        (tr("density of the load"), stated(crust.load), "kg/m³"),
        (tr("density of the crust"), stated(crust.crust), "kg/m³"),
        (tr("density of the mantle"), stated(crust.mantle), "kg/m³"),
        (tr("density of the water"), stated(crust.water), "kg/m³"),
        (tr("thickness of the crust"), stated(crust.thickness / 1e3), "km"),
        (tr("density of the Bouguer correction"), stated(crust.bouguer), "kg/m³"),
        (tr("before the plate"), translated(_BEFORE.get(check.before, say("neither bent nor loaded"))), ""),
    ]
    if check.section.under_load.any():
        rows.insert(1, (tr("level on which the load stands"), number(check.section.level, 4), tr("m up")))
    return _table((tr("value of"), tr("value"), tr("unit")), rows, tr("The crust in use"))


_GRAVITY_METHOD = (
    say("""Against the plate unbent and unloaded three bodies differ: the load on its reference level,
infill
in place of crust where the surface sank, and crust in place of mantle below it; where the plate rose the contrasts
change sign. Their attraction at sea level is exact for bodies that run on along strike (edges of polygons, Hubbert
1948); for a round load it is a series in the spectrum (Parker 1973). Sources are quoted from memory."""),
    say("""The Bouguer anomaly fills the water with rock and takes rock above sea level away, along the line. A regional of
gravity (none, level, level and tilt) is fitted. Surface and gravity are weighed by the size and the correlation of
their own residuals, averaged over noise models; sigmas of readings count by their ratios. Intervals are of highest
density, in the logarithm of the thickness and in the density; a side that the data leave open is said to be
open."""),
)

_GRAVITY_CAUTIONS = (
    *_ALWAYS,
    say(
        "The crust has one thickness and one density and sinks with the plate. Roots, underplating, thickened or intruded "
        "crust and density that changes with depth look like another plate."
    ),
    say(
        "The load attracts as its relief above the reference level, with one density; infill is held as it was in the fit."
    ),
    say("A strip attracts more than a short load: where the load is round, take the round shape, or check the strip."),
    say(
        "Noise of surface and gravity is taken as independent. Rough relief that is neither load nor bending shows in "
        "both; then the joint interval is too narrow."
    ),
    say(
        "Where surface and gravity disagree beyond their intervals, the joint answer is a compromise between models that "
        "are wrong, not a better one."
    ),
)


# Strength


def strength_words(check: StrengthCheck) -> str:
    """The answer of one transect in one plain sentence."""
    found = check.verdict
    share = number(100 * found.overstressed)
    if check.words == TOO_MUCH:
        verdict = tr("it could not carry its stress")
    elif check.words == YIELDING:
        verdict = tr("carried, but {share} % of its thickness would yield", share=share)
    else:
        verdict = tr("carried, with {share} % of its thickness overstressed", share=share)
    return tr(
        "Where it is bent most, at {distance} km, the elastic plate of {thickness} km has {moment} % of the largest "
        "moment that the strength carries: {verdict}. A plate of that strength, bent as much, acts like an elastic one "
        "of {expected} km; its mechanical thickness is {mechanical} km.",
        distance=number(check.distance / 1e3),
        thickness=number(found.elastic_thickness / 1e3),
        moment=number(100 * found.moment_share),
        verdict=verdict,
        expected=number(found.expected_thickness / 1e3),
        mechanical=number(found.mechanical / 1e3),
    )


def write_strength_report(
    path: str | Path,
    checks: Iterable[StrengthCheck],
    failures: Sequence[tuple[str, str]],
    inputs: Mapping[str, str],
    versions: Mapping[str, str],
) -> None:
    """Write the report of platestrength."""
    report = RefereeReport(inputs, versions, say("Bending against strength"))
    for check in checks:
        sentence = strength_words(check)
        report.say(check.name, sentence)
        parts = [
            report._figure(
                lambda check=check: referee_figures.strength_figure(check),
                tr(
                    "Left: strength along depth, the stress of a plate of that strength at the fitted curvature, and "
                    "the stress of the elastic plate. Right: moment against curvature, with the fitted plate on it."
                ),
                tr("Strength and bending of {name}", name=check.name),
            ),
            _strength_table(check),
        ]
        remarks = list(check.remarks)
        if check.at_end:
            remarks.append(
                say("the plate is bent most at its end: look whether that is the load or the end of the line")
            )
        report.section(check.name, sentence, remarks, parts)
    report.close(_STRENGTH_METHOD, _STRENGTH_CAUTIONS, (*STRENGTH_CONSTANTS, *HEAT_CONSTANTS))
    _write(report, path, failures)


def _geotherm_words(geotherm: Geotherm | None) -> str:
    if geotherm is None:
        return tr("none of this kind")
    flow = f"{number(geotherm.surface_heat_flow() * 1e3)} mW/m²"
    if geotherm.kind == STEADY:
        return tr("{geotherm}, {flow}", geotherm=geotherm.name, flow=flow)
    age = number(geotherm.age / MYR)
    return tr("{geotherm}, {age} Myr, {flow} at the surface", geotherm=geotherm.name, age=age, flow=flow)


def _strength_table(check: StrengthCheck) -> str:
    found, rock = check.verdict, check.rock
    kind = tr("dry quartzite over dry olivine") if rock.kind == CONTINENTAL else tr("dry olivine")
    rows = [
        (tr("geotherm"), escaped(_geotherm_words(found.geotherm)), ""),
        (tr("rock"), kind, ""),
        (tr("largest curvature"), number(found.curvature), "1/m"),
        (tr("moment of the elastic plate"), number(found.elastic_moment), "N"),
        (tr("largest moment that the strength carries"), number(found.moment_limit), "N"),
        (tr("neutral depth of the plate of that strength"), number(found.bent.neutral / 1e3), "km"),
        (tr("elastic thickness expected at this curvature"), number(found.expected_thickness / 1e3), "km"),
        (tr("mechanical thickness of the strength"), number(found.mechanical / 1e3), "km"),
        (
            tr("mechanical thickness that the fitted plate asks for"),
            number(None if found.mechanical_of_fit is None else found.mechanical_of_fit / 1e3), "km",
        ),
        (tr("geotherm that has it"), escaped(_geotherm_words(found.geotherm_of_fit)), ""),
        (tr("overstressed share of the elastic plate"), number(100 * found.overstressed), "%"),
        (tr("Young's modulus"), stated(check.elastic.young / 1e9), "GPa"),
        (tr("Poisson's ratio"), stated(check.elastic.poisson), ""),
        (tr("pore pressure over weight of rock"), stated(rock.pore_pressure), ""),
        (tr("strain rate"), number(rock.strain_rate), "1/s"),
    ]  # fmt: skip
    return _table((tr("value of"), tr("value"), tr("unit")), rows, tr("Strength and bending"))


_STRENGTH_METHOD = (
    say("""Rock slides on the best-oriented fault where the shear stress reaches the friction of
Byerlee (1978), with the normal stress reduced by the pore pressure; deeper, it flows at the stated strain rate: dry
olivine by creep and, above 200 MPa, by glide (Goetze &amp; Evans 1979), dry quartzite by creep. The weaker of the two
is the strength. A plate bent to the curvature of the fitted one has the elastic stress as far as that strength allows,
about the depth at which the in-plane force balances; its moment gives the elastic thickness expected there."""),
    say("""The mechanical thickness ends where the strength in tension falls below 50 MPa (McNutt 1984). That of the fitted
plate is found by ageing (or warming) the geotherm until the moment at the fitted curvature is that of the elastic
plate. All sources are quoted from memory."""),
)

_STRENGTH_CAUTIONS = (
    *_ALWAYS,
    say(
        "A strength envelope is laboratory creep carried over ten orders of magnitude in strain rate: its depth is "
        "uncertain by some kilometres to ten, and by more in wet or fine-grained rock."
    ),
    say(
        "The largest curvature is that of a smooth fitted plate. Under the load and near a break it depends on what the "
        "fit assumed there; a fit with a thinner plate has more of it."
    ),
    say(
        "The curvature of today is taken as if reached at once; a plate bent earlier and cooled since keeps the thickness "
        "of that time."
    ),
    say(
        "The geotherm is conductive and that of undisturbed plate: no reheating by a plume or by intrusions, no "
        "circulation of water."
    ),
)


# Age


def age_words(check: AgeCheck) -> str:
    """The answer of one transect in one plain sentence."""
    te, temperature = check.thickness, check.temperature
    if temperature.value is None:
        reached = tr("deeper than the mantle's temperature")
    else:
        reached = f"{number(temperature.value)} °C"
    sides = ""
    if temperature.low is not None or temperature.high is not None:
        sides = f" ({interval_words(temperature, '°C', 1.0)})"
    return tr(
        "Elastic thickness {thickness} reaches down to {reached}{sides} in a plate that was {age} Myr old when it was "
        "loaded; isotherms then: {depths}.",
        thickness=_interval(te, 1e3, "km"),
        reached=reached,
        sides=sides,
        age=number(check.age_at_loading / MYR),
        depths=listed([_depth_words(temperature, depth) for temperature, depth in check.expected]),
    )


def _depth_words(temperature: float, depth: float | None) -> Said:
    if depth is None:
        return say("{temperature} °C nowhere", temperature=stated(temperature))
    return say("{temperature} °C at {depth} km", temperature=stated(temperature), depth=number(depth / 1e3))


def write_age_report(
    path: str | Path,
    checks: Sequence[AgeCheck],
    curves: tuple[np.ndarray, dict[float, np.ndarray]],
    failures: Sequence[tuple[str, str]],
    inputs: Mapping[str, str],
    versions: Mapping[str, str],
) -> None:
    """Write the report of agethickness; ``curves``: ages, s, and depth, m, of each isotherm there."""
    report = RefereeReport(inputs, versions, say("Elastic thickness against age"))
    for check in checks:
        report.say(check.name, age_words(check))
    at_loading = any(check.load_age > 0 for check in checks)
    figure = report._figure(
        lambda: referee_figures.age_figure(*curves, checks, at_loading),
        tr(
            "Depth of isotherms in a {geotherm} against age, and the fitted elastic thicknesses with their intervals "
            "(an arrow: the data leave that side open) at the age at which their plates were loaded.",
            geotherm=escaped(checks[0].geotherm.name),
        ),
        tr("Isotherms against age with the fitted thicknesses"),
    )
    rows = [
        (
            escaped(check.name),
            number(check.age / MYR),
            number(check.load_age / MYR),
            number(check.age_at_loading / MYR),
            _interval(check.thickness, 1e3, "km"),
            tr("beyond") if check.temperature.value is None else number(check.temperature.value),
            escaped(joined(check.remarks)),
        )
        for check in checks
    ]  # fmt: skip
    head = (
        tr("transect"), tr("age, Myr"), tr("age of the load, Myr"), tr("age at loading, Myr"),
        tr("elastic thickness (interval)"), tr("temperature at its base, °C"), tr("remarks"),
    )  # fmt: skip
    table = _table(head, rows, tr("Thickness and age"), free=0)
    report.open_with(f"<section><h2>{tr('Against age')}</h2>{figure}{table}</section>")
    report.close(_AGE_METHOD, _AGE_CAUTIONS, HEAT_CONSTANTS)
    _write(report, path, failures)


_AGE_METHOD = (
    say("""A plate that cools thickens; the elastic thickness follows an isotherm, by long experience one of
some 300 to 600 &deg;C, of the age at which the plate was loaded: the age of the plate less that of the load. Isotherms
are those of a cooling half-space, T = T<sub>0</sub> + (T<sub>m</sub> &minus; T<sub>0</sub>)
erf(z / 2&radic;(&kappa;t)), or of a plate of limited thickness that cools to a straight line (Turcotte &amp; Schubert,
Geodynamics, chapter 4; constants of the plate by Stein &amp; Stein 1992; from memory)."""),
)

_AGE_CAUTIONS = (
    *_ALWAYS,
    say(
        "An isotherm is a rule of thumb: the elastic thickness also depends on how much the plate is bent, and is less "
        "than the isotherm's depth where curvature is large."
    ),
    say(
        "Reheating near plumes, fracture zones between plates of different age, and loads that grew over a long time move "
        "a transect off its isotherm."
    ),
    say("Elastic thickness depends on Young's modulus: compare thicknesses of one modulus only."),
)
