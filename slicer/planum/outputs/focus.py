"""The picture behind a velocity: how sharp the migrated lines are at each velocity, and where their patches vote."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from pathlib import Path

import numpy as np

from planum.outputs.paper import FAINT, INK, SOFT, calm, figure, picture_of
from planum.outputs.writing import save_png
from planum.records import Velocity

__all__ = ["draw_focus"]


def draw_focus(path: Path, curve: Mapping[str, Sequence[float]], velocity: Velocity, *, statement: str = "") -> None:
    """Draw the focus scan: bars are votes, the line is the mean log kurtosis, the band the 1-sigma range kept.

    Parameters
    ----------
    curve
        ``velocity_m_per_ns``, ``votes`` and ``score``, of one length.
    velocity
        The velocity taken from it.
    statement
        JSON for the picture's text chunk, of :func:`~planum.outputs.writing.statement_text`.
    """
    v, votes, score = (np.asarray(curve[name], float) for name in ("velocity_m_per_ns", "votes", "score"))
    fig, canvas = figure(6.6, 2.9)
    axes = fig.add_axes((0.1, 0.2, 0.8, 0.66))
    calm(axes)
    axes.axvspan(velocity.value - velocity.error, velocity.value + velocity.error, color="#e4e4e4", lw=0)
    axes.axvline(velocity.value, color=INK, lw=1.0)
    axes.bar(v, votes, width=0.8 * np.gradient(v), color=FAINT, lw=0)
    axes.set_xlabel("velocity, m/ns", fontsize=7, color=SOFT)
    axes.set_ylabel("places that vote for it", fontsize=7, color=SOFT)
    sharp = axes.twinx()
    calm(sharp)
    sharp.plot(v, score, color=INK, lw=1.1, ls=(0, (4, 2)))
    sharp.set_ylabel("sharpness of the focused lines (dashed)", fontsize=7, color=SOFT)
    axes.set_xlim(v[0], v[-1])
    title = f"Velocity from focus: {velocity.value:.4f} ± {velocity.error:.4f} m/ns"
    fig.text(0.1, 0.91, title, fontsize=9, color=INK, weight="bold")
    canvas.draw()
    save_png(path, picture_of(canvas), title=title, sentence=velocity.method, statement=statement)
