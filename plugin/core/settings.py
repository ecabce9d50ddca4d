"""What a tectonic setting implies where the user leaves a value blank, and where each value in use came from."""

from __future__ import annotations

from dataclasses import dataclass, field

from . import check
from .elastic import Elastic
from .errors import DownwarpError
from .wording import say

VOLCANO, TRENCH, FORELAND, REMOVED, OTHER = range(5)
"""Settings, in the order of the key SETTING."""
CONTINUOUS, BROKEN, BOTH, PLATE_AS_SETTING = range(4)
"""Kinds of plate, in the order of the key PLATE."""
BREAK_START, BREAK_LOWEST, BREAK_GIVEN, BREAK_SEARCHED, BREAK_AS_SETTING = range(5)
"""Places of the break, in the order of the key BREAK_AT."""
LOAD_RELIEF, LOAD_THICKNESS, LOAD_NONE, LOAD_AS_SETTING = range(4)
"""Kinds of relief load, in the order of the key LOAD."""
FORCES_NONE, FORCES_SHEAR, FORCES_MOMENT, FORCES_BOTH, FORCES_AS_SETTING = range(5)
"""Forces at the break, in the order of the key END_FORCES."""
REGIONAL_NONE, REGIONAL_LEVEL, REGIONAL_TILT, REGIONAL_BOW, REGIONAL_AS_SETTING = range(5)
"""Regional surfaces, in the order of the key REGIONAL: the number of their coefficients."""

STRIP, MAPPED = range(2)
"""Shapes of the load, in the order of the key LOAD_SHAPE."""

PLATE_NAMES = (say("continuous"), say("broken"))

GIVEN, FROM_SETTING, MEASURED, FITTED = say("given"), say("setting"), say("measured"), say("fitted")
"""Where a value in use came from."""

RHO_AIR = 0.0
"""Density of air, kg/m3, neglected beside rock and water: *common practice*."""


@dataclass(frozen=True)
class Setting:
    """Defaults of one tectonic setting; densities are *common practice*, kg/m3."""

    name: str
    plate: int
    break_at: int
    load: int
    end_forces: int
    regional: int
    rho_load: float
    rho_infill: float
    """Infill where the bent surface is a separate layer (basement): what lies on it."""
    rho_infill_bare: float
    """Infill where the DEM itself is the bent surface: the fluid on it."""
    load_removed: bool = False
    rho_mantle: float = 3300.0
    rho_water: float = 1030.0


SETTINGS = (
    Setting(
        say("volcanic load on the seafloor"),
        CONTINUOUS,
        BREAK_START,
        LOAD_RELIEF,
        FORCES_NONE,
        REGIONAL_LEVEL,
        2800,
        2500,
        1030,
    ),
    Setting(
        say("trench and outer rise"), BROKEN, BREAK_LOWEST, LOAD_NONE, FORCES_BOTH, REGIONAL_TILT, 2800, 1030, 1030
    ),
    Setting(say("foreland basin"), BROKEN, BREAK_START, LOAD_RELIEF, FORCES_SHEAR, REGIONAL_LEVEL, 2670, 2400, 0),
    Setting(
        say("load removed"), CONTINUOUS, BREAK_START, LOAD_THICKNESS, FORCES_NONE, REGIONAL_LEVEL, 1000, 0, 0, True
    ),
    Setting(say("none of these"), CONTINUOUS, BREAK_START, LOAD_RELIEF, FORCES_NONE, REGIONAL_LEVEL, 2700, 1030, 1030),
)


@dataclass(frozen=True)
class FitOptions:
    """What the user asks of a fit; None means "as the setting". Lengths are in m, forces per metre of strike in SI."""

    setting: int = VOLCANO
    plate: int = PLATE_AS_SETTING
    te_from: float = 1e3
    te_to: float = 100e3
    break_at: int = BREAK_AS_SETTING
    break_position: float | None = None
    break_from: float | None = None
    break_to: float | None = None
    load: int = LOAD_AS_SETTING
    reference_level: float | None = None
    load_from: float | None = None
    load_to: float | None = None
    end_forces: int = FORCES_AS_SETTING
    regional: int = REGIONAL_AS_SETTING
    rho_load: float | None = None
    rho_infill: float | None = None
    rho_mantle: float | None = None
    rho_water: float | None = None
    rho_under_load: float | None = None
    fill_sinking_only: bool = False
    fill_level: float | None = None
    elastic: Elastic = field(default_factory=Elastic)
    in_plane: float = 0.0
    fit_from: float | None = None
    fit_to: float | None = None
    sigma: float | None = None
    robust: bool = False
    confidence: float = 0.9
    load_shape: int = STRIP
    check_strip: bool = False
    """Whether a fit with a strip is told what the strip is worth."""
    zones: int = 1
    """Zones of elastic thickness: 1, or 2 with a change at a distance from the break."""
    zone_from: float | None = None
    """Nearest distance of that change, m; None for a usual one."""
    zone_to: float | None = None
    """Farthest distance of it, m; the change is held where both are equal."""

    def __post_init__(self) -> None:
        for key, choice, count in (
            ("SETTING", self.setting, 5),
            ("PLATE", self.plate, 4),
            ("BREAK_AT", self.break_at, 5),
            ("LOAD", self.load, 4),
            ("END_FORCES", self.end_forces, 5),
            ("REGIONAL", self.regional, 5),
            ("LOAD_SHAPE", self.load_shape, 2),
        ):
            if choice not in range(count):
                raise DownwarpError(
                    "{key} is {choice!r}; it takes a number from 0 to {last}.", key=key, choice=choice, last=count - 1
                )
        check.number("TE_FROM", self.te_from / 1e3, at_least=0.1, at_most=1000)
        check.number("TE_TO", self.te_to / 1e3, at_least=0.1, at_most=1000)
        if self.te_from >= self.te_to:
            raise DownwarpError(
                "TE_FROM ({te_from:g} km) must be below TE_TO ({te_to:g} km).",
                te_from=self.te_from / 1e3,
                te_to=self.te_to / 1e3,
            )
        for key, value in (("RHO_LOAD", self.rho_load), ("RHO_MANTLE", self.rho_mantle)):
            if value is not None:
                check.number(key, value, above=0, at_most=20000)
        for key, value in (
            ("RHO_INFILL", self.rho_infill),
            ("RHO_WATER", self.rho_water),
            ("RHO_UNDER_LOAD", self.rho_under_load),
        ):
            if value is not None:
                check.number(key, value, at_least=0, at_most=20000)
        for low_key, low, high_key, high in (
            ("BREAK_FROM", self.break_from, "BREAK_TO", self.break_to),
            ("LOAD_FROM", self.load_from, "LOAD_TO", self.load_to),
            ("FIT_FROM", self.fit_from, "FIT_TO", self.fit_to),
        ):
            for key, value in ((low_key, low), (high_key, high)):
                if value is not None:
                    check.number(key, value / 1e3)
            if low is not None and high is not None and low >= high:
                raise DownwarpError(
                    "{low_key} ({low:g} km) must be below {high_key} ({high:g} km).",
                    low_key=low_key,
                    low=low / 1e3,
                    high_key=high_key,
                    high=high / 1e3,
                )
        if self.break_at == BREAK_GIVEN and self.break_position is None:
            raise DownwarpError("BREAK_KM is blank; BREAK_AT 2 takes the distance of the break in it.")
        if self.break_position is not None:
            check.number("BREAK_KM", self.break_position / 1e3, at_least=0)
        if self.break_at == BREAK_SEARCHED and (self.break_from is None or self.break_to is None):
            raise DownwarpError("BREAK_FROM and BREAK_TO must both be given where BREAK_AT is 3 (searched).")
        if self.sigma is not None:
            check.number("SIGMA_M", self.sigma, above=0)
        if self.reference_level is not None:
            check.number("REFERENCE_LEVEL", self.reference_level, at_least=-20000, at_most=20000)
        if self.fill_level is not None:
            check.number("FILL_LEVEL", self.fill_level, at_least=-20000, at_most=20000)
        check.number("IN_PLANE", self.in_plane)
        check.number("CONFIDENCE", self.confidence * 100, above=0, below=100)
        self._check_zones()
        if self.load_shape == MAPPED:
            self._check_mapped()

    def _check_mapped(self) -> None:
        """Refuse what a plan view does not have."""
        needs = say("LOAD_SHAPE is 1 (as mapped), which takes")
        plate, forces = self.chosen("plate")[0], self.chosen("end_forces")[0]
        if plate != CONTINUOUS:
            raise DownwarpError(
                "{needs} a continuous plate (PLATE 0), but PLATE comes to {plate}.", needs=needs, plate=plate
            )
        if forces != FORCES_NONE:
            raise DownwarpError(
                "{needs} no end forces (END_FORCES 0), but END_FORCES comes to {forces}.", needs=needs, forces=forces
            )
        if self.in_plane:
            raise DownwarpError(
                "{needs} no in-plane force, but IN_PLANE is {in_plane:g}.", needs=needs, in_plane=self.in_plane
            )
        if self.fill_sinking_only:
            raise DownwarpError("{needs} one infill everywhere: leave FILL_SINKING_ONLY out.", needs=needs)
        if self.zones > 1:
            raise DownwarpError("{needs} one thickness, but TE_ZONES is {zones}.", needs=needs, zones=self.zones)

    def _check_zones(self) -> None:
        if self.zones not in (1, 2):
            raise DownwarpError("TE_ZONES is {zones!r}; it takes 1 or 2.", zones=self.zones)
        for key, value in (("ZONE_CHANGE_FROM", self.zone_from), ("ZONE_CHANGE_TO", self.zone_to)):
            if value is not None:
                check.number(key, value / 1e3, above=0)
        if self.zone_from is not None and self.zone_to is not None and self.zone_from > self.zone_to:
            raise DownwarpError(
                "ZONE_CHANGE_FROM ({zone_from:g} km) must not be above ZONE_CHANGE_TO ({zone_to:g} km).",
                zone_from=self.zone_from / 1e3,
                zone_to=self.zone_to / 1e3,
            )
        if self.zones == 1:
            return
        needs = say("TE_ZONES is 2, which takes")
        plate = self.chosen("plate")[0]
        if plate != BROKEN:
            raise DownwarpError(
                "{needs} a broken plate (PLATE 1), but PLATE comes to {plate}.", needs=needs, plate=plate
            )
        if self.chosen("break_at")[0] == BREAK_SEARCHED:
            raise DownwarpError(
                "{needs} a break that is held, but BREAK_AT is {searched} (searched).",
                needs=needs,
                searched=BREAK_SEARCHED,
            )

    @property
    def defaults(self) -> Setting:
        """The setting's own values."""
        return SETTINGS[self.setting]

    def chosen(self, name: str) -> tuple[int, str]:
        """The value in use of an enumerated option, and where it came from."""
        value = getattr(self, name)
        as_setting = {"plate": 3, "break_at": 4, "load": 3, "end_forces": 4, "regional": 4}[name]
        if value == as_setting:
            return getattr(self.defaults, name), FROM_SETTING
        return value, GIVEN

    def densities(self, bare: bool) -> tuple[Densities, dict[str, str]]:
        """Densities in use, kg/m3, and where each came from; ``bare`` where the DEM itself is the bent surface."""
        default = self.defaults
        infill = default.rho_infill_bare if bare else default.rho_infill
        origins: dict[str, str] = {}

        def pick(name: str, given: float | None, otherwise: float) -> float:
            origins[name] = FROM_SETTING if given is None else GIVEN
            return otherwise if given is None else given

        rho_infill = pick("rho_infill", self.rho_infill, infill)
        result = Densities(
            load=pick("rho_load", self.rho_load, default.rho_load),
            infill=rho_infill,
            under_load=pick("rho_under_load", self.rho_under_load, rho_infill),
            mantle=pick("rho_mantle", self.rho_mantle, default.rho_mantle),
            water=pick("rho_water", self.rho_water, default.rho_water),
        )
        return result, origins


@dataclass(frozen=True)
class Densities:
    """Densities in kg/m3."""

    load: float
    infill: float
    under_load: float
    mantle: float
    water: float

    def __post_init__(self) -> None:
        for key, value in (("RHO_INFILL", self.infill), ("RHO_UNDER_LOAD", self.under_load)):
            if value >= self.mantle:
                raise DownwarpError(
                    "{key} ({value:g} kg/m3) must be below RHO_MANTLE ({mantle:g} kg/m3): otherwise nothing restores "
                    "the plate.",
                    key=key,
                    value=value,
                    mantle=self.mantle,
                )
