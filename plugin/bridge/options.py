"""The keys of a fit as core's options, in SI units."""

from __future__ import annotations

from ..core.elastic import Elastic
from ..core.errors import DownwarpError
from ..core.settings import BOTH, FORCES_NONE, FitOptions
from .keys import Values

KM = 1e3


def elastic(values: Values) -> Elastic:
    """Elastic constants."""
    return Elastic(
        values.required_number("YOUNG_GPA") * 1e9, values.required_number("POISSON"), values.required_number("GRAVITY")
    )


def _load_and_densities(values: Values) -> dict:
    return {
        "setting": values.enum("SETTING"),
        "load": values.enum("LOAD"),
        "reference_level": values.number("REFERENCE_LEVEL"),
        "load_from": values.scaled("LOAD_FROM", KM),
        "load_to": values.scaled("LOAD_TO", KM),
        "rho_load": values.number("RHO_LOAD"),
        "rho_infill": values.number("RHO_INFILL"),
        "rho_under_load": values.number("RHO_UNDER_LOAD"),
        "rho_mantle": values.number("RHO_MANTLE"),
        "rho_water": values.number("RHO_WATER"),
        "fill_sinking_only": values.flag("FILL_SINKING_ONLY"),
        "fill_level": values.number("FILL_LEVEL"),
        "elastic": elastic(values),
        "in_plane": values.required_number("IN_PLANE"),
        "break_at": values.enum("BREAK_AT"),
        "break_position": values.scaled("BREAK_KM", KM),
    }


def fit_options(values: Values) -> FitOptions:
    """What a fit was asked for; raises DownwarpError where values contradict each other."""
    return FitOptions(
        **_load_and_densities(values),
        plate=values.enum("PLATE"),
        te_from=values.required_number("TE_FROM") * KM,
        te_to=values.required_number("TE_TO") * KM,
        break_from=values.scaled("BREAK_FROM", KM),
        break_to=values.scaled("BREAK_TO", KM),
        end_forces=values.enum("END_FORCES"),
        regional=values.enum("REGIONAL"),
        fit_from=values.scaled("FIT_FROM", KM),
        fit_to=values.scaled("FIT_TO", KM),
        sigma=values.number("SIGMA_M"),
        robust=values.flag("ROBUST"),
        confidence=values.required_number("CONFIDENCE") / 100.0,
    )


def bend_options(values: Values) -> FitOptions:
    """What bending a stated plate was asked for: the options of a fit without its search."""
    plate = values.enum("PLATE")
    if plate >= BOTH:
        raise DownwarpError(f"PLATE is {plate}; it takes 0 (continuous) or 1 (broken).")
    thickness = values.required_number("TE_KM") * KM
    if not 0.1 * KM <= thickness <= 1000 * KM:
        raise DownwarpError(f"TE_KM is {thickness / KM:g}; it takes a number from 0.1 to 1000.")
    return FitOptions(
        **_load_and_densities(values),
        plate=plate,
        te_from=0.5 * thickness if thickness > 0.2 * KM else 0.1 * KM,
        te_to=2 * thickness,
        end_forces=FORCES_NONE,
        regional=0,
    )
