"""Palette and small drawing tools that the panels of the figure share. Nothing here touches Matplotlib's global state."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from caval import units
from caval.recording import Signal
from caval.roles import PRESSURE_ROLES
from caval.vocabulary import WAVES

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from caval.result import Result

__all__ = [
    "INK", "LETTER_PT", "MARGIN_NOTE", "PALE", "ROLE_INK", "SHADE", "SOFT", "clock", "dark", "draw_mark", "length_text", "letters",
    "limits", "merged", "plain", "read_role", "shade", "spread", "ticks",
]

INK = "#1F2933"
"""Text."""
SOFT = "#66727F"
"""Axes, units, second thoughts."""
PALE = "#E3E8EC"
"""Grid."""
SHADE = "#ECE7DF"
"""Stretches that carry no marks."""
ROLE_INK = {"ecg": "#4A5560", "cvp": "#22405E", "abp": "#9C4A4A"}
LETTER_PT = 9.5
MARGIN_NOTE = 8.0
"""Size in points of what is read second."""


def dark(color: str, share: float = 0.25) -> str:
    """`color` mixed with black, so that a letter of it is legible on white."""
    parts = [int(color[i : i + 2], 16) for i in (1, 3, 5)]
    return "#" + "".join(f"{round(p * (1 - share)):02x}" for p in parts)


def plain(ax: Axes, *, grid: str = "y") -> None:
    """White ground, thin soft axes, no frame above and right."""
    ax.set_facecolor("white")
    for side, spine in ax.spines.items():
        spine.set_visible(side in ("left", "bottom"))
        spine.set_color(SOFT)
        spine.set_linewidth(0.6)
    ax.tick_params(labelsize=MARGIN_NOTE, colors=SOFT, length=3, width=0.6)
    if grid:
        ax.grid(True, axis=grid, color=PALE, linewidth=0.7)  # type: ignore[arg-type]
    ax.set_axisbelow(True)


def read_role(result: Result, role: str, start_s: float, stop_s: float) -> Signal:
    """A stretch of the channel in `role`, pressures in mmHg; nothing else of the record is read."""
    signal = result.recording.channel(result.roles[role]).signal(max(start_s, 0.0), stop_s)
    if role not in PRESSURE_ROLES:
        return signal
    unit = result.run.get("units", {}).get(signal.label, signal.unit)
    factor = units.mmhg_per_unit(unit, channel=signal.label)
    return Signal(signal.values * factor, signal.sampling_rate, signal.start_s, signal.label, "mmHg")


def limits(values: NDArray[np.float64], *, below: float = 0.08, above: float = 0.08, least: float = 1.0) -> tuple[float, float]:
    """Axis limits round the finite values, a share of their spread beyond them; ``(0, 1)`` when there are none."""
    finite = values[np.isfinite(values)]
    if not len(finite):
        return 0.0, 1.0
    low, high = float(finite.min()), float(finite.max())
    middle, spread_ = (low + high) / 2, max(high - low, least)
    return middle - spread_ * (0.5 + below), middle + spread_ * (0.5 + above)


def clock(duration_s: float, *, fine: bool = False) -> tuple[Callable[[float, Any], str], str, Sequence[float]]:
    """How to write times of a record that long, in seconds when `fine`: ``(formatter, unit, steps of good ticks in seconds)``."""
    if duration_s <= 600:
        return lambda t, _=None: f"{t:g}", "s", (0.1, 0.2, 0.5, 1, 2, 5, 10, 15, 30, 60, 120)
    if duration_s <= 5400:
        return lambda t, _=None: f"{int(t) // 60}:{int(t) % 60:02d}", "min:s", (1, 2, 5, 10, 30, 60, 120, 300, 600, 900)
    return (
        lambda t, _=None: f"{int(t) // 3600}:{int(t) // 60 % 60:02d}" + (f":{int(t) % 60:02d}" if int(t) % 60 else ""),
        "h:min:s" if fine else "h:min",
        (1, 2, 5, 10, 30, 60, 300, 600, 900, 1800, 3600, 7200, 14400, 28800, 86400),
    )


def length_text(seconds: float) -> str:
    """A duration in words: ``1 h 5 min``."""
    whole = round(seconds)
    if whole < 60:
        return f"{seconds:.3g} s"
    hours, minutes, rest = whole // 3600, whole // 60 % 60, whole % 60
    return " ".join(f"{n} {unit}" for n, unit in ((hours, "h"), (minutes, "min"), (rest, "s")) if n)


def ticks(start_s: float, stop_s: float, steps: Sequence[float], most: int = 12) -> NDArray[np.float64]:
    """Round times between two, at most about `most`."""
    step = next((s for s in steps if (stop_s - start_s) / s <= most), steps[-1])
    return np.arange(np.ceil(start_s / step), np.floor(stop_s / step + 1e-9) + 1) * step


def merged(spans: pd.DataFrame, channel: str, *, closer_s: float = 0.0) -> list[tuple[float, float, str]]:
    """Spans of a channel as ``(start, stop, kind)``, those of one kind that lie closer than `closer_s` made one."""
    found: list[tuple[float, float, str]] = []
    mine = spans[spans["channel"] == channel]
    for kind, rows in mine.groupby("kind", sort=False):
        start = rows["onset_s"].to_numpy(float)
        order = np.argsort(start, kind="stable")
        start = start[order]
        stop = np.maximum.accumulate(start + rows["duration_s"].to_numpy(float)[order])
        first = np.flatnonzero(np.r_[True, start[1:] > stop[:-1] + closer_s])
        last = np.r_[first[1:] - 1, len(start) - 1]
        found += [(float(start[a]), float(stop[b]), str(kind)) for a, b in zip(first, last, strict=True)]
    return sorted(found)


def shade(
    ax: Axes, spans: Iterable[tuple[float, float, str]], *, inside: tuple[float, float], above: bool = False, at_top: bool = True
) -> None:
    """Shade the stretches and write what each is where the word has room; `above` covers lines drawn across."""
    pixels_per_s = ax.get_window_extent().width / (inside[1] - inside[0])
    taken = -np.inf
    for start, stop, kind in spans:
        start, stop = max(start, inside[0]), min(stop, inside[1])
        if stop <= start:
            continue
        least = 1.5 / pixels_per_s  # a short stretch in a long record still shows as a hairline
        ax.axvspan(start, max(stop, start + least), color=SHADE, linewidth=0, zorder=3.5 if above else 0.5)
        width = 6.0 * len(kind) + 6
        place = start * pixels_per_s + 3
        if taken < place and place + width < inside[1] * pixels_per_s:
            y, side = (1.0, "top") if at_top else (0.0, "bottom")
            ax.annotate(
                kind, (start, y), xycoords=ax.get_xaxis_transform(), xytext=(3, -3 if at_top else 2), textcoords="offset points", va=side,
                fontsize=MARGIN_NOTE, color="#8A7B63", zorder=5, annotation_clip=True,
            )
            taken = place + width


def draw_mark(ax: Axes, wave: str, state: str, time: NDArray, value: NDArray, *, size: float = 34.0) -> None:
    """Marks of one wave and state: clear filled, weak open, fused smaller and hatched."""
    if not len(time):
        return
    color = WAVES[wave].color
    style: dict[str, Any] = {"s": size, "linewidths": 1.3, "zorder": 4}
    if state == "clear":
        style |= {"facecolors": color, "edgecolors": "white", "linewidths": 0.7}
    elif state == "fused":
        style |= {"facecolors": "white", "edgecolors": color, "hatch": "//////", "s": size * 0.62, "linewidths": 0.9}
    else:
        style |= {"facecolors": "white", "edgecolors": color}
    ax.scatter(time, value, **style)


def letters(ax: Axes, items: Sequence[tuple[float, float, str]], *, points: float = LETTER_PT) -> None:
    """Write the letter of each ``(x, y, wave)`` above peaks and below nadirs, farther out where two would touch. Set the limits first."""
    from matplotlib.patheffects import withStroke

    halo = [withStroke(linewidth=2.2, foreground="white")]
    to_pixels = ax.transData.transform
    dpi = ax.figure.dpi if ax.figure is not None else 100.0
    high = points * dpi / 72.0
    placed: list[tuple[float, float, float]] = []  # centre x, centre y, width, in pixels
    for x, y, wave in sorted(items):
        up = 1.0 if WAVES[wave].is_peak else -1.0
        px, py = to_pixels((x, y))
        width = 0.62 * high + 2
        shift = 0.95 * high
        while any(abs(px - ox) < (width + ow) / 2 and abs(py + up * shift - oy) < 0.95 * high for ox, oy, ow in placed[-8:]):
            shift += 0.5 * high
        placed.append((px, py + up * shift, width))
        ax.annotate(
            wave, (x, y), xytext=(0, up * shift * 72.0 / dpi), textcoords="offset points", ha="center", va="center_baseline",
            fontsize=points, fontweight="bold", color=dark(WAVES[wave].color), zorder=5, path_effects=halo,
            annotation_clip=True,
        )


def spread(places: Mapping[str, float], apart: float) -> dict[str, float]:
    """The places moved as little as needed so that neighbours are `apart`."""
    names = sorted(places, key=lambda k: places[k])
    at = [places[n] for n in names]
    for _ in range(60):
        for i in range(len(at) - 1):
            lack = apart - (at[i + 1] - at[i])
            if lack > 0:
                at[i] -= lack / 2
                at[i + 1] += lack / 2
    return dict(zip(names, at, strict=True))
