"""Harmonic constants of tide gauges: where each stands, and amplitude and phase of each constituent there."""

from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from shelfmap.errors import LayerError

__all__ = ["Gauges"]

FloatArray = NDArray[np.float64]
ComplexArray = NDArray[np.complex128]


@dataclass(frozen=True, slots=True, kw_only=True)
class Gauges:
    """Tide gauges, one row each, and the constituents known at any of them.

    Attributes
    ----------
    name : (n,) array of str
        Identity, each another.
    lon_deg, lat_deg : (n,) array of float
        Place, degrees; longitudes from -180 up to 180.
    constituents : tuple of str
        Names of the k constituents, in the order of the columns below.
    amplitude_m : (n, k) array of float
        Amplitude, metres; NaN where not given.
    phase_deg : (n, k) array of float
        Greenwich phase lag, degrees from 0 up to 360; NaN where not given.

    Examples
    --------
    >>> gauges = Gauges(
    ...     name=np.array(["A", "B"], dtype=object), lon_deg=np.array([1.0, 2.0]), lat_deg=np.array([50.0, 51.0]),
    ...     constituents=("M2",), amplitude_m=np.array([[0.5], [1.0]]), phase_deg=np.array([[90.0], [np.nan]]),
    ... )
    >>> len(gauges), gauges.constants("M2").round(3)
    (2, array([ 0.+0.5j, nan+nanj]))
    """

    name: NDArray[np.object_]
    lon_deg: FloatArray
    lat_deg: FloatArray
    constituents: tuple[str, ...]
    amplitude_m: FloatArray
    phase_deg: FloatArray

    def __post_init__(self) -> None:
        for field in fields(self):
            if isinstance(values := getattr(self, field.name), np.ndarray):
                values.setflags(write=False)

    def __len__(self) -> int:
        return len(self.name)

    def constants(self, constituent: str) -> ComplexArray:
        """Complex amplitude of one constituent at each gauge, metres.

        Parameters
        ----------
        constituent : str
            One of `constituents`.

        Returns
        -------
        (n,) array of complex
            A exp(+i G): with the time factor exp(-i w t) a positive lag is late. NaN where amplitude or phase is
            not given.

        Raises
        ------
        LayerError
            If the gauges do not have this constituent.
        """
        if constituent not in self.constituents:
            raise LayerError(f"the gauges have no {constituent}; they have {', '.join(self.constituents)}")
        column = self.constituents.index(constituent)
        amplitude_m, phase_rad = self.amplitude_m[:, column], np.radians(self.phase_deg[:, column])
        out = np.full(len(self), complex(np.nan, np.nan))
        known = ~(np.isnan(amplitude_m) | np.isnan(phase_rad))
        out[known] = amplitude_m[known] * np.exp(1j * phase_rad[known])
        return out

    def rows(self, index: Any) -> "Gauges":
        """Some of them, by a slice, row numbers or a mask, in the order asked for."""
        return Gauges(
            name=self.name[index],
            lon_deg=self.lon_deg[index],
            lat_deg=self.lat_deg[index],
            constituents=self.constituents,
            amplitude_m=self.amplitude_m[index],
            phase_deg=self.phase_deg[index],
        )
