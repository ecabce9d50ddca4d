"""Numbers, names and sentences of the report, as plain text (escaped only where a page is made of them).

What functions return is in the user's language; texts in constants are translated where they are used.
"""

from __future__ import annotations

import math

from ..core.choices import REGIONAL_WORDS
from ..core.result import Estimate, Fit, FitResult, Parameter
from ..core.settings import FROM_SETTING, GIVEN, PLATE_NAMES, SETTINGS
from ..core.wording import say
from ..translation import tr, translated

OPTION_WORDS = {
    "SETTING": tuple(setting.name for setting in SETTINGS),
    "PLATE": (*PLATE_NAMES, say("both compared")),
    "BREAK_AT": (
        say("at the line's start"),
        say("at the lowest station"),
        say("at a stated distance"),
        say("searched"),
    ),
    "LOAD": (say("relief above the reference level"), say("DEM holds load thickness"), say("no relief load")),
    "END_FORCES": (say("none"), say("shear"), say("moment"), say("shear and moment")),
    "REGIONAL": REGIONAL_WORDS,
    "ROBUST": (say("no"), say("yes")),
    "FILL_SINKING_ONLY": (say("no"), say("yes")),
    "LOAD_SHAPE": (say("strip"), say("as mapped")),
}
"""What the numbers of enumerated options mean, in the order of their keys."""

PARAMETER_WORDS = {
    "te": say("elastic thickness"),
    "rigidity": say("flexural rigidity"),
    "flexural_parameter": say("flexural parameter"),
    "break": say("break, from the line's start"),
    "end_shear": say("end shear, positive down"),
    "end_moment": say("end moment, positive turning the end down"),
    "regional_level": say("regional level at the line's start"),
    "regional_tilt": say("regional tilt"),
    "regional_bow": say("regional bow"),
    "residual_size": say("size of the residuals"),
    "residual_correlation_length": say("correlation length of the residuals"),
    "residual_white_share": say("uncorrelated share of their variance"),
    "log_odds_of_bending": say("ln odds, bent plate against regional alone"),
    "log_odds_of_continuous_plate": say("ln odds, continuous plate against broken"),
    "te_near": say("elastic thickness nearer to the break"),
    "zone_change": say("change of thickness, from the break"),
    "log_odds_of_two_zones": say("ln odds, two zones against one"),
    "rms": say("root mean square residual"),
}
"""What fitted parameters are called; a parameter that has no entry keeps its name."""

DASH = "\N{EN DASH}"
"""Stands where there is no value."""
_MINUS, _TIMES = "\N{MINUS SIGN}", "\N{MULTIPLICATION SIGN}"


def powers(text: str) -> str:
    """Text with the digits after ^ raised: 10^12 becomes 10¹²."""
    raised = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
    head, *rest = text.split("^")
    for part in rest:
        end = 0
        while end < len(part) and (part[end].isdigit() or (end == 0 and part[end] == "-")):
            end += 1
        head += part[:end].translate(raised) + part[end:]
    return head


def number(value: float | None, digits: int = 3) -> str:
    """A number for people, with that many significant digits but no integer digit rounded away; an en dash for none.

    >>> number(23.4567), number(0.0), number(5553.2)
    ('23.5', '0', '5,553')
    """
    if value is None or not math.isfinite(value):
        return DASH
    if value == 0:
        return "0"
    exponent = math.floor(math.log10(abs(float(f"{value:.{digits - 1}e}"))))
    if exponent >= 6 or exponent < -3:
        mantissa, power = f"{value:.{digits - 1}e}".split("e")
        text = powers(f"{mantissa} {_TIMES} 10^{int(power)}")
    else:
        text = f"{value:,.{max(0, digits - 1 - exponent)}f}"
        if "." in text and exponent >= digits - 1:
            text = text.rstrip("0").rstrip(".")
    return text.replace("-", _MINUS)


def stated(value: float) -> str:
    """A number as someone would state it, without digits that say nothing.

    >>> stated(90.0), stated(0.25), stated(5000.0)
    ('90', '0.25', '5,000')
    """
    text = f"{value:.10g}"
    if "e" in text or not math.isfinite(value):
        return number(value, 4)
    whole, point, part = text.partition(".")
    return (f"{int(whole):,}" if abs(value) >= 1e3 else whole).replace("-", _MINUS) + point + part


def unit_words(unit: str) -> str:
    """A unit with its powers raised; nothing for a pure number."""
    return {"1": "", "kg/m3": "kg/m³", "m/s2": "m/s²", "m/km2": "m/km²"}.get(unit, unit)


def parameter_words(parameter: Parameter) -> tuple[str, str]:
    """Name and value of a parameter as people say them."""
    options = OPTION_WORDS.get(parameter.name)
    name = translated(PARAMETER_WORDS.get(parameter.name, parameter.name))
    if options is not None and parameter.value is not None and 0 <= int(parameter.value) < len(options):
        return name, translated(options[int(parameter.value)])
    if parameter.value is not None and parameter.origin in (GIVEN, FROM_SETTING):
        return name, stated(parameter.value)
    return name, number(parameter.value)


def is_resolved(fit: Fit) -> bool:
    """Whether the data bound the elastic thickness on at least one side."""
    thickness = fit.thickness
    return thickness.value is not None and (thickness.low is not None or thickness.high is not None)


def interval_words(estimate: Estimate, unit: str, scale: float, digits: int = 3) -> str:
    """The interval of an estimate, divided by ``scale``, in words; an open side is said to be open."""
    low, high = (None if side is None else number(side / scale, digits) for side in (estimate.low, estimate.high))
    # The unit comes with its space, for it may be missing.
    unit = f" {unit}" if unit else ""
    if low is not None and high is not None:
        return tr("{low} to {high}{unit}", low=low, high=high, unit=unit)
    if low is not None:
        return tr("from {low}{unit}, open above", low=low, unit=unit)
    if high is not None:
        return tr("up to {high}{unit}, open below", high=high, unit=unit)
    return tr("open on both sides")


def headline(result: FitResult) -> str:
    """The answer of one transect in one plain sentence."""
    fit = result.best
    options = fit.bent.problem.options
    elastic, rho = options.elastic, fit.bent.problem.densities
    confidence = f"{stated(options.confidence * 100)} %"
    given = tr(
        "E = {young} GPa, Poisson's ratio {poisson} and densities of {mantle} (mantle) and {infill} kg/m³ (infill)",
        young=stated(elastic.young / 1e9),
        poisson=stated(elastic.poisson),
        mantle=stated(rho.mantle),
        infill=stated(rho.infill),
    )
    kind = PLATE_NAMES[fit.kind]
    thickness = fit.thickness
    if thickness.value is None or not is_resolved(fit):
        return tr(
            "Elastic thickness is not resolved: these data do not bound that of a {kind} plate at {given}.",
            kind=kind,
            given=given,
        )
    return tr(
        "Elastic thickness {value} km ({confidence} interval {interval}) of a {kind} plate, at {given}.",
        value=number(thickness.value / 1e3),
        confidence=confidence,
        interval=interval_words(thickness, "km", 1e3),
        kind=kind,
        given=given,
    )
