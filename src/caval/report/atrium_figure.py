"""The picture of the way back: pairs of volume and compliance that explain a wave."""

from __future__ import annotations

from textwrap import fill
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import ArrayLike, NDArray

from caval.model.atrium import Explanation, wave_height
from caval.model.compliance import cutoff
from caval.report import _ink
from caval.report.figure import FOOTER
from caval.vocabulary import WAVES

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["atrium_figure"]

_LEVELS = (0.5, 0.8, 0.95)
_ALPHAS = (0.85, 0.50, 0.25)
_HEIGHTS = (0.5, 1, 2, 5, 10, 20, 50, 100)


def atrium_figure(explanation: Explanation, *, title: str = "", truth: tuple[float, float] | None = None) -> Figure:
    """Draw what explains a wave.

    The main panel has volume moved across and effective compliance up, both in equal ratios, so that pairs of one wave height lie on a
    line; thin lines are heights in mmHg. Grey is what the trace alone allows at 95 %, the dashed outline what all else that is known
    allows; colour is what both leave, at 50, 80 and 95 %. The curves in the margins are profile likelihoods along either axis, dashed of
    what else is known and coloured of everything together, with the 95 % range underneath.

    Parameters
    ----------
    explanation : Explanation
    title : str
        A line above; the statement of the explanation stands below it.
    truth : (float, float), optional
        A pair known from elsewhere (ml, ml/mmHg), drawn as a cross.

    Returns
    -------
    matplotlib.figure.Figure
        8.6 by 8.6 inches at 120 dpi, on an Agg canvas of its own: no window, no global state.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    drawn = Figure(figsize=(8.6, 8.6), dpi=120, facecolor="white")
    FigureCanvasAgg(drawn)
    grid = drawn.add_gridspec(
        2, 2, width_ratios=[1, 0.19], height_ratios=[0.19, 1], left=0.095, right=0.975, top=0.865, bottom=0.105, wspace=0.035, hspace=0.035,
    )
    main = drawn.add_subplot(grid[1, 0])
    above, beside = drawn.add_subplot(grid[0, 0], sharex=main), drawn.add_subplot(grid[1, 1], sharey=main)
    color = WAVES[explanation.wave].color
    _draw_pairs(main, explanation, color)
    told = color if explanation.agrees else ""
    if truth is not None:
        main.plot(*truth, marker="x", color=_ink.INK, markersize=9, markeredgewidth=2.0, zorder=6)
        main.annotate(
            "truth", truth, xytext=(10, -12), textcoords="offset points", fontsize=9.5, fontweight="bold", color=_ink.INK, zorder=6,
        )
    others = explanation.deviance - explanation.trace_deviance
    _draw_margin(
        above, explanation.volume_ml, explanation.volume_deviance, others.min(axis=0), explanation.volume_range_ml,
        explanation.volume_bounds, "ml", told, upright=False,
    )
    _draw_margin(
        beside, explanation.compliance_ml_per_mmhg, explanation.compliance_deviance, others.min(axis=1),
        explanation.compliance_range_ml_per_mmhg, explanation.compliance_bounds, "ml/mmHg", told, upright=True,
    )
    head = title or f"What volume, into what compliance, makes this {explanation.wave} wave?"
    drawn.text(0.095, 0.972, head, fontsize=13.5, fontweight="bold", color=_ink.INK, ha="left", va="top")
    drawn.text(0.095, 0.937, fill(explanation.statement, 106), fontsize=9.2, color=_ink.INK, ha="left", va="top", linespacing=1.4)
    _write_legend(main, explanation, color)
    drawn.text(0.095, 0.014, FOOTER, fontsize=7.5, color=_ink.SOFT, ha="left", va="bottom")
    return drawn


def _draw_pairs(ax: Axes, explanation: Explanation, color: str) -> None:
    from matplotlib.ticker import FormatStrFormatter, LogLocator, NullLocator

    volume, compliance = explanation.volume_ml, explanation.compliance_ml_per_mmhg
    ax.set_xscale("log")
    ax.set_yscale("log")
    near = explanation.is_bounded and explanation.agrees
    ax.set_xlim(*_seen(volume, explanation.volume_range_ml, near))
    ax.set_ylim(*_seen(compliance, explanation.compliance_range_ml_per_mmhg, near))
    _ink.plain(ax, grid="both")
    for axis in (ax.xaxis, ax.yaxis):
        axis.set_major_locator(LogLocator(subs=(1, 2, 5)))
        axis.set_major_formatter(FormatStrFormatter("%g"))
        axis.set_minor_locator(NullLocator())
    edge = np.sqrt(cutoff(0.95))
    seen_volume, seen_compliance = np.geomspace(*ax.get_xlim(), 300), np.geomspace(*ax.get_ylim(), 300)
    height = wave_height(seen_volume, seen_compliance[:, None], stiffening_per_ml=explanation.stiffening_per_ml)
    away = np.clip((height - explanation.height_mmhg.value) / explanation.height_mmhg.sd, -9, 9)  # signed, so that its contours are smooth
    ax.contourf(seen_volume, seen_compliance, away, levels=[-edge, edge], colors=["#D5DBE1"], antialiased=True, zorder=1.5)
    total = np.sqrt(explanation.deviance)
    if explanation.known:
        others = explanation.deviance - explanation.trace_deviance
        others = np.sqrt(np.maximum(others - others.min(), 0))
        ax.contour(volume, compliance, others, levels=[edge], colors=[_ink.SOFT], linewidths=1.1, linestyles=[(0, (4, 2))], zorder=2.2)
    if explanation.agrees and explanation.known:
        inner = 0.0
        for level, alpha in zip(_LEVELS, _ALPHAS, strict=True):
            outer = np.sqrt(cutoff(level))
            ax.contourf(volume, compliance, total, levels=[inner, outer], colors=[color], alpha=alpha, zorder=2.5)
            inner = outer
        ax.contour(volume, compliance, total, levels=[edge], colors=[_ink.dark(color)], linewidths=1.3, zorder=3)
    _draw_heights(ax, explanation)
    ax.set_xlabel("volume moved, ml", fontsize=10.5, color=_ink.INK)
    at_foot = " at the foot of the wave" if explanation.stiffening_per_ml else ""
    ax.set_ylabel(f"effective compliance{at_foot}, ml/mmHg", fontsize=10.5, color=_ink.INK)


def _seen(axis: NDArray[np.float64], ends: tuple[float, float], bounded: bool) -> tuple[float, float]:
    """Limits of an axis: four times as far as the range either side when it is bounded, else all that was looked at."""
    if not bounded:
        return float(axis[0]), float(axis[-1])
    return max(float(axis[0]), ends[0] / 4), min(float(axis[-1]), ends[1] * 4)


def _draw_heights(ax: Axes, explanation: Explanation) -> None:
    """Thin lines of equal wave height, each with its mmHg along it near the upper or right edge."""
    from matplotlib.patheffects import withStroke

    halo = [withStroke(linewidth=2.6, foreground="white")]
    (left, right), (low, high) = ax.get_xlim(), ax.get_ylim()
    volume = np.geomspace(left, right, 400)
    at_one = wave_height(volume, 1.0, stiffening_per_ml=explanation.stiffening_per_ml)
    to_pixels = ax.transData.transform
    for height in _HEIGHTS:
        line = at_one / height
        seen = (line >= low) & (line <= high)
        if seen.sum() < 60:
            continue
        x, y = volume[seen], line[seen]
        ax.plot(x, y, color=_ink.SOFT, linewidth=0.55, alpha=0.75, zorder=2)
        place = max(len(x) - 34, 3)
        (x0, y0), (x1, y1) = to_pixels((x[place - 3], y[place - 3])), to_pixels((x[place + 2], y[place + 2]))
        ax.text(
            x[place], y[place], f"{height:g} mmHg", fontsize=7.8, color=_ink.SOFT, ha="center",
            va="center", rotation=float(np.degrees(np.arctan2(y1 - y0, x1 - x0))), rotation_mode="anchor", path_effects=halo, zorder=4,
        )


def _draw_margin(
    ax: Axes, axis: NDArray[np.float64], profile: NDArray[np.float64], others: NDArray[np.float64], ends: tuple[float, float],
    bounds: tuple[bool, bool], unit: str, color: str, *, upright: bool,
) -> None:
    """Profile likelihood along one axis, with its 95 % range; `upright` for the axis that goes up. No colour where nothing fits."""

    def turned(along: ArrayLike, across: ArrayLike) -> tuple[ArrayLike, ArrayLike]:
        return (across, along) if upright else (along, across)

    known = np.exp(-0.5 * (others - others.min()))
    if color:
        everything = np.exp(-0.5 * (profile - profile.min()))
        fill_between = ax.fill_betweenx if upright else ax.fill_between
        fill_between(axis, 0, everything, color=color, alpha=0.25, linewidth=0)
        ax.plot(*turned(axis, everything), color=_ink.dark(color), linewidth=1.4)
        ax.plot(*turned(ends, [-0.16, -0.16]), color=_ink.dark(color), linewidth=3.2, solid_capstyle="butt")
    if known.min() < 0.999:
        ax.plot(*turned(axis, known), color=_ink.SOFT, linewidth=1.1, linestyle=(0, (4, 2)))
    (ax.set_xlim if upright else ax.set_ylim)(-0.30, 1.45)
    ax.axis("off")
    words, low, high = "not bounded", axis[0], axis[-1]
    if not color:
        words = "nothing fits"
    elif all(bounds):
        words, (low, high) = f"{_whole(ends[0])}–{_whole(ends[1])} {unit}", ends
    elif any(bounds):
        words, (low, high) = f"above {_whole(ends[0])} {unit}" if bounds[0] else f"below {_whole(ends[1])} {unit}", ends
    middle = float(np.sqrt(low * high))
    x, y = (1.28, middle) if upright else (middle, 1.28)
    ax.text(
        x, y, words, rotation=-90 if upright else 0, fontsize=9.5, fontweight="bold", ha="center",
        va="center", color=_ink.dark(color) if color else _ink.SOFT,
    )


def _whole(value: float) -> str:
    return f"{value:.0f}" if value >= 10 else f"{value:.2g}"


def _write_legend(ax: Axes, explanation: Explanation, color: str) -> None:
    from matplotlib.lines import Line2D
    from matplotlib.patches import Patch

    handles: list[Patch | Line2D] = [Patch(facecolor="#D5DBE1", label="trace alone, 95 %")]
    if explanation.agrees and explanation.known:
        handles += [
            Patch(facecolor=color, alpha=alpha, label=f"all that is known, {100 * level:g} %")
            for level, alpha in zip(_LEVELS[::-1], _ALPHAS[::-1], strict=True)
        ]
    if explanation.known:
        handles.append(Line2D([], [], color=_ink.SOFT, linestyle=(0, (4, 2)), linewidth=1.1, label="known without the trace, 95 %"))
    ax.legend(
        handles=handles, loc="upper left", frameon=True, framealpha=0.94, edgecolor="none", fontsize=8.5, labelcolor=_ink.INK,
        title="pairs that explain the wave", title_fontproperties={"size": 8.5, "weight": "bold"}, alignment="left",
    ).set_zorder(7)
