"""Figures, drawn by matplotlib without a screen."""

import io
import warnings
from collections.abc import Sequence
from typing import Any, Final

import numpy as np
from matplotlib.figure import Figure

from shelfmap.comparison import Comparison, WaveScore

__all__ = ["comparison_figure"]

_DOTS: Final = {"s": 16, "color": "#0b6e75", "alpha": 0.75, "linewidths": 0}
_PANEL_IN: Final = 3.1


def comparison_figure(comparison: Comparison, title: str) -> bytes:
    """PNG of gauges against the transects' gain, the 2-D gain and the tide predicted: a row of panels a constituent.

    The same comparison gives the same bytes as long as matplotlib is the same.
    """
    scores: Sequence[WaveScore] = comparison.scores
    figure = Figure(figsize=(3 * _PANEL_IN + 0.6, _PANEL_IN * len(scores) + 0.5), layout="constrained")
    axes = np.atleast_2d(figure.subplots(len(scores), 3, squeeze=False))
    for row, score in zip(axes, scores, strict=True):
        label, name = score.wave.label, score.wave.name
        observed = comparison.table[f"observed_{label}_m"]
        for panel, (column, what, rho) in zip(
            row,
            (
                (f"transect_gain_{label}", "gain of the nearest transect", score.rho_transect),
                (f"field_gain_{label}", "2-D gain", score.rho_field),
                (f"left_out_{label}_m", "predicted from other gauges [m]", score.rho_left_out),
            ),
            strict=True,
        ):
            _scatter(panel, comparison.table[column], observed, rho)
            panel.set(xlabel=f"{name}: {what}", ylabel=f"{name} observed [m]")
        top = np.nanmax(np.concatenate([observed, comparison.table[f"left_out_{label}_m"], [0.0]]))
        row[2].plot([0, top], [0, top], color="#888888", linewidth=0.8)
    figure.suptitle(title, parse_math=False, wrap=True)
    sink = io.BytesIO()
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", "Glyph .* missing from", UserWarning)  # a title in letters the font lacks
        figure.savefig(sink, dpi=110, metadata={"Software": None})
    return sink.getvalue()


def _scatter(panel: Any, computed: Any, observed: Any, rho: float | None) -> None:
    both = np.isfinite(computed) & np.isfinite(observed)
    if not both.any():
        panel.text(0.5, 0.5, "no gauge has one", ha="center", va="center", transform=panel.transAxes)
        panel.set(xticks=[], yticks=[])
        return
    panel.scatter(computed[both], observed[both], **_DOTS)
    panel.set_xlim(left=0)
    panel.set_ylim(bottom=0)
    said = "too few to rank" if rho is None else f"rank correlation {rho:.2f}"
    panel.set_title(f"{said}, {int(both.sum())} gauges", fontsize="medium")
    panel.grid(linewidth=0.3)
