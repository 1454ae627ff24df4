"""Tide gauges: where they are, and the harmonic constants of the tide there."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

__all__ = ["Gauges"]

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Gauges:
    """Harmonic constants at n gauges.

    Parameters
    ----------
    name : (n,) array of str
        What each is called.
    lon_deg, lat_deg : (n,) array of float
        Where it is, degrees.
    constituents : tuple of str
        Names of the k constituents.
    amplitude_m, phase_deg : (n, k) array of float
        Amplitude, metres, and Greenwich phase lag, degrees; NaN where not known.
    """

    name: NDArray[np.object_]
    lon_deg: FloatArray
    lat_deg: FloatArray
    constituents: tuple[str, ...]
    amplitude_m: FloatArray
    phase_deg: FloatArray

    def __len__(self) -> int:
        return len(self.name)

    def constants(self, constituent: str) -> NDArray[np.complex128]:
        """A exp(i G) at each gauge (n,), metres; NaN where the amplitude or the phase is not known."""
        column = self.constituents.index(constituent)
        return np.asarray(self.amplitude_m[:, column] * np.exp(1j * np.radians(self.phase_deg[:, column])))

    def rows(self, chosen: "Sequence[int] | NDArray[np.int64] | NDArray[np.bool_]") -> "Gauges":
        """Those of some rows only."""
        return Gauges(
            name=self.name[chosen],
            lon_deg=self.lon_deg[chosen],
            lat_deg=self.lat_deg[chosen],
            constituents=self.constituents,
            amplitude_m=self.amplitude_m[chosen],
            phase_deg=self.phase_deg[chosen],
        )
