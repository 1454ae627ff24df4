"""Gauges beside what was computed there: the gain of the transect next to each, the 2-D gain, the tide predicted."""

from dataclasses import dataclass, fields
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray
from scipy.stats import spearmanr

from shelfmap.edgetide import explained_share
from shelfmap.errors import LayerError
from shelfmap.gaugefile import read_gauges
from shelfmap.gauges import Gauges
from shelfmap.geodesy import distance_bearing
from shelfmap.settings import Settings
from shelfmap.vectors import layers_in, read_table
from shelfmap.waves import Wave, waves_of

__all__ = ["Comparison", "WaveScore", "compare"]

FloatArray = NDArray[np.float64]
Table = dict[str, NDArray[Any]]

#: With fewer gauges than this a rank correlation says nothing.
FEWEST: Final = 5


@dataclass(frozen=True, slots=True, kw_only=True)
class WaveScore:
    """How well the gauges of one constituent are met; None where too few have it or nothing was computed."""

    wave: Wave
    n_transect: int
    """Gauges with a transect near enough that has a gain."""
    rho_transect: float | None
    """Rank correlation (Spearman) of the amplitude observed with the gain of that transect, with friction."""
    n_field: int
    """Gauges in reach of the 2-D region."""
    rho_field: float | None
    """Rank correlation with the 2-D gain over the same tide all along the edge."""
    rho_left_out: float | None
    """Rank correlation with the amplitude predicted from all other gauges."""
    explained_left_out: float | None
    """Share of the tide that this prediction explains, phases counted."""

    def line(self) -> str:
        """All of it in a sentence."""
        parts = [
            f"rank correlation of the amplitude with {what} {rho:.2f} ({count} gauges)"
            for what, rho, count in (
                ("the transect's gain", self.rho_transect, self.n_transect),
                ("the 2-D gain", self.rho_field, self.n_field),
                ("the prediction from the other gauges", self.rho_left_out, self.n_field),
            )
            if rho is not None
        ]
        if self.explained_left_out is not None:
            parts.append(f"that prediction explains {self.explained_left_out:.0%} of the tide")
        return f"{self.wave.name}: {'; '.join(parts) or 'too few gauges'}"


@dataclass(frozen=True, slots=True, kw_only=True, eq=False)
class Comparison:
    """Gauges of a run beside what was computed."""

    table: Table
    """One row a gauge."""
    scores: tuple[WaveScore, ...]

    def lines(self) -> list[str]:
        """How well the gauges are met, a line a constituent."""
        return [score.line() for score in self.scores]

    def summary(self) -> dict[str, Any]:
        """How well they are met, ready for JSON."""
        return {
            score.wave.name: {field.name: getattr(score, field.name) for field in fields(score) if field.name != "wave"}
            for score in self.scores
        }


def compare(settings: Settings, *, within_km: float = 50.0) -> Comparison:
    """Compare the output of a run with the gauges of its settings.

    Parameters
    ----------
    settings : Settings
        Those that the output was screened with; `gauges.file` must be named.
    within_km : float
        A transect farther than this from a gauge says nothing about it, kilometres.

    Raises
    ------
    LayerError
        If there is no output yet, or it was made with other gauges or waves.
    SettingsError
        If the gauges cannot be read.
    """
    waves = [wave for wave in waves_of(settings) if wave.name]
    gauges = read_gauges(settings.gauges, [wave.name for wave in waves])
    waves = [wave for wave in waves if wave.name in gauges.constituents]
    path = settings.output.path
    if not path.exists():
        raise LayerError(f"output {path} does not exist yet; run shelfmap screen with these settings first")
    transects = read_table(path, "transects")
    solved = _solved(path, gauges)
    table: Table = {"gauge": gauges.name, "lon_deg": gauges.lon_deg, "lat_deg": gauges.lat_deg}
    scores = []
    for wave in waves:
        columns = _wave_columns(path, wave, gauges, transects, solved, within_km)
        table |= columns
        scores.append(_score(wave, columns))
    return Comparison(table=table, scores=tuple(scores))


def _solved(path: Path, gauges: Gauges) -> Table | None:
    """Layer of gauges of the output; None where there was no 2-D region."""
    if "gauges" not in layers_in(path):
        return None
    solved = read_table(path, "gauges")
    if solved["gauge"].tolist() != gauges.name.tolist():
        raise LayerError(f"output {path} was made with other gauges; run shelfmap screen with these settings again")
    return solved


def _wave_columns(
    path: Path, wave: Wave, gauges: Gauges, transects: Table, solved: Table | None, within_km: float
) -> Table:
    """What was observed and computed of one constituent at each gauge."""
    gain = transects.get(f"damped_gain_{wave.label}")
    if gain is None:
        raise LayerError(f"output {path} holds no {wave.name}; run shelfmap screen with these settings again")
    row, away_km = _nearest(gauges, transects, np.isfinite(gain))
    near = away_km <= within_km
    column = gauges.constituents.index(wave.name)
    none = np.full(len(gauges), np.nan)
    label = wave.label
    out: Table = {
        f"observed_{label}_m": gauges.amplitude_m[:, column],
        f"observed_{label}_deg": gauges.phase_deg[:, column],
        f"transect_{label}": np.where(near, transects["transect_id"][row], np.nan),
        f"transect_away_{label}_km": np.where(near, away_km, np.nan),
        f"transect_gain_{label}": np.where(near, gain[row], np.nan),
    }
    for name in (f"field_gain_{label}", f"left_out_{label}_m", f"left_out_{label}_deg"):
        out[name] = none if solved is None else solved[name]
    return out


def _nearest(gauges: Gauges, transects: Table, usable: NDArray[np.bool_]) -> tuple[NDArray[np.int64], FloatArray]:
    """Row of the nearest transect that may be used for each gauge, and how far its shore is, kilometres."""
    rows = np.flatnonzero(usable)
    if not len(rows):
        return np.zeros(len(gauges), dtype=np.int64), np.full(len(gauges), np.inf)
    away_m, _ = distance_bearing(
        gauges.lon_deg[:, None], gauges.lat_deg[:, None], transects["lon_deg"][rows], transects["lat_deg"][rows]
    )
    nearest = away_m.argmin(axis=1)
    return rows[nearest], away_m[np.arange(len(gauges)), nearest] / 1e3


def _score(wave: Wave, columns: Table) -> WaveScore:
    label = wave.label
    observed_m = columns[f"observed_{label}_m"]
    left_out_m = columns[f"left_out_{label}_m"]
    observed, left_out = (
        columns[f"{which}_{label}_m"] * np.exp(1j * np.radians(columns[f"{which}_{label}_deg"]))
        for which in ("observed", "left_out")
    )
    n_transect, rho_transect = _rank(observed_m, columns[f"transect_gain_{label}"])
    n_field, rho_field = _rank(observed_m, columns[f"field_gain_{label}"])
    _, rho_left_out = _rank(observed_m, left_out_m)
    n_constants = int((np.isfinite(observed) & np.isfinite(left_out)).sum())  # fewer where only amplitudes are known
    explained = explained_share(observed, left_out) if n_constants >= FEWEST else np.nan
    return WaveScore(
        wave=wave,
        n_transect=n_transect,
        rho_transect=rho_transect,
        n_field=n_field,
        rho_field=rho_field,
        rho_left_out=rho_left_out,
        explained_left_out=None if np.isnan(explained) else explained,
    )


def _rank(observed: FloatArray, computed: FloatArray) -> tuple[int, float | None]:
    """Gauges that have both, and their rank correlation."""
    both = np.isfinite(observed) & np.isfinite(computed)
    count = int(both.sum())
    if count < FEWEST or np.ptp(observed[both]) == 0 or np.ptp(computed[both]) == 0:
        return count, None
    return count, float(spearmanr(observed[both], computed[both]).statistic)
