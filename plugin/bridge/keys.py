"""The parameter keys that several algorithms share: their kind, default and label, defined once.

Values are read and checked here too, for QGIS turns text, an empty string or a missing layer into 0 in silence.
"""

from __future__ import annotations

import difflib
import math
from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any

from qgis.core import (
    NULL,
    QgsFeatureSource,
    QgsProcessing,
    QgsProcessingParameterBand,
    QgsProcessingParameterBoolean,
    QgsProcessingParameterCrs,
    QgsProcessingParameterDefinition,
    QgsProcessingParameterEnum,
    QgsProcessingParameterFeatureSource,
    QgsProcessingParameterField,
    QgsProcessingParameterNumber,
    QgsProcessingParameterRasterLayer,
    QgsProcessingParameterString,
    QgsProperty,
)

from ..core.errors import DownwarpError
from ..core.wording import listed, say
from ..translation import tr


@dataclass(frozen=True)
class Key:
    """One parameter of an algorithm."""

    name: str
    kind: str
    """number, whole, text, enum, flag, crs, raster, band, field, or a source: lines, points, polygons, table."""
    label: str
    default: Any = None
    """None where the key may be left blank."""
    options: tuple[str, ...] = ()
    parent: str = ""
    required: bool = False
    advanced: bool = False

    def definition(self) -> QgsProcessingParameterDefinition:
        """The parameter as QGIS takes it."""
        result = self._build(tr(self.label), not self.required)
        if self.advanced:
            result.setFlags(result.flags() | QgsProcessingParameterDefinition.Flag.FlagAdvanced)
        return result

    def _build(self, label: str, optional: bool) -> QgsProcessingParameterDefinition:
        if self.kind in ("number", "whole"):
            number = QgsProcessingParameterNumber.Type
            kind = number.Integer if self.kind == "whole" else number.Double
            return QgsProcessingParameterNumber(self.name, label, kind, self.default, optional)
        if self.kind == "enum":
            options = [tr(option) for option in self.options]
            return QgsProcessingParameterEnum(self.name, label, options, False, self.default, optional)
        if self.kind == "text":
            return QgsProcessingParameterString(self.name, label, self.default, False, optional)
        if self.kind == "flag":
            return QgsProcessingParameterBoolean(self.name, label, self.default, optional)
        if self.kind == "crs":
            return QgsProcessingParameterCrs(self.name, label, self.default, optional)
        if self.kind == "raster":
            return QgsProcessingParameterRasterLayer(self.name, label, self.default, optional)
        if self.kind == "band":
            return QgsProcessingParameterBand(self.name, label, self.default, self.parent, optional)
        if self.kind == "field":
            any_type = QgsProcessingParameterField.DataType.Any
            return QgsProcessingParameterField(self.name, label, self.default, self.parent, any_type, False, optional)
        types = {
            "lines": QgsProcessing.SourceType.TypeVectorLine,
            "points": QgsProcessing.SourceType.TypeVectorPoint,
            "polygons": QgsProcessing.SourceType.TypeVectorPolygon,
            "table": QgsProcessing.SourceType.TypeVector,
        }
        return QgsProcessingParameterFeatureSource(self.name, label, [types[self.kind]], self.default, optional)


SETTING_OPTIONS = (
    say("Volcanic load on the seafloor"),
    say("Trench and outer rise"),
    say("Foreland basin"),
    say("Load removed (ice, lake, erosion)"),
    say("None of these"),
)
SUPPORTS = (say("Continues"), say("Broken"), say("Pinned"), say("Clamped"))

LINES = (
    Key("TRANSECTS", "lines", "Transects, drawn from the load outwards", required=True),
    Key("NAME_FIELD", "field", "Field with the transects' names", parent="TRANSECTS"),
)
RELIEF = (
    Key("DEM", "raster", "Relief (DEM or bathymetry), m up", required=True),
    Key("DEM_BAND", "band", "Band of the relief", 1, parent="DEM", advanced=True),
    Key("DEM_CRS", "crs", "CRS of a relief grid that carries none", advanced=True),
    Key(
        "RELIEF_UNIT", "enum", "Unit of relief and observed surface", 0,
        ("Metre", "Foot", "US survey foot", "Kilometre"), advanced=True,
    ),
)  # fmt: skip
OBSERVED = (Key("OBSERVED", "raster", "Bent surface, m up (blank: the relief outside the load)"),)
PICKS = (
    Key("PICKS", "points", "Picks of the bent surface"),
    Key("PICK_ELEVATION", "field", "Field with the picks' elevation, m up", parent="PICKS"),
    Key("PICK_SIGMA", "field", "Field with the picks' standard deviation, m", parent="PICKS", advanced=True),
    Key("PICK_REACH", "number", "Picks count up to this far from the line, km", 10.0, advanced=True),
)
STATIONS = (
    Key("STEP_KM", "number", "Distance between stations, km (blank: the relief's cell size)"),
    Key("SWATH_KM", "number", "Full width of the swath, km (0: the line itself)", 0.0),
    Key("SWATH_LINES", "whole", "Number of lines in the swath", 1),
    Key(
        "SWATH_ALIGN",
        "enum",
        "Align the swath's lines",
        0,
        ("By the line", "By each line's lowest point"),
        advanced=True,
    ),
)
SETTING = (Key("SETTING", "enum", "Setting", 0, SETTING_OPTIONS),)
PLATE_SEARCH = (
    Key("PLATE", "enum", "Plate", 3, ("Continuous", "Broken", "Compare both", "As the setting")),
    Key("TE_FROM", "number", "Elastic thickness searched from, km", 1.0),
    Key("TE_TO", "number", "Elastic thickness searched to, km", 100.0),
)
BREAK = (
    Key(
        "BREAK_AT", "enum", "Place of the break", 4,
        ("Line start", "Lowest DEM station", "At BREAK_KM", "Searched from BREAK_FROM to BREAK_TO", "As the setting"),
    ),
    Key("BREAK_KM", "number", "Distance of the break from the line's start, km"),
)  # fmt: skip
BREAK_SEARCH = (
    Key("BREAK_FROM", "number", "Break searched from, km", advanced=True),
    Key("BREAK_TO", "number", "Break searched to, km", advanced=True),
)
LOAD = (
    Key(
        "LOAD", "enum", "Load", 3,
        ("Relief above the reference level", "DEM holds load thickness", "No relief load", "As the setting"),
    ),
    Key("REFERENCE_LEVEL", "number", "Reference level, m up (blank: from the relief outside the load)"),
    Key("LOAD_FROM", "number", "Load from, km", advanced=True),
    Key("LOAD_TO", "number", "Load to, km", advanced=True),
)  # fmt: skip
LOAD_AREA = (Key("LOAD_AREA", "polygons", "Load area", advanced=True),)
LOAD_SHAPE = (
    Key(
        "LOAD_SHAPE", "enum", "Shape of the load", 0,
        ("Strip: as on the line, all along strike", "As mapped"), advanced=True,
    ),
)  # fmt: skip
STRIP_WARNING = (Key("CHECK_STRIP", "flag", "Check the strip where the plate is continuous", True, advanced=True),)
ZONES = (
    Key("TE_ZONES", "whole", "Zones of elastic thickness: 1, or 2 for a plate that weakens towards its break", 1,
        advanced=True),
    Key("ZONE_CHANGE_FROM", "number", "Change of thickness sought from, km from the break", advanced=True),
    Key("ZONE_CHANGE_TO", "number", "Change of thickness sought to, km from the break", advanced=True),
)  # fmt: skip
FORCES_AND_REGIONAL = (
    Key(
        "END_FORCES", "enum", "Forces at the break", 4,
        ("None", "Shear", "Moment", "Shear and moment", "As the setting"),
    ),
    Key(
        "REGIONAL", "enum", "Regional surface", 4,
        ("None", "Level", "Level and tilt", "Level, tilt and bow", "As the setting"),
    ),
)  # fmt: skip
DENSITIES = (
    Key("RHO_LOAD", "number", "Density of the load, kg/m3"),
    Key("RHO_INFILL", "number", "Density of the infill, kg/m3"),
    Key("RHO_UNDER_LOAD", "number", "Density of the infill beneath the load, kg/m3", advanced=True),
    Key("RHO_MANTLE", "number", "Density of the mantle, kg/m3", advanced=True),
    Key("RHO_WATER", "number", "Density of the water, kg/m3", advanced=True),
    Key("FILL_SINKING_ONLY", "flag", "Infill only where the plate sinks", False, advanced=True),
    Key("FILL_LEVEL", "number", "Level up to which the infill reaches, m up", advanced=True),
)
BEND = (
    Key("TE_KM", "number", "Elastic thickness, km", 25.0),
    Key("PLATE", "enum", "Plate", 0, ("Continuous", "Broken")),
)
THICKNESS_ALONG = (
    Key("TE_FIELD", "field", "Field with the elastic thickness, km (blank: TE_KM)", parent="TRANSECTS", advanced=True),
    Key("TE_RASTER", "raster", "Raster of the elastic thickness, km", advanced=True),
)
STRIP_PLATE = (
    BEND[0],
    Key("TE_FIELD", "field", "Field with the plate's elastic thickness, km (blank: TE_KM)", parent="TRANSECTS"),
)
BEND_BREAK = (
    Key(
        "BREAK_AT", "enum", "Place of the break", 0, ("Line start", "Lowest DEM station", "At BREAK_KM"),
    ),
    Key("BREAK_KM", "number", "Distance of the break from the line's start, km"),
    Key("END_SHEAR", "number", "End shear at the break, N/m (positive down)", 0.0),
    Key("END_MOMENT", "number", "End moment at the break, N (positive where it turns the end down)", 0.0),
    Key("START_SUPPORT", "enum", "What holds the plate's start (blank: as the plate)", None, SUPPORTS, advanced=True),
    Key("FINISH_SUPPORT", "enum", "What holds the plate at the line's end", 0, SUPPORTS, advanced=True),
)  # fmt: skip
CONSTANTS = (
    Key("YOUNG_GPA", "number", "Young's modulus, GPa", 100.0, advanced=True),
    Key("POISSON", "number", "Poisson's ratio", 0.25, advanced=True),
    Key("GRAVITY", "number", "Acceleration of gravity, m/s2", 9.81, advanced=True),
    Key("IN_PLANE", "number", "In-plane force, N/m (compression positive)", 0.0, advanced=True),
)
# A plan view takes one infill and no in-plane force.
UNIFORM = tuple(
    key
    for key in DENSITIES + CONSTANTS
    if key.name not in ("RHO_UNDER_LOAD", "FILL_SINKING_ONLY", "FILL_LEVEL", "IN_PLANE")
)
STATION_FIELDS = (
    Key("INPUT", "table", "Stations: points, or a table with distances", required=True),
    Key("DISTANCE", "field", "Field with the distance along the transect, km", "distance_km", parent="INPUT"),
    Key("LOAD_FIELD", "field", "Field with the relief, m up, or the load's thickness", "dem_m", parent="INPUT"),
    Key("OBSERVED_FIELD", "field", "Field with the bent surface, m up", "observed_m", parent="INPUT"),
    Key("SIGMA_FIELD", "field", "Field with its standard deviation, m", "sigma_m", parent="INPUT"),
    Key("TRANSECT_FIELD", "field", "Field with the transects' names", "transect", parent="INPUT"),
    Key("RESOLUTION_KM", "number", "Distance within which values repeat each other, km", advanced=True),
)
WINDOW = (
    Key("FIT_FROM", "number", "Fit from, km"),
    Key("FIT_TO", "number", "Fit to, km"),
)
EXCLUDE = (Key("FIT_EXCLUDE", "polygons", "Areas left out of the fit", advanced=True),)
WEIGHTS = (
    Key("SIGMA_M", "number", "Standard deviation of the observed surface, m", advanced=True),
    Key("ROBUST", "flag", "Down-weight outliers", False, advanced=True),
    Key("CONFIDENCE", "number", "Confidence of the intervals, %", 90.0),
)
WORKERS = (
    Key(
        "WORKERS",
        "whole",
        "Processes that fit at the same time (0: one per core, from 6 transects on)",
        0,
        advanced=True,
    ),
)
BLANK = (None, NULL, "")


def required_source(algorithm, parameters: dict[str, Any], name: str, context) -> QgsFeatureSource:
    """The features that a key names; raises DownwarpError where they cannot be read."""
    source = algorithm.parameterAsSource(parameters, name, context)
    if source is None:
        raise DownwarpError("{name} is not a layer that can be read: {value}.", name=name, value=parameters.get(name))
    return source


class Values:
    """The values that a run was given, read and checked by key; errors name the key, what it got and what it takes."""

    def __init__(self, keys: Iterable[Key], parameters: dict[str, Any], context) -> None:
        self.keys = {key.name: key for key in keys}
        self.parameters = parameters
        self.context = context

    def raw(self, name: str) -> Any:
        """What was given, with expressions evaluated; None where blank."""
        value = self.parameters.get(name)
        if isinstance(value, QgsProperty):
            value, _ = value.value(self.context.expressionContext(), None)
        if isinstance(value, str):
            value = value.strip()
        return None if value in BLANK else value

    def given(self, name: str) -> bool:
        """Whether a value was given."""
        return self.raw(name) is not None

    def number(self, name: str) -> float | None:
        """A finite number, or the key's default (None where it has none)."""
        value = self.raw(name)
        if value is None:
            return self.keys[name].default
        wanted = say("a whole number") if self.keys[name].kind == "whole" else say("a number")
        try:
            if isinstance(value, bool):
                raise ValueError
            result = float(value)
        except (TypeError, ValueError):
            raise DownwarpError(
                "{name} is {value!r}; it takes {wanted}.", name=name, value=value, wanted=wanted
            ) from None
        if not math.isfinite(result) or (self.keys[name].kind == "whole" and result != int(result)):
            raise DownwarpError("{name} is {value}; it takes {wanted}.", name=name, value=value, wanted=wanted)
        return result

    def required_number(self, name: str) -> float:
        """A finite number; an error where the key is blank and has no default."""
        value = self.number(name)
        if value is None:
            raise DownwarpError("{name} is blank; it takes a number.", name=name)
        return value

    def scaled(self, name: str, unit: float) -> float | None:
        """A number times its unit, None where blank."""
        value = self.number(name)
        return None if value is None else value * unit

    def whole(self, name: str) -> int:
        """A whole number."""
        return int(self.required_number(name))

    def enum(self, name: str) -> int:
        """The place of the chosen option (the key's default where blank)."""
        key = self.keys[name]
        value = self.raw(name)
        if value is None:
            return key.default
        try:
            if isinstance(value, bool) or float(value) != int(float(value)):
                raise ValueError
            result = int(float(value))
        except (TypeError, ValueError, OverflowError):
            result = -1
        if result not in range(len(key.options)):
            options = [
                say("{place} {option}", place=place, option=say(option)) for place, option in enumerate(key.options)
            ]
            raise DownwarpError(
                "{name} is {value!r}; it takes one of: {options}.", name=name, value=value, options=listed(options)
            )
        return result

    def flag(self, name: str) -> bool:
        """True or false."""
        value = self.raw(name)
        if value is None:
            return bool(self.keys[name].default)
        text = str(value).lower()
        if text in ("true", "1", "yes", "1.0"):
            return True
        if text in ("false", "0", "no", "0.0"):
            return False
        raise DownwarpError("{name} is {value!r}; it takes true or false.", name=name, value=value)

    def field(self, name: str) -> str | None:
        """The name of a field; None where blank."""
        value = self.raw(name)
        if value is not None and not isinstance(value, str):
            raise DownwarpError("{name} is {value!r}; it takes the name of a field.", name=name, value=value)
        return value

    def check(self, known: Iterable[str]) -> None:
        """Read every plain value once, and refuse keys that the algorithm (``known``) does not have."""
        known = set(known)
        for name in self.parameters:
            if name not in known:
                near = difflib.get_close_matches(name, known, n=1)
                if near:
                    raise DownwarpError(
                        "{name} is not a key of this algorithm; did you mean {near}?", name=name, near=near[0]
                    )
                raise DownwarpError("{name} is not a key of this algorithm.", name=name)
        readers = {
            "number": self.number,
            "whole": self.number,
            "enum": self.enum,
            "flag": self.flag,
            "field": self.field,
        }
        for key in self.keys.values():
            if key.kind in readers:
                readers[key.kind](key.name)
