"""The figures of a report: matplotlib SVG with text as text, the same bytes for the same data.

Nothing is told by colour alone: limits are dashed and labelled, readings have markers, bands are
named in the caption.
"""

import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import matplotlib as mpl
import numpy as np
import pandas as pd
from matplotlib.figure import Figure
from matplotlib.ticker import EngFormatter

WIDTH_IN, HEIGHT_IN = 6.4, 2.7
MOST_POINTS = 400  # a line on paper shows no more; a long run is thinned for the figure only
EDGE_PCT = 50.0
STYLE: Any = {
    "svg.fonttype": "none",
    "font.family": "sans-serif",
    "font.size": 8,
    "axes.grid": True,
    "grid.alpha": 0.3,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "lines.linewidth": 1.0,
}
MARGINS = {"left": 0.1, "right": 0.98, "bottom": 0.17, "top": 0.95, "wspace": 0.28}
_ID = re.compile(r'(id="|url\(#|xlink:href="#|href="#)')


@dataclass(frozen=True, kw_only=True, slots=True)
class Bounds:
    """A limit to draw: at a frequency or bias (None: everywhere), from low to high."""

    at: float | None
    low: float | None
    high: float | None


def svg(figure: Figure, *, key: str, title: str, description: str) -> str:
    """The figure as inline SVG; ``key`` keeps its ids apart from those of others on the page."""
    stream = io.StringIO()
    with mpl.rc_context({"svg.hashsalt": key, "svg.fonttype": "none"}):
        figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None})
    text = stream.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = _ID.sub(lambda match: f"{match.group(1)}{key}-", text)
    labels = (
        f'<title id="{key}-title">{_escaped(title)}</title>'
        f'<desc id="{key}-desc">{_escaped(description)}</desc>'
    )
    head_end = text.index(">") + 1
    head = text[: head_end - 1] + f' role="img" aria-labelledby="{key}-title {key}-desc">'
    return head + labels + text[head_end:]


def _escaped(text: str) -> str:
    return text.replace("&", "&amp;").replace("<", "&lt;").replace(">", "&gt;")


def over_frequency(rows: pd.DataFrame, limits: dict[str, Sequence[Bounds]]) -> Figure:
    """|Z| and ESR over frequency, each with its band of ±2 u, and the limits that judge them."""
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(WIDTH_IN, HEIGHT_IN))
        left, right = figure.subplots(1, 2, gridspec_kw=MARGINS)
        thin = _thinned(rows.sort_values("frequency_hz", kind="stable"))
        _banded(left, thin, "frequency_hz", "impedance_ohm", limits)
        _banded(right, thin, "frequency_hz", "rs_ohm", limits)
        left.set_ylabel("|Z| (Ω)")
        right.set_ylabel("ESR (Ω)")
        for axes in (left, right):
            axes.set_xscale("log")
            axes.set_yscale("log", nonpositive="clip")
            axes.set_xlabel("frequency (Hz)")
            axes.minorticks_off()
            for axis in (axes.xaxis, axes.yaxis):
                axis.set_major_formatter(EngFormatter(sep=""))  # 10k, as the trade writes
    return figure


def over_bias(rows: pd.DataFrame, value: str, limits: dict[str, Sequence[Bounds]]) -> Figure:
    """C or L, and D, over DC bias at the stage's frequency nearest to its limits."""
    bias = "bias_set_a" if rows["bias_set_a"].abs().max() > 0 else "bias_set_v"
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(WIDTH_IN, HEIGHT_IN))
        left, right = figure.subplots(1, 2, gridspec_kw=MARGINS)
        for _, group in rows.groupby("frequency_hz"):
            thin = _thinned(group.sort_values(bias, kind="stable"))
            _banded(left, thin, bias, value, {})
            _banded(right, thin, bias, "d", limits)
        left.set_ylabel("C (F)" if value.startswith("c") else "L (H)")
        right.set_ylabel("D")
        for axes in (left, right):
            axes.set_xlabel("bias (A)" if bias.endswith("a") else "bias (V)")
    return figure


def over_time(rows: pd.DataFrame, value: str) -> Figure:
    """One quantity over the time of the run, for a stage that stays at one point."""
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(WIDTH_IN, HEIGHT_IN))
        axes = figure.subplots(gridspec_kw=MARGINS)
        _banded(axes, _thinned(rows), "elapsed_s", value, {})
        axes.set_xlabel("time since the run began (s)")
        axes.set_ylabel(value)
    return figure


def of_lot(
    names: Sequence[str], values: Sequence[float], spans: Sequence[float], tolerances: Any
) -> Figure:
    """Each part's deviation from its nominal value in percent, with U, and its tolerance."""
    height = max(1.2, 0.22 * len(names) + 0.7)
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(WIDTH_IN, height))
        foot = 0.55 / height
        axes = figure.subplots(
            gridspec_kw={"left": 0.12, "right": 0.98, "bottom": foot, "top": 0.98}
        )
        rows = np.arange(len(names))[::-1]
        for row, (low, high) in zip(rows, tolerances, strict=True):
            if np.isfinite(low) and np.isfinite(high):
                axes.plot([low, high], [row, row], color="0.8", linewidth=6, solid_capstyle="butt")
        shown = np.clip(values, -EDGE_PCT, EDGE_PCT)
        inside = np.abs(values) < EDGE_PCT
        reach = np.where(inside, np.minimum(spans, EDGE_PCT), 0.0)
        axes.errorbar(shown, rows, xerr=reach, fmt="o", markersize=3, color="black", capsize=2)
        axes.plot(shown[~inside], rows[~inside], marker="X", linestyle="none", color="black")
        axes.set_xlim(-1.05 * EDGE_PCT, 1.05 * EDGE_PCT)
        axes.set_yticks(rows, names)
        axes.set_xlabel(
            "deviation from nominal (%); grey: tolerance; a cross at the edge: beyond it"
        )
        axes.axvline(0, color="0.4", linewidth=0.8)
    return figure


def _thinned(rows: pd.DataFrame) -> pd.DataFrame:
    if len(rows) <= MOST_POINTS:
        return rows
    return rows.iloc[np.linspace(0, len(rows) - 1, MOST_POINTS).astype(int)]


def _banded(
    axes: Any, rows: pd.DataFrame, x: str, y: str, limits: dict[str, Sequence[Bounds]]
) -> None:
    at, value = rows[x].to_numpy(float), rows[y].to_numpy(float)
    u = rows[f"u_{y}"].to_numpy(float)
    axes.plot(at, value, marker="o", markersize=2.5, color="black")
    axes.fill_between(at, value - 2 * u, value + 2 * u, alpha=0.25, color="tab:blue", linewidth=0)
    for bounds in limits.get(y, ()):
        for edge, marker in ((bounds.low, "^"), (bounds.high, "v")):
            if edge is None:
                continue
            if bounds.at is None:
                axes.axhline(edge, color="tab:red", linestyle="--", linewidth=0.9)
            else:
                axes.plot([bounds.at], [edge], marker=marker, color="tab:red", linestyle="none")
