"""The report as one HTML file without references to anything outside it.

Every text that comes from the user or from data passes through `escaped`, and what the report itself says through
`tr`. A `Report` takes fitted transects one by one and keeps only text and a summary of each, so that thousands of them
need little memory.
"""

from __future__ import annotations

import html
import os
import tempfile
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from ..core.errors import DownwarpError
from ..core.result import Estimate, FitResult
from ..core.settings import LOAD_RELIEF, PLATE_NAMES
from ..core.wording import say
from ..translation import tr, translated
from . import figures
from .words import (
    DASH,
    headline,
    interval_words,
    is_resolved,
    number,
    parameter_words,
    stated,
    unit_words,
)

MOST_FIGURES = 40
"""Transects that get figures and tables of their own; further ones are in the summary and along strike."""
TITLE = say("Elastic plates along transects")


@dataclass(frozen=True)
class ReportedTransect:
    """A fitted transect and where it lies."""

    result: FitResult
    line: np.ndarray | None = None
    """Longitude and latitude of its vertices, degrees, shape (n, 2); None where stations have no place."""
    along: float | None = None
    """Distance along strike, m; None where it has none."""


@dataclass(frozen=True)
class _Summary:
    """One row of the summary."""

    name: str
    headline: str
    kind: str
    thickness: Estimate
    rms: float
    young: float
    deepest: float | None
    strike: figures.StrikeRow
    has_section: bool


def write_report(
    path: str | Path,
    transects: Iterable[ReportedTransect],
    failures: Sequence[tuple[str, str]] = (),
    inputs: Mapping[str, str] | None = None,
    versions: Mapping[str, str] | None = None,
    title: str = TITLE,
    guide: np.ndarray | None = None,
) -> None:
    """Write the report of a run; see `Report`. ``failures``: names of transects that gave no fit, each with its reason.

    Raises DownwarpError where the file cannot be written.
    """
    report = Report(inputs or {}, versions or {}, title, guide)
    for transect in transects:
        report.add(transect)
    for name, reason in failures:
        report.add_failure(name, reason)
    report.write(path)


def escaped(text: object) -> str:
    """Text as HTML shows it literally, in elements and in attributes; in the user's language where it was said."""
    return html.escape(translated(text) if isinstance(text, str) else str(text), quote=True)


class Report:
    """Collects transects and writes them as one page."""

    def __init__(
        self,
        inputs: Mapping[str, str],
        versions: Mapping[str, str],
        title: str = TITLE,
        guide: np.ndarray | None = None,
    ) -> None:
        """``inputs``: every input of the run by its key, ``versions``: of what took part; ``guide``: longitude and
        latitude of the line that the transects were laid across, degrees, shape (n, 2)."""
        self._inputs, self._versions, self._title, self._guide = inputs, versions, title, guide
        self._missing = figures.missing_package()
        self._glyphs: dict[str, str] = {}
        self._sections: list[str] = []
        self._summaries: list[_Summary] = []
        self._lines: list[tuple[int, np.ndarray]] = []
        self._failures: list[tuple[str, str]] = []
        self._te_range: tuple[float, float] | None = None

    def add(self, transect: ReportedTransect) -> None:
        """Add a fitted transect."""
        result, place = transect.result, len(self._summaries) + 1
        options = result.best.bent.problem.options
        low, high = self._te_range or (options.te_from, options.te_to)
        self._te_range = min(low, options.te_from), max(high, options.te_to)
        if transect.line is not None:
            self._lines.append((place, np.asarray(transect.line, dtype=float)))
        detailed = place <= MOST_FIGURES
        self._summaries.append(_summary(place, transect, detailed))
        if detailed:
            self._sections.append(self._section(place, result))

    def add_failure(self, name: str, reason: str) -> None:
        """Add a transect that gave no fit."""
        self._failures.append((name, reason))

    def write(self, path: str | Path) -> None:
        """Write the page; a file that was there stays whole until the new one is."""
        target = Path(path)
        try:
            handle, part = tempfile.mkstemp(dir=target.parent, prefix=target.name, suffix=".part")
        except OSError as error:
            raise DownwarpError(
                "REPORT cannot be written to {target}: {reason}.", target=target, reason=error.strerror
            ) from None
        try:
            with os.fdopen(handle, "w", encoding="utf-8") as stream:
                stream.write(self.page())
            os.chmod(part, 0o644)  # a temporary file is its owner's alone
            os.replace(part, target)
        except OSError as error:
            raise DownwarpError(
                "REPORT cannot be written to {target}: {reason}.", target=target, reason=error.strerror
            ) from None
        finally:
            if os.path.exists(part):
                os.remove(part)

    def page(self) -> str:
        """The whole page."""
        return self.document((self._answers(), self._overview(), *self._sections, _method(), _cautions()))

    def document(self, sections: Iterable[str]) -> str:
        """A page of sections, with what it takes to repeat the run."""
        sections = list(sections)
        letters = "".join(self._glyphs[name] for name in sorted(self._glyphs))
        title = escaped(self._title)
        inputs = [(escaped(key), escaped(value)) for key, value in self._inputs.items()]
        versions = [(escaped(key), escaped(value)) for key, value in self._versions.items()]
        parts = [
            # A translation puts its own language here.
            f'<!DOCTYPE html>\n<html lang="{escaped(tr("en"))}">\n<head>\n<meta charset="utf-8">',
            f'<title>{title}</title>\n<meta name="viewport" content="width=device-width, initial-scale=1">',
            f"<style>{_STYLE}</style>\n</head>\n<body>",
            f"<header><p>{tr('Downwarp report')}</p><h1>{title}</h1></header>",
            f'<svg class="letters" aria-hidden="true"><defs>{letters}</defs></svg>' if letters else "",
            "<main>",
            f'<p class="note">{escaped(self._missing)}</p>' if self._missing else "",
            *sections,
            f"<section><h2>{tr('To repeat this run')}</h2>",
            _table((tr("input"), tr("value")), inputs, tr("Inputs"), free=1),
            _table((tr("software"), tr("version")), versions, tr("Versions")),
            "</section></main></body></html>\n",
        ]
        return "\n".join(part for part in parts if part)

    def _figure(self, draw: Any, caption: str, says: str) -> str:
        """A figure with its caption, or nothing where there is none to draw; ``says`` is what is read aloud."""
        if self._missing:
            return ""
        figure = draw()
        if figure is None:
            return ""
        image = figures.without_glyphs(figures.svg(figure), self._glyphs)
        label = f'<svg role="img" aria-label="{escaped(says)}"'
        return f"<figure>{image.replace('<svg', label, 1)}<figcaption>{caption}</figcaption></figure>"

    def _answers(self) -> str:
        """The headlines, as long as they are few, else how many there are of which kind; and what failed."""
        parts = [f"<section><h2>{tr('Answer')}</h2>"]
        several = len(self._summaries) > 1
        if several:
            parts.append(f"<p>{escaped(_overall(self._summaries, len(self._failures)))}</p>")
        if self._summaries and len(self._summaries) <= MOST_FIGURES:
            items = "".join(
                f'<li><a href="#t{each.strike.number}"><b>{escaped(each.name)}</b></a>: {escaped(each.headline)}</li>'
                for each in self._summaries
            )
            parts.append(f'<ol class="answers">{items}</ol>')
        if not self._summaries:
            parts.append(f"<p>{tr('No transect could be fitted.')}</p>")
        if self._failures:
            rows = [(escaped(name), escaped(reason)) for name, reason in self._failures]
            parts.append(_table((tr("transect"), tr("why it gave no fit")), rows, tr("Not fitted"), free=0))
        return "\n".join([*parts, "</section>"])

    def _overview(self) -> str:
        """Map, summary table and figure along strike."""
        dashed = tr(", dashed the guide") if self._guide is not None else ""
        sketch = self._figure(
            lambda: figures.map_figure(self._lines, self._guide),
            tr(
                "Where the transects lie: numbers as in this report, dots at the lines' starts{dashed}. "
                "North is up in the middle of the sketch; equal scale in all directions.",
                dashed=dashed,
            ),
            tr("Map sketch of {count} transects", count=len(self._lines)),
        )
        parts = [f"<section><h2>{tr('Where')}</h2>{sketch}</section>"] if sketch else []
        if len(self._summaries) > 1:
            strike = self._figure(
                lambda: figures.strike_figure([each.strike for each in self._summaries], self._te_range or (1e3, 1e5)),
                tr(
                    "Elastic thickness with its interval (an arrow: the data leave that side open; a cross at the "
                    "bottom: not resolved), break and bulge, and end shear with its interval, from transect to transect."
                ),
                tr("Elastic thickness and plate geometry from transect to transect"),
            )
            heading = tr("From transect to transect")
            parts.append(f"<section><h2>{heading}</h2>{strike}{self._summary_table()}</section>")
        return "\n".join(parts)

    def _summary_table(self) -> str:
        head = (
            tr("no."), tr("transect"), tr("plate"), tr("Te, km"), tr("interval, km"), tr("E, GPa"), tr("break, km"),
            tr("deepest, m"), tr("bulge, km"), tr("end shear, N/m"), tr("rms, m"),
        )  # fmt: skip
        rows = []
        for each in self._summaries:
            strike = each.strike
            name = f'<a href="#t{strike.number}">{escaped(each.name)}</a>' if each.has_section else escaped(each.name)
            resolved = each.thickness.value is not None
            rows.append((
                str(strike.number), name, escaped(each.kind),
                number(each.thickness.value / 1e3) if each.thickness.value is not None else tr("not resolved"),
                escaped(interval_words(each.thickness, "", 1e3)) if resolved else DASH,
                stated(each.young / 1e9), _km(strike.break_position), number(each.deepest), _km(strike.bulge),
                number(strike.end_shear.value), number(each.rms),
            ))  # fmt: skip
        return _table(head, rows, tr("All transects"), numeric_from=3, free=1)

    def _section(self, place: int, result: FitResult) -> str:
        """One transect."""
        fit, bent = result.best, result.best.bent
        problem = bent.problem
        name = problem.profile.name
        remarks = list(dict.fromkeys((*result.remarks, *fit.remarks, *bent.remarks)))
        said = "".join(f"<li>{escaped(remark)}</li>" for remark in remarks)
        shows_load = problem.options.chosen("load")[0] == LOAD_RELIEF
        parts = [
            f'<section class="transect" id="t{place}"><h2><span class="number">{place}</span> {escaped(name)}</h2>',
            f'<p class="headline">{escaped(headline(result))}</p>',
            f'<ul class="remarks">{said}</ul>' if said else "",
            self._figure(
                lambda: _profile(result),
                tr(
                    "The transect: {load}observed surface with the fitted stations filled, predicted surface with its "
                    "pointwise band, and below it observed less predicted.",
                    load=tr("relief with the load hatched, ") if shows_load else "",
                ),
                tr("Profile of the transect, {answer}", answer=headline(result)),
            ),
            self._figure(
                lambda: figures.posterior_figure(result),
                tr(
                    "Posterior density of the elastic thickness (in its logarithm), integrated over the noise and, "
                    "where it was searched, the break."
                ),
                tr("Posterior density of the elastic thickness"),
            ),
            self._figure(
                lambda: figures.misfit_figure(fit),
                tr(
                    "Misfit over elastic thickness and break; darker is worse. Contours: relative likelihood. A long "
                    "valley means that the data trade one for the other."
                ),
                tr("Misfit over elastic thickness and break"),
            ),
            self._figure(
                lambda: figures.choices_figure(result),
                tr(
                    "How the answer moves with each reasonable choice. Dotted band: the interval of the answer; an "
                    "arrow: open on that side. Where bars leave the band, the choice matters more than the noise."
                ),
                tr("Elastic thickness under other reasonable choices"),
            ),
            _places(result),
            _parameters(result),
            _choices(result),
            "</section>",
        ]
        return "\n".join(part for part in parts if part)


def _profile(result: FitResult) -> Any:
    figure = figures.new_figure(4.9)
    figures.profile_axes(figure, result.best.bent, result.best.rms)
    return figure


def _summary(place: int, transect: ReportedTransect, detailed: bool) -> _Summary:
    fit = transect.result.best
    markers, problem = fit.bent.markers, fit.bent.problem
    thickness = fit.thickness if is_resolved(fit) else Estimate(None)
    bulge = None if markers.bulge is None else markers.bulge.distance
    shear = fit.coefficients.get("end_shear", Estimate(None))
    return _Summary(
        problem.profile.name,
        headline(transect.result),
        translated(PLATE_NAMES[fit.kind]),
        thickness,
        fit.rms,
        problem.options.elastic.young,
        None if markers.deepest is None else markers.deepest.deflection,
        figures.StrikeRow(place, transect.along, thickness, fit.break_position.value, bulge, shear),
        detailed,
    )


def _overall(summaries: Sequence[_Summary], failed: int) -> str:
    """How many transects gave which kind of answer, in words."""
    values = [each.thickness.value / 1e3 for each in summaries if each.thickness.value is not None]
    total = len(summaries) + failed
    count = len(values)
    if count == 1:
        text = tr("Of {total} transects, {count} resolves the elastic thickness", total=total, count=count)
    else:
        text = tr("Of {total} transects, {count} resolve the elastic thickness", total=total, count=count)
    if count > 1:
        low, middle, high = (number(side) for side in np.quantile(values, [0.0, 0.5, 1.0]))
        text += tr(": from {low} to {high} km, median {middle} km", low=low, high=high, middle=middle)
    rest = []
    open_ones = len(summaries) - count
    if open_ones == 1:
        rest.append(tr("{count} was fitted without resolving it", count=open_ones))
    elif open_ones:
        rest.append(tr("{count} were fitted without resolving it", count=open_ones))
    if failed:
        rest.append(tr("{count} could not be fitted", count=failed))
    return text + "".join(f"; {each}" for each in rest) + "."


def _km(value: float | None) -> str:
    return number(None if value is None else value / 1e3)


def _table(
    head: Sequence[str],
    rows: Iterable[Sequence[str]],
    caption: str,
    numeric_from: int | None = None,
    free: int | None = None,
) -> str:
    """A table of cells that are HTML already; columns from ``numeric_from`` on stand to the right, and words in the
    column ``free``, which holds text of any length, may be broken anywhere."""
    rows = list(rows)
    if not rows:
        return ""

    def cells(tag: str, values: Sequence[str]) -> str:
        kinds = [' class="w"' if index == free else "" for index in range(len(values))]
        if numeric_from is not None:
            kinds[numeric_from:] = [' class="n"'] * (len(values) - numeric_from)
        return "".join(f"<{tag}{kind}>{value}</{tag}>" for kind, value in zip(kinds, values))

    body = "\n".join(f"<tr>{cells('td', row)}</tr>" for row in rows)
    return (
        f'<div class="table"><table><caption>{escaped(caption)}</caption><thead><tr>{cells("th", head)}</tr></thead>'
        f"<tbody>{body}</tbody></table></div>"
    )


def _places(result: FitResult) -> str:
    rows = [
        (figures.place_words(kind, deflection), _km(distance), number(deflection))
        for kind, (distance, deflection) in figures.marked_places(result.best.bent).items()
    ]
    head = (tr("place"), tr("distance from the line's start, km"), tr("deflection, m, positive down"))
    return _table(head, rows, tr("Places that matter"), numeric_from=1)


def _parameters(result: FitResult) -> str:
    rows = []
    for each in result.parameters:
        name, value = parameter_words(each)
        interval = ""
        if each.low is not None or each.high is not None:
            interval = interval_words(Estimate(None, each.low, each.high), "", 1.0)
        rows.append(tuple(escaped(cell) for cell in (name, value, interval, unit_words(each.unit), each.origin)))
    head = (tr("value of"), tr("value"), tr("interval"), tr("unit"), tr("origin"))
    return _table(head, rows, tr("Every value in use, and where it came from"))


def _choices(result: FitResult) -> str:
    rows = []
    for row in result.choices:
        thickness = row.thickness
        open_both = thickness.low is None and thickness.high is None
        resolved = thickness.value is not None and not open_both
        rows.append((
            escaped(row.choice), escaped(row.option),
            number(thickness.value / 1e3) if resolved and thickness.value is not None else tr("not resolved"),
            escaped(interval_words(thickness, "", 1e3)) if resolved else DASH, number(row.rms),
        ))  # fmt: skip
    head = (tr("choice"), tr("option"), tr("Te, km"), tr("interval, km"), tr("rms, m"))
    return _table(head, rows, tr("The answer under other choices"), numeric_from=2)


_METHOD = (
    say("""The lithosphere is taken as a thin elastic plate that floats on a fluid mantle and bends in one direction only,
along the transect. With distance <i>x</i> along the line and deflection <i>w</i> (positive down), the load <i>q</i>
is carried by the plate's stiffness, by any in-plane force <i>P</i> (compression positive), and by the buoyancy of
what is displaced:"""),
    say("""<i>T</i><sub>e</sub> is the elastic thickness, <i>D</i> the flexural rigidity and <i>&alpha;</i> the flexural
parameter, the length over which the plate bends. At a break the plate ends free, but for an end shear (positive down)
and an end moment (positive where it turns the end down); everywhere else it runs on beyond the line. The equation is
solved with cubic Hermite elements, which give moment and shear in equilibrium with the load."""),
    say("""The predicted surface is a regional surface (level, tilt, bow, as chosen) less the deflection. For each trial
thickness, and break where it is searched, the end forces and the regional follow by least squares, and their
uncertainty is integrated out. Neighbouring residuals resemble one another; the likelihood averages over how far and
how strongly, so that many stations close together do not count as many independent readings. The interval is the one
of highest posterior density in the logarithm of the thickness; where the data leave a side open, it is reported open
and not closed at the search limit."""),
)
"""Paragraphs, as HTML."""

_EQUATIONS = """<p class="equation">(<i>D w</i>&Prime;)&Prime; + (<i>P w</i>&prime;)&prime; + <i>k w</i> = <i>q</i></p>
<p class="equation"><i>D</i> = <i>E T</i><sub>e</sub><sup>3</sup> / [12 (1 &minus; <i>&nu;</i><sup>2</sup>)],&emsp;
<i>k</i> = (<i>&rho;</i><sub>mantle</sub> &minus; <i>&rho;</i><sub>infill</sub>) <i>g</i>,&emsp;
<i>&alpha;</i> = (4 <i>D</i> / <i>k</i>)<sup>1/4</sup></p>"""
"""They stand after the first paragraph."""

_CAUTIONS = (
    say("""<b>A strip.</b> Load and plate are taken to run on unchanged across the transect. A round load bends the plate
less and in another shape: a strip misplaces its bulge and makes it too high. Transects oblique to the structure
stretch its widths and make the plate seem thicker."""),
    say("""<b>Elastic, and steady.</b> No creep, no yielding, no faulting, no history of the load and no heat: the thickness
found is that of the elastic plate which bends alike, not a layer that can be drilled into."""),
    say("""<b>One thickness.</b> The plate is uniform along each transect. Where it is weakened, as near a trench axis, the
result is some average of what is there."""),
    say("""<b>Constants.</b> The thickness holds for the elastic constants and densities printed beside it. Twice the Young's
modulus gives a thickness lower by a fifth; a wrong density of the load or the infill moves it too, as the choices
show."""),
    say("""<b>Choices.</b> Window, regional, infill and kind of plate may move the answer by more than its interval; the
choices table, where it was made, shows by how much."""),
    say("""<b>Other sources of relief.</b> Swells, sediments, erosion, crustal thickness and dynamic support look like
deflection where they are not modelled."""),
    say("""<b>Use.</b> This is a scientific estimate. It is no basis for drilling, navigation, siting or engineering: those
need licensed practice and the local codes."""),
)
"""Items, as HTML."""


def _method() -> str:
    first, *others = (f"<p>{translated(paragraph)}</p>" for paragraph in _METHOD)
    return "\n".join([f"<section><h2>{tr('Method')}</h2>", first, _EQUATIONS, *others, "</section>"])


def _cautions() -> str:
    items = [f"<li>{translated(item)}</li>" for item in _CAUTIONS]
    heading = tr("Assumptions and cautions")
    return "\n".join([f"<section><h2>{heading}</h2>", "<ul>", *items, "</ul></section>"])


_STYLE = """
:root{--ink:#26343a;--plate:#1f6f84;--load:#e08a2e;--pale:#eef4f5;--line:#c9d4d8}
*{box-sizing:border-box}
body{margin:0;color:var(--ink);background:#fff;font:15px/1.5 "Segoe UI","Noto Sans","DejaVu Sans",
sans-serif}
header{padding:1.4rem 1.2rem 1rem;border-bottom:6px double var(--plate)}
header>*,main{max-width:60rem;margin-left:auto;margin-right:auto}
header p{margin-top:0;margin-bottom:.1rem;color:var(--plate);font-weight:600;letter-spacing:.04em}
h1{margin-top:0;margin-bottom:0;font-size:1.75rem;line-height:1.2;overflow-wrap:anywhere}
main{padding:0 1.2rem 3rem}
section{margin-top:2rem}
h2{font-size:1.25rem;margin:0 0 .6rem;padding-bottom:.2rem;border-bottom:1px solid var(--line);overflow-wrap:anywhere}
.number{display:inline-block;min-width:1.7em;padding:0 .4em;text-align:center;border:2px solid var(--plate);
border-radius:1em;color:var(--plate)}
.headline{font-size:1.1rem;font-weight:600;border-left:5px solid var(--load);padding-left:.8rem}
.remarks li{margin:.15rem 0}
.answers li{margin:.3rem 0;overflow-wrap:anywhere}
.note{border:1px dashed var(--load);padding:.6rem .8rem}
.equation{text-align:center;font-family:"STIX Two Text","Times New Roman","DejaVu Serif",serif;font-size:1.15rem}
figure{margin:1.2rem 0;break-inside:avoid}
svg.letters{position:absolute;width:0;height:0}
figure svg{display:block;width:100%;height:auto;max-width:54rem;margin:0 auto}
figcaption{font-size:.88rem;max-width:54rem;margin:.3rem auto 0;padding-left:.8rem;border-left:2px solid var(--line)}
.table{overflow-x:auto;margin:1.2rem 0}
table{border-collapse:collapse;font-size:.88rem;font-variant-numeric:tabular-nums}
caption{text-align:left;font-weight:600;padding:.2rem 0;white-space:nowrap}
th,td{padding:.22rem .7rem .22rem 0;text-align:left;vertical-align:top;border-bottom:1px solid var(--line)}
th{border-bottom:2px solid var(--plate)}
td.w{overflow-wrap:anywhere;min-width:9em}
td.n,th.n{text-align:right}
td.n{white-space:nowrap}
a{color:var(--plate)}
@media print{body{font-size:10.5pt}header{border-bottom-color:#000}a{color:inherit;text-decoration:none}
h2,h2+p{break-after:avoid}.transect{break-before:page}.table{overflow:visible}tr{break-inside:avoid}@page{margin:16mm}}
"""
