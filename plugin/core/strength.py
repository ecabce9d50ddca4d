"""Strength of the lithosphere against depth, and the moment that a plate of that strength carries as it bends.

Depth z is in m from the plate's top, positive down; stresses are differential, sigma_1 - sigma_3, in Pa and 0 or more.
Rock slides where the shear stress on the best-oriented fault reaches (Byerlee 1978)

    tau = min(0.85 sigma_n, 50 MPa + 0.6 sigma_n),

with sigma_n reduced by the pore pressure, and it flows at the given strain rate by power-law creep,

    sigma = (rate / A)^(1/n) e^(Q / n R T),

or, olivine at high stress, by glide, rate = rate_0 exp[-Q_p / (R T) (1 - sigma / sigma_p)^2]. The weaker of the two is
the strength. A plate bent to curvature kappa has the stress E / (1 - nu^2) kappa (z_n - z), tension positive, as far as
the strength allows; the neutral depth z_n is where the in-plane force balances, and the moment is that of the stress
about it.

Sources: Goetze & Evans 1979, Geophys. J. 59, for envelope and moment; constants in `constants` (all from memory).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from scipy.optimize import brentq

from . import check
from .constants import (
    COHESION_HIGH,
    FRICTION_HIGH,
    FRICTION_LOW,
    GAS,
    MECHANICAL_STRESS,
    MYR,
    OLIVINE_ENERGY,
    OLIVINE_FACTOR,
    OLIVINE_POWER,
    PEIERLS_ENERGY,
    PEIERLS_FROM,
    PEIERLS_RATE,
    PEIERLS_STRESS,
    QUARTZ_ENERGY,
    QUARTZ_FACTOR,
    QUARTZ_POWER,
    STRAIN_RATE,
    ZERO_CELSIUS,
)
from .cooling import STEADY, Geotherm
from .elastic import Elastic
from .errors import DownwarpError
from .wording import say

OCEANIC, CONTINENTAL = range(2)
"""What the plate is made of, in the order of the key ROCK: dry olivine throughout, or below a crust of dry
quartzite."""
STEPS = 1500
"""Depths at which the strength is taken."""
DEEPEST = 250e3
"""Depth, m, to which the strength is followed."""
NEGLIGIBLE = 1e6
"""Strength, Pa, that no longer bears on the moment."""
COLDER = 1e4
"""Factor, and its inverse, within which a geotherm is looked for that explains an elastic thickness."""


@dataclass(frozen=True)
class Rock:
    """What the strength depends on besides temperature."""

    kind: int = OCEANIC
    crust: float = 6.5e3
    """Thickness of the crust, m."""
    rho_crust: float = 2800.0
    """kg/m3."""
    rho_mantle: float = 3300.0
    """kg/m3."""
    pore_pressure: float = 0.37
    """Pore pressure over the weight of the rock above, 1: 0 dry, about 0.37 hydrostatic."""
    strain_rate: float = STRAIN_RATE.value
    """1/s."""
    gravity: float = 9.81
    """m/s2."""

    def __post_init__(self) -> None:
        if self.kind not in (OCEANIC, CONTINENTAL):
            raise DownwarpError("ROCK is {kind!r}; it takes 0 or 1.", kind=self.kind)
        check.number("CRUST_KM", self.crust / 1e3, at_least=0, at_most=200)
        check.number("RHO_CRUST", self.rho_crust, above=0, at_most=20000)
        check.number("RHO_MANTLE", self.rho_mantle, above=0, at_most=20000)
        check.number("PORE_PRESSURE", self.pore_pressure, at_least=0, below=1)
        check.number("STRAIN_RATE", self.strain_rate, at_least=1e-25, at_most=1e-3)

    def overburden(self, depth):
        """Weight of the rock above, Pa, less the pore pressure."""
        depth = np.asarray(depth, dtype=float)
        in_crust = np.minimum(depth, self.crust)
        weight = self.gravity * (self.rho_crust * in_crust + self.rho_mantle * (depth - in_crust))
        return weight * (1.0 - self.pore_pressure)


def sliding_shear(normal_stress):
    """Shear stress, Pa, at which rock slides under a normal stress, Pa (any shape).

    >>> float(sliding_shear(200e6)) / 1e6
    170.0
    """
    normal = np.asarray(normal_stress, dtype=float)
    return np.minimum(FRICTION_LOW.value * normal, COHESION_HIGH.value + FRICTION_HIGH.value * normal)


def sliding_strength(overburden) -> tuple[np.ndarray, np.ndarray]:
    """Differential stress, Pa, at which the best-oriented fault slides, in tension and in compression.

    With tau = C + mu sigma_n and s = sqrt(1 + mu^2) + mu, sigma_1 = s^2 sigma_3 + 2 C s; the effective overburden, Pa
    (any shape), is sigma_1 in tension and sigma_3 in compression. The weaker of the two laws counts.
    """
    vertical = np.asarray(overburden, dtype=float)
    tension, compression = [], []
    for friction, cohesion in ((FRICTION_LOW.value, 0.0), (FRICTION_HIGH.value, COHESION_HIGH.value)):
        s = math.sqrt(1.0 + friction**2) + friction
        tension.append(vertical - (vertical - 2.0 * cohesion * s) / s**2)
        compression.append((s**2 - 1.0) * vertical + 2.0 * cohesion * s)
    return np.minimum(*tension), np.minimum(*compression)


def power_law(temperature, strain_rate: float, factor: float, power: float, energy: float):
    """Differential stress, Pa, of power-law creep at temperature, degrees C (any shape): (rate / A)^(1/n) e^(Q /
    nRT)."""
    kelvin = np.asarray(temperature, dtype=float) + ZERO_CELSIUS.value
    return (strain_rate / factor) ** (1.0 / power) * np.exp(np.minimum(energy / (power * GAS.value * kelvin), 700.0))


def olivine_strength(temperature, strain_rate: float):
    """Differential stress, Pa, at which dry olivine flows at temperature, degrees C (any shape).

    Power-law creep below 200 MPa, glide above; where the one has not yet fallen to 200 MPa and the other has, 200 MPa.
    """
    kelvin = np.asarray(temperature, dtype=float) + ZERO_CELSIUS.value
    creep = power_law(temperature, strain_rate, OLIVINE_FACTOR.value, OLIVINE_POWER.value, OLIVINE_ENERGY.value)
    eased = GAS.value * kelvin / PEIERLS_ENERGY.value * math.log(PEIERLS_RATE.value / strain_rate)
    glide = PEIERLS_STRESS.value * (1.0 - np.sqrt(eased))
    return np.where(creep <= PEIERLS_FROM.value, creep, np.maximum(np.minimum(glide, creep), PEIERLS_FROM.value))


def quartz_strength(temperature, strain_rate: float):
    """Differential stress, Pa, at which dry quartzite flows at temperature, degrees C (any shape)."""
    return power_law(temperature, strain_rate, QUARTZ_FACTOR.value, QUARTZ_POWER.value, QUARTZ_ENERGY.value)


@dataclass(frozen=True)
class Envelope:
    """Strength against depth, each of shape (n,)."""

    depth: np.ndarray
    """m, from 0, increasing."""
    tension: np.ndarray
    """Pa, 0 or more."""
    compression: np.ndarray
    """Pa, 0 or more."""
    temperature: np.ndarray
    """Degrees C."""

    def mechanical_thickness(self, stress: float = MECHANICAL_STRESS.value) -> float:
        """Depth, m, below which the strength in tension stays under ``stress``, Pa; 0 where it is so everywhere."""
        strong = np.flatnonzero(self.tension >= stress)
        if strong.size == 0:
            return 0.0
        last = int(strong[-1])
        if last + 1 == self.depth.size:
            return float(self.depth[-1])
        high, low = self.tension[last], self.tension[last + 1]
        return float(np.interp(stress, [low, high], [self.depth[last + 1], self.depth[last]]))


def envelope(rock: Rock, geotherm: Geotherm, deepest: float = DEEPEST) -> Envelope:
    """Strength against depth down to where it no longer bears on the moment, or to ``deepest``, m."""
    depth = np.linspace(0.0, deepest, STEPS)
    flow = _flow(rock, geotherm, depth)
    bearing = np.flatnonzero(flow > NEGLIGIBLE)
    bottom = depth[min(int(bearing[-1]) + 1, STEPS - 1)] if bearing.size else depth[1]
    depth = np.linspace(0.0, bottom, STEPS)
    flow = _flow(rock, geotherm, depth)
    tension, compression = sliding_strength(rock.overburden(depth))
    return Envelope(depth, np.minimum(tension, flow), np.minimum(compression, flow), geotherm.temperature(depth))


def _flow(rock: Rock, geotherm: Geotherm, depth: np.ndarray) -> np.ndarray:
    temperature = geotherm.temperature(depth)
    flow = olivine_strength(temperature, rock.strain_rate)
    if rock.kind == CONTINENTAL:
        flow = np.where(depth < rock.crust, quartz_strength(temperature, rock.strain_rate), flow)
    return flow


@dataclass(frozen=True)
class BentPlate:
    """Stress and moment of a plate of limited strength at one curvature."""

    curvature: float
    """kappa, 1/m, positive where the top is in tension (as w'' is, w positive down)."""
    neutral: float
    """Neutral depth z_n, m."""
    stress: np.ndarray
    """Pa, tension positive, at the envelope's depths."""
    moment: float
    """N, with the sign of the curvature."""


def bend_envelope(strength: Envelope, curvature: float, elastic: Elastic, in_plane: float = 0.0) -> BentPlate:
    """Bend a plate of given strength to a curvature, 1/m, under an in-plane force, N/m, compression positive.

    Raises DownwarpError where the plate cannot carry that force at all.
    """
    curvature = check.number("curvature", curvature)
    check.number("IN_PLANE", in_plane)
    depth, modulus = strength.depth, elastic.young / (1.0 - elastic.poisson**2)
    weights = _trapezoid(depth)

    def stress(neutral: float) -> np.ndarray:
        return np.clip(modulus * curvature * (neutral - depth), -strength.compression, strength.tension)

    def force(neutral: float) -> float:
        return float(weights @ stress(neutral)) + in_plane

    reach = depth[-1] + max(strength.tension.max(), strength.compression.max()) / max(modulus * abs(curvature), 1e-300)
    low, high = (-reach, depth[-1] + reach) if curvature > 0 else (depth[-1] + reach, -reach)
    if curvature == 0.0:
        return BentPlate(0.0, math.nan, np.zeros(depth.shape), 0.0)
    if not force(low) < 0.0 < force(high):
        raise DownwarpError(
            "IN_PLANE is {in_plane:g} N/m, more than the {compression:.3g} (compression) or {tension:.3g} N/m "
            "(tension) that the plate's strength carries.",
            in_plane=in_plane,
            compression=-force(low) + in_plane,
            tension=force(high) - in_plane,
        )
    neutral = brentq(force, low, high, xtol=1e-6, rtol=1e-14)
    found = stress(neutral)
    return BentPlate(curvature, float(neutral), found, float(weights @ (found * (neutral - depth))))


def _trapezoid(depth: np.ndarray) -> np.ndarray:
    """Weights of the trapezoidal rule."""
    gaps = np.diff(depth)
    return 0.5 * (np.append(gaps, 0.0) + np.insert(gaps, 0, 0.0))


def effective_thickness(plate: BentPlate, elastic: Elastic) -> float:
    """Elastic thickness, m, of the elastic plate that has the same moment at the same curvature: M = D(Te) kappa."""
    return float(elastic.thickness(plate.moment / plate.curvature))


@dataclass(frozen=True)
class MomentCurve:
    """Moment against curvature of one sign, each of shape (n,)."""

    curvature: np.ndarray
    """Size, 1/m, increasing."""
    moment: np.ndarray
    """Size, N."""
    thickness: np.ndarray
    """Elastic thickness that has the same moment, m."""


def moment_curve(
    strength: Envelope, elastic: Elastic, sign: float, low: float, high: float, in_plane: float = 0.0, count: int = 61
) -> MomentCurve:
    """Moment against curvatures from ``low`` to ``high``, 1/m, even in their logarithm, of the given sign."""
    curvature = np.geomspace(low, high, count)
    bent = [bend_envelope(strength, math.copysign(each, sign), elastic, in_plane) for each in curvature]
    moment = np.array([abs(each.moment) for each in bent])
    return MomentCurve(curvature, moment, elastic.thickness(moment / curvature))


def explaining(
    rock: Rock, geotherm: Geotherm, curvature: float, thickness: float, elastic: Elastic, in_plane: float = 0.0
) -> tuple[Geotherm, Envelope] | None:
    """The geotherm, older or younger than the one given, in which a plate bent to ``curvature`` (1/m) has the moment of
    an elastic plate of ``thickness`` (m); and its strength. None where there is none (a cooling plate stops
    cooling)."""

    def excess(log_factor: float) -> float:
        strength = envelope(rock, geotherm.scaled(math.exp(log_factor)))
        try:
            bent = bend_envelope(strength, curvature, elastic, in_plane)
        except DownwarpError:
            return -thickness
        return effective_thickness(bent, elastic) - thickness

    oldest = COLDER if geotherm.kind == STEADY else 9.9e3 / (geotherm.age / MYR)
    low, high = -math.log(COLDER), math.log(min(COLDER, oldest))
    if geotherm.kind == STEADY:
        low = max(low, math.log(geotherm.heat_flow / 9.9))
    if excess(low) > 0 or excess(high) < 0:
        return None
    found = geotherm.scaled(math.exp(brentq(excess, low, high, xtol=1e-4)))
    return found, envelope(rock, found)


@dataclass(frozen=True)
class StrengthVerdict:
    """A fitted plate against the strength of its age, at its largest curvature."""

    curvature: float
    """1/m, positive where the top is in tension."""
    elastic_thickness: float
    """Of the fitted plate, m."""
    elastic_moment: float
    """Its moment D kappa, N."""
    moment_limit: float
    """Largest moment that the strength carries, N."""
    bent: BentPlate
    """The plate of that strength at the same curvature."""
    expected_thickness: float
    """Elastic thickness that has the same moment there, m."""
    mechanical: float
    """Mechanical thickness of the strength, m."""
    mechanical_of_fit: float | None
    """Mechanical thickness that the elastic thickness and the curvature ask for, m; None where no geotherm does."""
    geotherm_of_fit: Geotherm | None
    """The geotherm that has it."""
    overstressed: float
    """Share of the elastic plate's thickness in which its stress exceeds the strength, 1."""
    strength: Envelope
    geotherm: Geotherm

    @property
    def moment_share(self) -> float:
        """Moment of the elastic plate over the largest that the strength carries, 1."""
        return self.elastic_moment / self.moment_limit


def weigh(
    rock: Rock, geotherm: Geotherm, curvature: float, thickness: float, elastic: Elastic, in_plane: float = 0.0
) -> StrengthVerdict:
    """Compare an elastic plate of ``thickness`` (m), bent to ``curvature`` (1/m), with the strength of its age."""
    thickness = check.number(say("the elastic thickness in km"), thickness / 1e3, above=0) * 1e3
    curvature = check.number("curvature", curvature)
    if curvature == 0.0:
        raise DownwarpError("The plate is not bent: its curvature is 0 everywhere, and any strength carries it.")
    strength = envelope(rock, geotherm)
    bent = bend_envelope(strength, curvature, elastic, in_plane)
    saturated = bend_envelope(strength, math.copysign(1e-3, curvature), elastic, in_plane)
    found = explaining(rock, geotherm, curvature, thickness, elastic, in_plane)
    return StrengthVerdict(
        curvature,
        thickness,
        float(elastic.rigidity(thickness)) * abs(curvature),
        abs(saturated.moment),
        bent,
        effective_thickness(bent, elastic),
        strength.mechanical_thickness(),
        None if found is None else found[1].mechanical_thickness(),
        None if found is None else found[0],
        _overstressed(strength, curvature, thickness, elastic),
        strength,
        geotherm,
    )


def elastic_stress(depth, curvature: float, thickness: float, elastic: Elastic) -> np.ndarray:
    """Stress, Pa, tension positive, of an elastic plate at depths (m) within it: E / (1 - nu^2) kappa (Te / 2 - z)."""
    return elastic.young / (1.0 - elastic.poisson**2) * curvature * (0.5 * thickness - np.asarray(depth, dtype=float))


def _overstressed(strength: Envelope, curvature: float, thickness: float, elastic: Elastic) -> float:
    depth = np.linspace(0.0, thickness, STEPS)
    stress = elastic_stress(depth, curvature, thickness, elastic)
    tension = np.interp(depth, strength.depth, strength.tension, right=0.0)
    compression = np.interp(depth, strength.depth, strength.compression, right=0.0)
    return float(np.mean((stress > tension) | (stress < -compression)))
