"""Cases of the fuzz suite: an algorithm and its parameters, the same ones for the same seed and number."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

import hostile
import numpy as np
from qgis.core import (
    QgsApplication,
    QgsProcessing,
    QgsProcessingFeatureSourceDefinition,
    QgsProcessingOutputLayerDefinition,
    QgsProcessingParameterNumber,
)

# Within these a run makes sense; drawn evenly in the logarithm where the lower end is above 0.
RANGES = {
    "TE_FROM": (0.5, 30), "TE_TO": (20, 200), "TE_KM": (0.5, 200), "BREAK_KM": (0, 600), "BREAK_FROM": (0, 300),
    "BREAK_TO": (50, 700), "REFERENCE_LEVEL": (-7000, 1000), "LOAD_FROM": (0, 300), "LOAD_TO": (100, 900),
    "FIT_FROM": (0, 300), "FIT_TO": (200, 900), "RHO_LOAD": (500, 3500), "RHO_INFILL": (0, 3300),
    "RHO_UNDER_LOAD": (0, 3300), "RHO_MANTLE": (2500, 3600), "RHO_WATER": (0, 1100), "FILL_LEVEL": (-6000, 1000),
    "YOUNG_GPA": (20, 200), "POISSON": (0.01, 0.49), "GRAVITY": (1.0, 25), "IN_PLANE": (-1e13, 1e13),
    "STEP_KM": (3, 60), "SWATH_KM": (0, 100), "SWATH_LINES": (1, 7), "SIGMA_M": (1, 500), "CONFIDENCE": (50, 99.9),
    "PICK_REACH": (1, 200), "END_SHEAR": (-5e12, 5e12), "END_MOMENT": (-5e17, 5e17), "SPACING_KM": (10, 200),
    "BEFORE_KM": (0, 100), "AFTER_KM": (10, 900), "SMOOTH_KM": (0, 300), "DIRECTIONS": (1, 24), "RADIUS_KM": (10, 1000),
    "RESOLUTION_KM": (1, 50), "NOISE_M": (0, 100), "SEED": (0, 1000), "WORKERS": (0, 2),
}  # fmt: skip
WEIGHTS = {"fittransects": 8, "fitstations": 6, "bendtransects": 5, "sampletransects": 3, "laytransects": 4}
"""How often each algorithm is drawn; others once, the demo less, for it writes a folder of files."""
BASES: dict[str, dict[str, tuple[str, str]]] = {
    "laytransects": {"GUIDE": ("lines", "good")},
    "gravitytransects": {"INPUT": ("table", "bent")},
    "platestrength": {"INPUT": ("table", "bent")},
    "agethickness": {"INPUT": ("table", "profiles")},
}
"""Layers of a good run, where they are not the first that an algorithm cannot do without."""
LAYERS = ("lines", "points", "polygons", "table", "raster")
ONE_OF_TWO = (("GUIDE", "CENTRES"), ("AGE_MYR", "HEAT_FLOW"), ("AGE_MYR", "AGE"), ("AGE_MYR", "AGE_FIELD"))
"""Keys of which the second is given in place of the first."""


@dataclass(frozen=True)
class Case:
    """One run."""

    number: int
    algorithm: str
    parameters: dict[str, Any]
    told: dict[str, str]
    """The parameters in words."""


class Maker:
    """Makes cases."""

    def __init__(self, seed: int, world: hostile.World, outputs: Path) -> None:
        self._seed, self._world, self._outputs = seed, world, outputs
        outputs.mkdir(parents=True, exist_ok=True)
        provider = QgsApplication.processingRegistry().providerById("downwarp")
        self._algorithms = {each.name(): each for each in sorted(provider.algorithms(), key=lambda each: each.name())}
        weights = np.array([WEIGHTS.get(name, 0.3 if name == "demolayers" else 1.0) for name in self._algorithms])
        self._shares = weights / weights.sum()

    def case(self, number: int) -> Case:
        """The case of a number."""
        rng = np.random.default_rng([self._seed, number])
        name = str(rng.choice(list(self._algorithms), p=self._shares))
        definitions = {each.name(): each for each in self._algorithms[name].parameterDefinitions()}
        parameters, told = {}, {}

        def give(key: str, value: Any, words: str | None = None) -> None:
            parameters[key] = value
            told[key] = words if words is not None else repr(value)[:200]

        for key, definition in definitions.items():
            kind = _kind(definition)
            optional = bool(definition.flags() & definition.Flag.FlagOptional)
            if definition.isDestination():
                value = self._destination(rng, definition, optional)
                if value is not None:
                    give(key, value)
            elif key in BASES.get(name, {}) or (kind in LAYERS and not optional):
                kind, good = BASES.get(name, {}).get(key, (kind, "good"))
                give(key, self._layer(kind, good), good)
            elif key == "SETTING":
                # The ground is a trench.
                give(key, 1 if rng.random() < 0.6 else int(rng.integers(5)))
            elif key == "STEP_KM":
                # A fit at every cell takes ten times as long and says no more.
                give(key, 15.0)
            elif key == "AGE_MYR":
                give(key, 60.0)
        if name == "checkstrip":
            give("SETTING", 0)
        fitting = {0: "ridge", 3: "thickness of a load"}.get(parameters.get("SETTING"))
        if fitting is not None and "DEM" in parameters:
            give("DEM", self._layer("raster", fitting), fitting)
        changes = int(rng.choice([0, 1, 2, 3, 6, 12], p=[0.05, 0.35, 0.25, 0.15, 0.12, 0.08]))
        inputs = [key for key, definition in definitions.items() if not definition.isDestination()]
        for key in rng.choice(inputs, size=min(changes, len(inputs)), replace=False).tolist():
            hostile_share = 0.45 if changes < 4 else 0.05
            give(key, *self._value(rng, definitions[key], rng.random() < hostile_share))
        for one, other in ONE_OF_TWO:
            if other in parameters and one in parameters and rng.random() < 0.8:
                del parameters[one], told[one]
        if rng.random() < 0.02:
            give(str(rng.choice(["TE_FORM", "", "é", "DEM ", "__class__"])), 1)
        if rng.random() < 0.02 and parameters:
            gone = str(rng.choice(list(parameters)))
            del parameters[gone]
            told[gone] = "left out"
        return Case(number, name, parameters, told)

    def _value(self, rng: np.random.Generator, definition, odd: bool) -> tuple[Any, str | None]:
        key, kind = definition.name(), _kind(definition)
        if kind in LAYERS:
            if odd and rng.random() < 0.25:
                return _pick(rng, self._world.odd_sources()), None
            # Kinds get mixed, too.
            drawn = kind if rng.random() < 0.93 else str(rng.choice(LAYERS))
            name = str(rng.choice(self._world.names(drawn)))
            value = self._layer(drawn, name)
            if drawn != "raster" and rng.random() < 0.1:
                value = QgsProcessingFeatureSourceDefinition(value.id(), bool(rng.random() < 0.5))
                return value, f"{drawn}: {name}, as a definition"
            return value, f"{drawn}: {name}"
        if kind == "number":
            if odd:
                return _pick(rng, hostile.odd_numbers()), None
            low, high = RANGES.get(key, (0.1, 1000.0))
            value = low * (high / low) ** rng.random() if low > 0 else low + (high - low) * rng.random()
            whole = definition.dataType() == QgsProcessingParameterNumber.Type.Integer
            value = round(value) if whole else float(value)
            return (str(value) if rng.random() < 0.2 else value), None
        if kind == "enum":
            count = len(definition.options())
            return (_pick(rng, [*hostile.odd_numbers(), count, 1.5, "1"]) if odd else int(rng.integers(count))), None
        if kind == "flag":
            return (_pick(rng, [2, "maybe", None, "", [], -1.5]) if odd else bool(rng.random() < 0.5)), None
        if kind == "crs":
            return _pick(rng, hostile.odd_crs()), None
        if kind == "band":
            return _pick(rng, [1, 2, 0, -1, 9, "1", "a", None, "", 1.5, 2**40] if odd else [1]), None
        return _pick(rng, hostile.odd_texts() + hostile.odd_numbers()[:5]), None

    def _layer(self, kind: str, name: str) -> Any:
        return self._world.raster(name) if kind == "raster" else self._world.vector(kind, name)

    def _destination(self, rng: np.random.Generator, definition, optional: bool) -> Any:
        kind = definition.type()
        chance = rng.random()
        if kind == "sink":
            if optional and chance < 0.5:
                return None
            if chance < 0.9:
                return "memory:"
            name = f"{definition.name().lower()}"
            folder = str(self._outputs)
            quoted = folder.replace("'", "\\'")
            return _pick(rng, [
                f"{folder}/{name}.gpkg", f"{folder}/{name}.fgb", f"{folder}/{name}.csv", f"{folder}/it's {name} é.gpkg",
                f"{folder}/{name}.shp", f"{folder}/none/{name}.gpkg", f"{folder}/{name}", folder, "", None,
                QgsProcessing.TEMPORARY_OUTPUT, f"ogr:dbname='{quoted}/all.gpkg' table=\"{name}\" (geom)", 5,
                QgsProcessingOutputLayerDefinition(f"{folder}/defined {name}.gpkg"), "postgres:nowhere", "\0",
            ])  # fmt: skip
        if kind == "folderDestination":
            return str(self._outputs / str(rng.choice(["demo", "demo é'\"", "a/b/c"])))
        if kind == "fileDestination":
            # A report takes seconds.
            return str(self._outputs / "report.html") if chance < 0.02 else None
        if kind == "rasterDestination":
            return str(self._outputs / f"{definition.name().lower()}.tif")
        return QgsProcessing.TEMPORARY_OUTPUT if not optional else None


def _pick(rng: np.random.Generator, values: list[Any]) -> Any:
    return values[int(rng.integers(len(values)))]


def _kind(definition) -> str:
    """The kind of values that a parameter takes."""
    kind = definition.type()
    if kind in ("source", "vector"):
        types = set(definition.dataTypes())
        for name, each in (
            ("lines", QgsProcessing.SourceType.TypeVectorLine),
            ("points", QgsProcessing.SourceType.TypeVectorPoint),
            ("polygons", QgsProcessing.SourceType.TypeVectorPolygon),
        ):
            if each in types:
                return name
        return "table"
    return {"boolean": "flag", "field": "text", "string": "text", "multilayer": "raster"}.get(kind, kind)
