"""Elastic constants of the plate, and the ways between elastic thickness, rigidity and flexural parameter."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from . import check
from .errors import DownwarpError


@dataclass(frozen=True)
class Elastic:
    """Constants that an elastic thickness depends on.

    Defaults are *common practice* in flexure studies; a thickness is comparable only between equal constants.
    """

    young: float = 100e9
    """Young's modulus E, Pa."""
    poisson: float = 0.25
    """Poisson's ratio nu, 1."""
    gravity: float = 9.81
    """Acceleration of gravity g, m/s2."""

    def __post_init__(self) -> None:
        check.number("YOUNG_GPA", self.young / 1e9, above=0, at_most=1e4)
        check.number("POISSON", self.poisson, above=-1, below=0.5)
        check.number("GRAVITY", self.gravity, above=0, at_most=100)

    def rigidity(self, thickness):
        """Flexural rigidity D = E Te^3 / (12 (1 - nu^2)), N m, of thickness Te in m (any shape).

        >>> round(Elastic().rigidity(30e3) / 1e23, 3)
        2.4
        """
        return self.young * np.asarray(thickness, dtype=float) ** 3 / (12.0 * (1.0 - self.poisson**2))

    def thickness(self, rigidity):
        """Elastic thickness Te, m, of rigidity D in N m (any shape): the inverse of `rigidity`."""
        return np.cbrt(12.0 * (1.0 - self.poisson**2) * np.asarray(rigidity, dtype=float) / self.young)


def restoring_stiffness(rho_mantle, rho_infill, gravity: float):
    """Restoring stiffness k = (rho_mantle - rho_infill) g, Pa/m; raises DownwarpError where it is not positive."""
    stiffness = (np.asarray(rho_mantle, dtype=float) - np.asarray(rho_infill, dtype=float)) * gravity
    if not (stiffness > 0).all():
        raise DownwarpError(
            "RHO_MANTLE ({mantle:g} kg/m3) must exceed the infill density ({infill:g} kg/m3): otherwise nothing "
            "restores the plate.",
            mantle=np.min(rho_mantle),
            infill=np.max(rho_infill),
        )
    return stiffness


def flexural_parameter(rigidity, stiffness):
    """Flexural parameter alpha = (4 D / k)^(1/4), m, of rigidity D (N m) and restoring stiffness k (Pa/m).

    Source: Turcotte & Schubert, Geodynamics, section 3.16 (from memory).
    """
    return (4.0 * np.asarray(rigidity, dtype=float) / np.asarray(stiffness, dtype=float)) ** 0.25
