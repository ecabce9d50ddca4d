"""Identifiers, keys, types, defaults, options, fields, geometries and numbers that models and scripts depend on.

They are written out here once more, on purpose: a change in the code has to be made here as well, knowingly.
"""

import html
import re

import pytest

pytest.importorskip("qgis")

from downwarp_checkout.plugin.bridge.fields import FIELDS, GEOMETRY, layer_fields
from qgis.core import (
    QgsApplication,
    QgsProcessingParameterDefinition,
    QgsProcessingParameterField,
    QgsProcessingParameterNumber,
    QgsWkbTypes,
)

NAMES = {
    "fittransects": "Fit plate along transects",
    "bendtransects": "Bend plate along transects",
    "sampletransects": "Sample transects",
    "fitstations": "Fit plate to stations",
    "laytransects": "Lay transects",
    "demolayers": "Make demo layers",
}

SETTINGS = [
    "Volcanic load on the seafloor",
    "Trench and outer rise",
    "Foreland basin",
    "Load removed (ice, lake, erosion)",
    "None of these",
]
UNITS = ["Metre", "Foot", "US survey foot", "Kilometre"]
PLATES = ["Continuous", "Broken", "Compare both", "As the setting"]
BREAKS = ["Line start", "Lowest DEM station", "At BREAK_KM", "Searched from BREAK_FROM to BREAK_TO", "As the setting"]
LOADS = ["Relief above the reference level", "DEM holds load thickness", "No relief load", "As the setting"]
FORCES = ["None", "Shear", "Moment", "Shear and moment", "As the setting"]
REGIONALS = ["None", "Level", "Level and tilt", "Level, tilt and bow", "As the setting"]
SUPPORTS = ["Continues", "Broken", "Pinned", "Clamped"]
ALIGNMENTS = ["By the line", "By each line's lowest point"]

# key: (type, default, options of an enum)
LINES = {"TRANSECTS": ("source", None), "NAME_FIELD": ("field", None)}
RELIEF = {
    "DEM": ("raster", None),
    "DEM_BAND": ("band", 1),
    "DEM_CRS": ("crs", None),
    "RELIEF_UNIT": ("enum", 0, UNITS),
}
OBSERVED = {"OBSERVED": ("raster", None)}
PICKS = {
    "PICKS": ("source", None),
    "PICK_ELEVATION": ("field", None),
    "PICK_SIGMA": ("field", None),
    "PICK_REACH": ("number", 10),
}
SEARCH = {"PLATE": ("enum", 3, PLATES), "TE_FROM": ("number", 1), "TE_TO": ("number", 100)}
BREAK = {
    "BREAK_AT": ("enum", 4, BREAKS),
    "BREAK_KM": ("number", None),
    "BREAK_FROM": ("number", None),
    "BREAK_TO": ("number", None),
}
LOAD = {
    "LOAD": ("enum", 3, LOADS),
    "REFERENCE_LEVEL": ("number", None),
    "LOAD_FROM": ("number", None),
    "LOAD_TO": ("number", None),
}
LOAD_AREA = {"LOAD_AREA": ("source", None)}
INSIDE = {"END_FORCES": ("enum", 4, FORCES), "REGIONAL": ("enum", 4, REGIONALS)}
DENSITIES = {
    "RHO_LOAD": ("number", None),
    "RHO_INFILL": ("number", None),
    "RHO_MANTLE": ("number", None),
    "RHO_WATER": ("number", None),
    "RHO_UNDER_LOAD": ("number", None),
    "FILL_SINKING_ONLY": ("boolean", False),
    "FILL_LEVEL": ("number", None),
}
CONSTANTS = {
    "YOUNG_GPA": ("number", 100),
    "POISSON": ("number", 0.25),
    "GRAVITY": ("number", 9.81),
    "IN_PLANE": ("number", 0),
}
SWATH = {
    "STEP_KM": ("number", None),
    "SWATH_KM": ("number", 0),
    "SWATH_LINES": ("number", 1),
    "SWATH_ALIGN": ("enum", 0, ALIGNMENTS),
}
WINDOW = {"FIT_FROM": ("number", None), "FIT_TO": ("number", None)}
EXCLUDE = {"FIT_EXCLUDE": ("source", None)}
WEIGHTS = {"SIGMA_M": ("number", None), "ROBUST": ("boolean", False), "CONFIDENCE": ("number", 90)}
SETTING = {"SETTING": ("enum", 0, SETTINGS)}
STATION_FIELDS = {
    "INPUT": ("source", None),
    "DISTANCE": ("field", "distance_km"),
    "LOAD_FIELD": ("field", "dem_m"),
    "OBSERVED_FIELD": ("field", "observed_m"),
    "SIGMA_FIELD": ("field", "sigma_m"),
    "TRANSECT_FIELD": ("field", "transect"),
}
FIT_SINKS = dict.fromkeys(
    ("PROFILES", "STATIONS", "MARKERS", "PARAMETERS", "MISFIT", "CHOICES", "ALONG_STRIKE"), ("sink", None)
)
FIT = {**SEARCH, **BREAK, **LOAD, **INSIDE, **DENSITIES, **CONSTANTS, **WINDOW, **WEIGHTS, **SETTING, **FIT_SINKS}
REPORT = {"REPORT": ("fileDestination", None)}

KEYS = {
    "fittransects": {**LINES, **RELIEF, **OBSERVED, **PICKS, **LOAD_AREA, **SWATH, **EXCLUDE, **FIT, **REPORT},
    "fitstations": {**STATION_FIELDS, **FIT, **REPORT},
    "bendtransects": {
        **LINES,
        **RELIEF,
        **SETTING,
        **LOAD,
        **LOAD_AREA,
        **DENSITIES,
        **CONSTANTS,
        **SWATH,
        "TE_KM": ("number", 25),
        "PLATE": ("enum", 0, PLATES[:2]),
        "BREAK_AT": ("enum", 0, BREAKS[:3]),
        "BREAK_KM": ("number", None),
        "END_SHEAR": ("number", 0),
        "END_MOMENT": ("number", 0),
        "START_SUPPORT": ("enum", None, SUPPORTS),
        "FINISH_SUPPORT": ("enum", 0, SUPPORTS),
        **dict.fromkeys(("PROFILES", "STATIONS", "MARKERS"), ("sink", None)),
    },
    "sampletransects": {**LINES, **RELIEF, **OBSERVED, **SWATH, "STATIONS": ("sink", None)},
    "laytransects": {
        "GUIDE": ("source", None),
        "SPACING_KM": ("number", 25),
        "BEFORE_KM": ("number", 0),
        "AFTER_KM": ("number", 400),
        "SIDE": ("enum", 0, ["Left to right", "Right to left"]),
        "SMOOTH_KM": ("number", 100),
        "CENTRES": ("source", None),
        "DIRECTIONS": ("number", 8),
        "RADIUS_KM": ("number", 400),
        "TRANSECTS": ("sink", None),
    },
    "demolayers": {"OUTPUT_FOLDER": ("folderDestination", None)},
}
NEEDED = {
    "fittransects": {"TRANSECTS", "DEM", "PROFILES", "STATIONS"},
    "fitstations": {"INPUT", "PROFILES", "STATIONS"},
    "bendtransects": {"TRANSECTS", "DEM", "PROFILES", "STATIONS"},
    "sampletransects": {"TRANSECTS", "DEM", "STATIONS"},
    "laytransects": {"TRANSECTS"},
    "demolayers": {"OUTPUT_FOLDER"},
}
NUMBERS = ["TE_KM", "TE_LOW_KM", "TE_HIGH_KM", "RMS_M", "TRANSECTS_FITTED"]

OUTPUT_FIELDS = {
    "STATIONS": "transect, distance_km, dem_m, load_mpa, observed_m, sigma_m, in_fit, deflection_m, predicted_m, "
    "predicted_low_m, predicted_high_m, residual_m, slope, moment_n, shear_n_per_m, curvature_per_m, "
    "fibre_stress_mpa, te_km, infill_kg_m3",
    "PROFILES": "transect, setting, plate, te_km, te_low_km, te_high_km, rigidity_nm, flexural_parameter_km, break_km, "
    "break_low_km, break_high_km, end_shear_n_per_m, end_moment_n, regional_level_m, regional_tilt_m_per_km, rms_m, "
    "stations_fit, stations_effective, deepest_m, deepest_km, node_km, bulge_m, bulge_km, young_gpa, poisson, "
    "gravity_m_s2, rho_mantle, rho_infill, rho_load, remarks",
    "MARKERS": "transect, kind, distance_km, deflection_m, elevation_m",
    "PARAMETERS": "transect, plate, parameter, value, low, high, unit, origin",
    "MISFIT": "transect, plate, te_km, break_km, rms_m, relative_likelihood",
    "CHOICES": "transect, choice, option, te_km, te_low_km, te_high_km, rms_m",
    "ALONG_STRIKE": "transect, along_strike_km, place_km, setting, plate, te_km, te_low_km, te_high_km, break_km, "
    "break_low_km, break_high_km, deepest_m, deepest_km, node_km, bulge_m, bulge_km, end_shear_n_per_m, "
    "end_shear_low_n_per_m, end_shear_high_n_per_m, end_moment_n, end_moment_low_n, end_moment_high_n, rms_m, "
    "young_gpa, poisson, gravity_m_s2, rho_mantle, rho_infill, rho_load",
}
TEXT = {
    "transect", "setting", "plate", "kind", "parameter", "unit", "origin", "choice", "option", "remarks",
}  # fmt: skip


def algorithm(name):
    return QgsApplication.processingRegistry().algorithmById(f"downwarp:{name}")


def test_the_provider_has_these_algorithms(provider):
    """Every identifier with its name."""
    assert provider.id() == "downwarp"
    shown = {each.name(): each.displayName() for each in provider.algorithms()}
    assert {name: shown.get(name) for name in NAMES} == NAMES


@pytest.mark.parametrize("name", NAMES)
def test_keys_have_their_types_defaults_and_options(name):
    """Keys of the contract; those beyond it are new ones, all optional or with a default."""
    definitions = {each.name(): each for each in algorithm(name).parameterDefinitions()}
    assert set(KEYS[name]) <= set(definitions)
    for key, (kind, default, *options) in KEYS[name].items():
        definition = definitions[key]
        assert definition.type() == kind, key
        if kind not in ("sink", "fileDestination", "folderDestination"):
            assert definition.defaultValue() == default, key
        if options:
            assert definition.options() == options[0], key
            assert not definition.allowMultiple()
            assert not definition.usesStaticStrings(), "static strings break headless use"
    optional = QgsProcessingParameterDefinition.Flag.FlagOptional
    needed = {key for key, each in definitions.items() if not each.flags() & optional}
    assert needed == NEEDED[name]


@pytest.mark.parametrize("name", NAMES)
def test_numbers_and_fields_take_what_they_say(name):
    """Numbers are real but for counts; fields of a layer name their parent; field keys take any type of field."""
    whole = {"SWATH_LINES", "DIRECTIONS", "SEED", "WORKERS", "TE_ZONES"}
    for each in algorithm(name).parameterDefinitions():
        if each.type() == "number":
            real = QgsProcessingParameterNumber.Type.Double
            assert (each.dataType() == real) == (each.name() not in whole), each.name()
        if each.type() == "field":
            assert each.parentLayerParameterName() in KEYS[name]
            assert each.dataType() == QgsProcessingParameterField.DataType.Any


@pytest.mark.parametrize("name", ["fittransects", "fitstations"])
def test_fits_return_numbers(name):
    """The numbers beside the layers."""
    numbers = [each.name() for each in algorithm(name).outputDefinitions() if each.type() == "outputNumber"]
    assert numbers == NUMBERS


@pytest.mark.parametrize("output", OUTPUT_FIELDS)
def test_fields_of_the_outputs(output):
    """Names in order, whatever stands between them, and text where the value is text."""
    contract = OUTPUT_FIELDS[output].split(", ")
    assert [name for name in FIELDS[output] if name in contract] == contract
    for field in layer_fields(output):
        if field.name() in contract:
            assert field.isNumeric() == (field.name() not in TEXT), field.name()


def test_geometries_of_the_outputs():
    """PointZ, LineStringZM, and none for tables."""
    types = QgsWkbTypes.Type
    assert GEOMETRY["STATIONS"] == GEOMETRY["MARKERS"] == types.PointZ
    assert GEOMETRY["PROFILES"] == types.LineStringZM
    assert GEOMETRY["ALONG_STRIKE"] == types.Point
    assert not {"PARAMETERS", "MISFIT", "CHOICES"} & set(GEOMETRY)


@pytest.mark.parametrize("name", NAMES)
def test_everything_has_help(name):
    """Every key, every output and every field of an output has help, and the panel's text shows all of it."""
    each = algorithm(name)
    shown = html.unescape(re.sub("<[^>]+>", "", each.shortHelpString()))
    assert each.shortDescription()
    assert each.help()["summary"] and each.help()["tags"]
    for definition in each.parameterDefinitions():
        text = each.help_of("parameters", definition.name()) or each.help_of("outputs", definition.name())
        assert text, definition.name()
        assert html.unescape(re.sub("<[^>]+>", "", text)) in shown, definition.name()
        for field in FIELDS.get(definition.name(), ()):
            if definition.type() == "sink":
                assert f"{field}: {each.help_of('fields', field)}" in shown, field
                assert each.help_of("fields", field), field
    for output in each.outputDefinitions():
        assert each.help_of("outputs", output.name()), output.name()


def test_help_names_nothing_that_is_not_there(provider):
    """No help for keys, outputs or fields that no algorithm has."""
    from downwarp_checkout.plugin.bridge.algorithm import SHARED_HELP, read_help

    algorithms = provider.algorithms()
    keys = {each.name() for one in algorithms for each in one.parameterDefinitions()}
    outputs = {each.name() for one in algorithms for each in one.outputDefinitions()}
    fields = {field for names in FIELDS.values() for field in names}
    shared = read_help(algorithms[0].module_file().with_name(SHARED_HELP))
    assert set(shared["parameters"]) <= keys
    assert set(shared["outputs"]) <= keys | outputs
    assert set(shared["fields"]) <= fields
    for one in algorithms:
        own = {each.name() for each in one.parameterDefinitions()}
        assert set(one.help().get("parameters", {})) <= own
        assert set(one.help().get("outputs", {})) <= {each.name() for each in one.outputDefinitions()} | own
        assert set(one.help().get("fields", {})) <= fields


@pytest.mark.parametrize("name", NAMES)
def test_help_speaks_in_sentences(name):
    """Help of keys and outputs ends as a sentence does: nothing is cut off."""
    each = algorithm(name)
    for definition in each.parameterDefinitions():
        text = each.help_of("parameters", definition.name()) or each.help_of("outputs", definition.name())
        assert text.endswith("."), definition.name()
