"""The keys of a fit as core's options, in SI units."""

from __future__ import annotations

from qgis.core import QgsFeature, QgsFeatureSource

from ..core.elastic import Elastic
from ..core.errors import DownwarpError
from ..core.settings import BOTH, FORCES_NONE, MAPPED, STRIP, FitOptions
from ..core.wording import say
from .keys import Values
from .picks import number_of
from .sampling import LEAST_THICKNESS, MOST_THICKNESS

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
    located = "LOAD_SHAPE" in values.keys  # stations of a table have no relief about them
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
        load_shape=values.enum("LOAD_SHAPE") if located else STRIP,
        check_strip=located and values.flag("CHECK_STRIP"),
        zones=values.whole("TE_ZONES"),
        zone_from=values.scaled("ZONE_CHANGE_FROM", KM),
        zone_to=values.scaled("ZONE_CHANGE_TO", KM),
    )


def bend_options(values: Values, thickness: float | None = None) -> FitOptions:
    """What bending a stated plate was asked for: the options of a fit without its search.

    ``thickness``: m, where it is not that of TE_KM.
    """
    plate = values.enum("PLATE")
    if plate >= BOTH:
        raise DownwarpError("PLATE is {plate}; it takes 0 (continuous) or 1 (broken).", plate=plate)
    if thickness is None:
        thickness = stated_thickness(values)
    if values.given("TE_FIELD") and values.given("TE_RASTER"):
        raise DownwarpError("TE_FIELD and TE_RASTER are both given; a plate takes one of them.")
    load_shape = values.enum("LOAD_SHAPE")
    if load_shape == MAPPED and values.given("TE_RASTER"):
        raise DownwarpError("LOAD_SHAPE is 1 (as mapped), which takes one elastic thickness: leave TE_RASTER out.")
    return FitOptions(
        **_load_and_densities(values),
        plate=plate,
        te_from=max(0.9 * thickness, LEAST_THICKNESS),
        te_to=min(1.1 * thickness, MOST_THICKNESS),
        end_forces=FORCES_NONE,
        regional=0,
        load_shape=load_shape,
    )


def stated_thickness(values: Values, feature: QgsFeature | None = None, name: str = "") -> float:
    """Elastic thickness, m, from TE_FIELD of a feature where that key is given, else TE_KM."""
    field = values.raw("TE_FIELD")
    if field is None or feature is None:
        thickness, what = values.required_number("TE_KM"), say("TE_KM")
    else:
        what = say("Transect {name}: TE_FIELD {field}", name=name, field=field)
        thickness = number_of(feature[field], what)
        if thickness != thickness:
            raise DownwarpError("{what} is NULL: there is no plate.", what=what)
    if not LEAST_THICKNESS <= thickness * KM <= MOST_THICKNESS:
        raise DownwarpError(
            "{what} is {thickness:g}; it takes a number from {least:g} to {most:g}.",
            what=what,
            thickness=thickness,
            least=LEAST_THICKNESS / KM,
            most=MOST_THICKNESS / KM,
        )
    return thickness * KM


def check_thickness_field(values: Values, source: QgsFeatureSource) -> None:
    """Raise DownwarpError where TE_FIELD is no field of the transects."""
    field = values.raw("TE_FIELD")
    if field is not None and source.fields().lookupField(field) < 0:
        raise DownwarpError("TE_FIELD: TRANSECTS has no field {field!r}.", field=field)
