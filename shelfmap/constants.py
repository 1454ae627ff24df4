"""Gravity, Earth rotation and the tidal constituents, each value with its source."""

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

__all__ = [
    "ASTRONOMICAL_RATES_DEG_PER_H",
    "CONSTITUENTS",
    "EARTH_ROTATION_RAD_S",
    "GRAVITY_M_S2",
    "Constituent",
]

GRAVITY_M_S2: Final = 9.81
EARTH_ROTATION_RAD_S: Final = 7.292115e-5

#: Rates of the six astronomical arguments, degrees per mean solar hour: lunar time, then the mean longitudes
#: of moon, sun, lunar perigee, lunar node (sign reversed) and solar perigee. From the linear terms of the
#: standard mean-longitude polynomials at J2000 (481267.88123421, 36000.76983, 4069.0137287, -1934.1362608 and
#: 1.7194669 degrees per Julian century of 876600 hours); lunar time is 15 - s + h.
ASTRONOMICAL_RATES_DEG_PER_H: Final = (
    15.0 - 481267.88123421 / 876600.0 + 36000.76983 / 876600.0,
    481267.88123421 / 876600.0,
    36000.76983 / 876600.0,
    4069.0137287 / 876600.0,
    1934.1362608 / 876600.0,
    1.7194669 / 876600.0,
)


@dataclass(frozen=True, slots=True)
class Constituent:
    """One line of the tide: its name and its Doodson number.

    Parameters
    ----------
    name : str
        Usual name. Lists differ on some names, so results carry the speed too.
    doodson : str
        Doodson number ``abc.def``: the multiples of the six astronomical arguments, the last five with 5 added
        (Doodson 1921, Proc. R. Soc. A 100, 305-329; numbers from memory, confirmed by the speeds they give).

    Examples
    --------
    >>> round(CONSTITUENTS["M2"].speed_deg_per_h, 7)
    28.9841042
    >>> round(CONSTITUENTS["K1"].period_h, 4)
    23.9345
    """

    name: str
    doodson: str

    @property
    def speed_deg_per_h(self) -> float:
        """Speed, degrees per mean solar hour."""
        digits = [int(digit) for digit in self.doodson.replace(".", "")]
        multiples = [digits[0], *(digit - 5 for digit in digits[1:])]
        return sum(n * rate for n, rate in zip(multiples, ASTRONOMICAL_RATES_DEG_PER_H, strict=True))

    @property
    def period_h(self) -> float:
        """Period, mean solar hours."""
        return 360.0 / self.speed_deg_per_h


_DOODSON = {
    "Sa": "056.554", "Ssa": "057.555", "Mm": "065.455", "MSf": "073.555", "Mf": "075.555",
    "2Q1": "125.755", "Q1": "135.655", "rho1": "137.455", "O1": "145.555", "pi1": "162.556", "P1": "163.555",
    "S1": "164.555", "K1": "165.555", "psi1": "166.554", "phi1": "167.555", "J1": "175.455", "OO1": "185.555",
    "2N2": "235.755", "mu2": "237.555", "N2": "245.655", "nu2": "247.455", "M2": "255.555", "lam2": "263.655",
    "L2": "265.455", "T2": "272.556", "S2": "273.555", "R2": "274.554", "K2": "275.555",
    "M3": "355.555", "MN4": "445.655", "M4": "455.555", "MS4": "473.555", "M6": "655.555",
}  # fmt: skip

#: Every constituent shelfmap knows, by name, in order of speed.
CONSTITUENTS: Final[Mapping[str, Constituent]] = MappingProxyType(
    {name: Constituent(name, doodson) for name, doodson in _DOODSON.items()}
)
