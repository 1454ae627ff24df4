"""The waves of a run: tidal constituents and further periods, named as columns name them."""

from dataclasses import dataclass

import numpy as np

from shelfmap.constants import CONSTITUENTS
from shelfmap.settings import Settings
from shelfmap.words import wave_label

__all__ = ["Wave", "waves_of"]


@dataclass(frozen=True, slots=True)
class Wave:
    """A wave asked for."""

    name: str
    """Constituent, or empty for a further period."""
    label: str
    """How columns call it."""
    period_h: float
    """Period, hours."""

    @property
    def omega_rad_s(self) -> float:
        """Angular frequency, radians per second."""
        return float(2 * np.pi / (self.period_h * 3600))


def waves_of(settings: Settings) -> tuple[Wave, ...]:
    """Waves of a run: constituents in the order asked for, then further periods."""
    named = [Wave(name, wave_label(name), CONSTITUENTS[name].period_h) for name in settings.response.constituents]
    return (*named, *(Wave("", wave_label(period), period) for period in settings.response.periods_h))
